"""Bulk partition coefficients of a crystal assemblage from the D's of its phases and their proportions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtri

from tieline.assess.evidence import base_phase
from tieline.statistics.mass_balance import Mixture
from tieline.statistics.weighted_means import FloatArray, WeightedMeans, weighted_means

if TYPE_CHECKING:
    import pandas as pd

BULK_COLUMNS = (
    "experiment", "beta", "element", "bulk_D", "bulk_D_sd", "bulk_D_lo", "bulk_D_hi", "kind", "reason",
)  # fmt: skip
D_COLUMNS = ("D", "D_sd", "D_lo", "D_hi", "common_sd")


@dataclass(frozen=True)
class Modes:
    """Mass fractions (k,) of the phases of one experiment, their covariance (k, k), and the quantile of their interval."""

    phases: tuple[str, ...]
    proportions: FloatArray
    covariance: FloatArray
    quantile: float


def modes_of_mixture(phases: tuple[str, ...], mixture: Mixture) -> Modes:
    """The proportions of a mass balance. One that came out as zero is uncertain by its upper limit."""
    at_zero = ~np.isfinite(mixture.sd)
    covariance = np.where(at_zero[:, None] | at_zero[None, :], 0.0, mixture.covariance)
    limit = np.where(at_zero, mixture.high / mixture.quantile, 0.0)
    return Modes(phases, mixture.proportions, covariance + np.diag(limit**2), mixture.quantile)


def stated_modes(given: Mapping[str, float], relative_sd: float, confidence: float) -> Modes:
    """Proportions known from elsewhere, with one relative standard uncertainty."""
    amounts = np.array(list(given.values()))
    return Modes(
        tuple(given), amounts, np.diag((relative_sd * amounts) ** 2), float(ndtri(0.5 + 0.5 * confidence))
    )


def common_sd(partition: pd.DataFrame) -> FloatArray:
    """Relative standard uncertainty that every D has in common with those of the other crystals over the same beta.

    The mean of beta and the factors that do not cancel against it; where beta was measured in another session than alpha,
    alpha's factors too, for the crystals of one session share them. Never more than that of D.
    """
    beta = partition["se_beta_ppm"] / partition["mean_beta_ppm"].abs()
    squares = beta.fillna(0.0) ** 2 + partition["shared_sd_beta"].fillna(0.0) ** 2
    elsewhere = partition["batch_alpha"].astype(str) != partition["batch_beta"].astype(str)
    squares += np.where(elsewhere, partition["shared_sd_alpha"].fillna(0.0) ** 2, 0.0)
    whole = (partition["D_sd"] / partition["D"].abs()).fillna(np.inf)
    relative = np.minimum(np.sqrt(squares.to_numpy(dtype=np.float64)), whole.to_numpy(dtype=np.float64))
    return np.asarray(relative)


def bulk_partition(partition: pd.DataFrame, modes: Mapping[str, Modes]) -> pd.DataFrame:
    """Bulk D = sum X D / sum X over the crystals of each experiment, for every beta and element, X by mass.

    partition: columns as in the stage file, and `common_sd`. modes: by experiment, beta left aside where it is among them.
    The interval joins those of the D's and of the proportions (`weighted_means`); D's over one beta share its errors.

    `kind` is value; bounds where a phase's D is a limit, the interval then running from none of it to its limit; or
    undetermined, with the reason, where a phase that is present, or may be, has no D.
    """
    import pandas as pd

    tables = [
        _experiment(own, modes[str(experiment)], str(experiment), str(beta))
        for (experiment, beta), own in partition.groupby(["experiment", "beta"], sort=True, observed=True)
        if experiment in modes
    ]
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=list(BULK_COLUMNS))


def _experiment(own: pd.DataFrame, given: Modes, experiment: str, beta: str) -> pd.DataFrame:
    """The bulk D of every element of one experiment over one beta."""
    import pandas as pd

    uncertain = (given.proportions > 0) | (np.diag(given.covariance) > 0)
    crystals = [place for place, name in enumerate(given.phases) if name != beta and uncertain[place]]
    phases = [given.phases[place] for place in crystals]
    in_parts = {base_phase(alpha) for alpha in own["alpha"].unique() if base_phase(alpha) != alpha}
    named = [f"{name} as a whole, only for its parts" if name in in_parts else name for name in phases]
    elements = sorted(own["element"].unique())
    table = pd.DataFrame({"experiment": experiment, "beta": beta, "element": elements})
    if not phases or not given.proportions[crystals].sum() > 0:
        return table.assign(
            **dict.fromkeys(BULK_COLUMNS[3:7], np.nan), kind="undetermined", reason="no crystals"
        )
    rows = own[own["alpha"].isin(phases)]
    place = (
        np.searchsorted(elements, rows["element"].to_numpy(dtype=object)),
        np.array([phases.index(phase) for phase in rows["alpha"]], dtype=np.int64),
    )
    kind = np.full((len(elements), len(phases)), None, dtype=object)
    kind[place] = rows["kind"].to_numpy(dtype=object)
    parts = {name: np.full(kind.shape, np.nan) for name in D_COLUMNS}
    for name, matrix in parts.items():
        matrix[place] = rows[name].to_numpy(dtype=np.float64)
    limit = kind == "upper-limit"
    known = ((kind == "value") & np.isfinite(parts["D_hi"])) | limit
    made = known.all(axis=1)
    numbers = np.full((len(elements), 4), np.nan)
    numbers[made] = _interval(given, crystals, limit[made], {name: one[made] for name, one in parts.items()})
    bounds = made & limit.any(axis=1)
    numbers[bounds, :2] = np.nan
    return table.assign(
        **dict(zip(BULK_COLUMNS[3:7], numbers.T, strict=True)),
        kind=np.where(bounds, "bounds", np.where(made, "value", "undetermined")),
        reason=[_reason(named, *row) for row in zip(kind, limit, known, strict=True)],
    )


def _interval(
    given: Modes, crystals: list[int], limit: FloatArray, parts: dict[str, FloatArray]
) -> FloatArray:
    """Bulk D, sd and ends of its interval, (elements, 4): at the bottom a limit counts as none, at the top as its height."""
    D, sd, low, high, common = (parts[name] for name in D_COLUMNS)
    relative = np.where(limit, 1.0, common * D / np.where(sd > 0, sd, np.inf))
    correlation = relative[:, :, None] * relative[:, None, :]
    diagonal = np.arange(len(crystals))
    correlation[:, diagonal, diagonal] = 1.0
    weights, covariance = given.proportions[crystals], given.covariance[np.ix_(crystals, crystals)]

    def standing(at: FloatArray) -> WeightedMeans:
        """With every limit standing at a height of its own, known exactly."""
        values, own_low, own_high = (np.where(limit, at, one) for one in (D, low, high))
        own_sd = np.where(limit, 0.0, sd)
        return weighted_means(
            weights, covariance, values, own_sd, own_low, own_high, correlation, given.quantile
        )

    bottom, top = standing(np.zeros_like(D)), standing(high)
    return np.stack([bottom.value, bottom.sd, np.maximum(bottom.low, 0.0), top.high], axis=1)


def _reason(phases: list[str], kind: FloatArray, limit: FloatArray, known: FloatArray) -> str:
    """Why the bulk D of one element is no plain value; empty where it is."""
    absent = [phase for phase, own in zip(phases, kind, strict=True) if not isinstance(own, str)]
    if absent:
        return f"no D for {', '.join(absent)}"
    if not known.all():
        bad = zip(phases, kind, known, strict=True)
        return "; ".join(
            f"D of {phase} is {own if own != 'value' else 'without an interval'}"
            for phase, own, good in bad
            if not good
        )
    return f"D of {', '.join(np.array(phases)[limit])} is a limit" if limit.any() else ""
