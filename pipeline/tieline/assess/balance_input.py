"""What a mass balance is made of: the phases' means and the starting composition, as oxides, with their errors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from tieline.assess.evidence import base_phase
from tieline.chemistry.oxides import wt_percent_per_ppm
from tieline.statistics.least_squares import FloatArray

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Balance:
    """Oxide wt% of one experiment: start (m,), phases (m, k), with errors; why elements could not be used.

    shared_sd (g, m, k): the calibrations' part, one variable per g and element for all phases of a session.
    """

    elements: tuple[str, ...]
    phases: tuple[str, ...]
    start: FloatArray
    start_sd: FloatArray
    composition: FloatArray
    composition_sd: FloatArray
    shared_sd: FloatArray
    unusable: dict[str, str]


def collect(own: pd.DataFrame, given: pd.DataFrame, relative_sd: float) -> Balance:
    """Elements measured, with errors, in the start and in every phase."""
    start = given.set_index("element").sort_index()
    phases, elements = sorted(own["phase"].unique()), start.index.tolist()
    best = _most_certain(own[own["element"].isin(elements)], relative_sd)
    place = (
        start.index.get_indexer(best["element"]),
        np.searchsorted(phases, best["phase"].to_numpy(dtype=object)),
    )

    def laid_out(name: str) -> FloatArray:
        """One column as (elements, phases); NaN where there is no mean."""
        matrix = np.full((len(elements), len(phases)), np.nan)
        matrix[place] = best[name].to_numpy(dtype=np.float64)
        return matrix

    means, errors = laid_out("mean_ppm"), laid_out("error")
    start_sd = start["sd_ppm"].to_numpy(dtype=np.float64)
    unusable = _unusable(elements, phases, means, errors, start_sd)
    used = np.array([element not in unusable for element in elements], dtype=bool)
    names = [element for element, keep in zip(elements, used, strict=True) if keep]
    factor = wt_percent_per_ppm(names)[:, None]
    composition, composition_sd = means[used] * factor, errors[used] * factor
    shared = _by_session(composition * laid_out("calibration")[used], laid_out("calibration_key")[used])
    begin = np.stack([start["value_ppm"].to_numpy(dtype=np.float64), start_sd], axis=1)[used] * factor
    certain = (begin[:, 1] == 0) & np.all(composition_sd == 0, axis=1) & np.all(shared == 0, axis=(0, 2))
    unusable |= {element: "no error anywhere" for element, sure in zip(names, certain, strict=True) if sure}
    kept = ~certain
    return Balance(
        tuple(element for element, keep in zip(names, kept, strict=True) if keep), tuple(phases),
        begin[kept, 0], begin[kept, 1], composition[kept], composition_sd[kept], shared[:, kept], unusable,
    )  # fmt: skip


def whole_phases(means: pd.DataFrame) -> pd.DataFrame:
    """The means with the parts of a phase joined into one: how much of it is rim and how much core nobody knows."""
    import pandas as pd

    whole = means["phase"].map(base_phase)
    is_part = (whole != means["phase"]) & ~whole.isin(set(means["phase"]))
    if not is_part.any():
        return means[whole == means["phase"]]
    parts = means[is_part].assign(phase=whole[is_part])
    parts["variance"] = parts["se_ppm"] ** 2
    # Batch and analyte are not told apart here: the calibration's key does that.
    groups = parts.groupby(["phase", "element", "calibration_key"], sort=True, dropna=False)
    joined = groups.agg(
        mean_ppm=("mean_ppm", "mean"), between=("mean_ppm", "var"), variance=("variance", "mean"),
        n=("mean_ppm", "count"), calibration_sd=("calibration_sd", "first"), own_sd=("own_sd", "max"),
    ).reset_index()  # fmt: skip
    joined["se_ppm"] = np.sqrt(np.fmax(joined["variance"], joined["between"]) / joined["n"])
    return pd.concat([means[whole == means["phase"]], joined], ignore_index=True)


def _most_certain(own: pd.DataFrame, relative_sd: float) -> pd.DataFrame:
    """One mean per phase and element; calibration: its relative sd, error: in ppm, of what no other phase shares."""
    calibration = own["calibration_sd"].fillna(relative_sd)
    size = own["mean_ppm"].abs()
    spots = own["se_ppm"].where(own["se_ppm"].notna() | (calibration == 0), 0.0)
    error = np.hypot(spots, own["own_sd"] * size)
    ranked = own.assign(calibration=calibration, error=error, total=np.hypot(error / size, calibration))
    return ranked.sort_values("total", kind="stable").drop_duplicates(["phase", "element"])


def _unusable(
    elements: list[str], phases: list[str], means: FloatArray, errors: FloatArray, start_sd: FloatArray
) -> dict[str, str]:
    """Element of the start -> why it cannot enter. means, errors: (elements, phases)."""
    found: dict[str, str] = {}
    for row, element in enumerate(elements):
        missing = [phase for phase, mean in zip(phases, means[row], strict=True) if np.isnan(mean)]
        if missing or not phases:
            found[element] = f"not measured in {', '.join(missing) or 'any phase'}"
        elif np.isnan(errors[row]).any():
            found[element] = "a mean has no standard error"
        elif not start_sd[row] >= 0:
            found[element] = "the starting composition has no error"
    return found


def _by_session(sd: FloatArray, keys: FloatArray) -> FloatArray:
    """The errors sd (m, k) laid out by session (g, m, k): entries of a row with one key stand in one layer."""
    layers = np.zeros((max(sd.shape[1], 1), *sd.shape))
    for row, own in enumerate(keys):
        layer = np.unique(own, return_inverse=True)[1].reshape(-1)
        layers[layer, row, np.arange(len(own))] = sd[row]
    used = layers.any(axis=(1, 2))
    return layers[used]
