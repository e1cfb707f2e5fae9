"""Exchange coefficients of element pairs between two phases, beside the windows expected of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import (
    CANNOT_TELL,
    CHECK_COLUMNS,
    CONSISTENT,
    DIFFERS,
    PAIR_KEYS,
    base_phase,
    by_pair,
    check,
)
from tieline.assess.exchange_coefficients import Coefficients, coefficients
from tieline.assess.ferric import FerricShare
from tieline.chemistry.exchange import windows_for
from tieline.statistics.groups import FloatArray

if TYPE_CHECKING:
    import pandas as pd

MELTS = ("glass", "melt", "liquid")
_NUMBERS = (
    "K_D", "K_D_sd", "K_D_lo", "K_D_hi", "dof", "correlation_alpha", "correlation_beta", "ferric_share", "ferric_share_sd",
    "window_lo", "window_hi",
)  # fmt: skip
EXCHANGE_COLUMNS = (*PAIR_KEYS, "first", "second", *_NUMBERS, "window_source", "verdict")
Windows = Mapping[tuple[str, str, str | None], tuple[float, float, str]]


def ferrous_factor(alpha: FerricShare | None, beta: FerricShare | None) -> tuple[float, float]:
    """(1 - share in alpha) / (1 - share in beta) and its relative sd; a phase without a share counts as ferrous."""
    parts = [(1 - share.value, share.sd) if share else (1.0, 0.0) for share in (alpha, beta)]
    relative = np.sqrt(sum((sd / ferrous) ** 2 for ferrous, sd in parts))
    return parts[0][0] / parts[1][0], float(relative)


def exchange_tables(
    partition: pd.DataFrame,
    covariance: pd.DataFrame,
    correlations: pd.DataFrame | None = None,
    *,
    pairs: Sequence[tuple[str, str]] = (("Fe", "Mg"),),
    ferric: Mapping[tuple[str, str], FerricShare] | None = None,
    lacking: Mapping[tuple[str, str], str] | None = None,
    windows: Windows | None = None,
    melts: Sequence[str] = MELTS,
    confidence: float = 0.95,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """One row per experiment, pair of phases and pair of elements: the coefficients, and rows of the `assess` table.

    partition, covariance: columns as in the stage files of those names; correlations: those of `pair.correlations`, how
    elements vary together between the spots; without it they count as independent. ferric:
    (experiment, phase) -> share; phases without one are taken as free of Fe3+, and the detail says so; lacking: why a
    share that was asked for is not known: such coefficients are compared with no window. windows: (phase,
    "Fe-Mg", beta or None) -> low, high, source, in the place of the published ones; these, and those for no beta, hold
    for silicate melts and are used where beta is one. Where a window's source gives no range, or none is known, the
    verdict is "cannot tell".
    """
    import pandas as pd

    wanted = sorted({element for pair in pairs for element in pair})
    own = partition[partition["element"].isin(wanted)]
    variances = by_pair(covariance[covariance["element"].isin(wanted) & covariance["other"].isin(wanted)])
    rows: list[dict[str, Any]] = []
    checks: list[dict[str, Any]] = []
    for pair in pairs:
        both = _both(own, pair, correlations)
        shares = _shares(both, ferric or {}) if "Fe" in pair else []
        factor, relative = _ferrous_factors(shares, len(both), inverse=pair[0] != "Fe")
        found = coefficients(both, variances, pair, factor, relative, confidence)
        unknown = lacking if lacking and shares else {}
        made = _rows(both, pair, found, shares, unknown, windows or {}, melts, confidence)
        rows.extend(row for row, _ in made)
        checks.extend(one for _, one in made)
    order = [(*(row[key] for key in PAIR_KEYS), pairs.index((row["first"], row["second"]))) for row in rows]
    places = sorted(range(len(rows)), key=order.__getitem__)
    return (
        pd.DataFrame([rows[place] for place in places], columns=list(EXCHANGE_COLUMNS)),
        pd.DataFrame([checks[place] for place in places], columns=list(CHECK_COLUMNS)),
    )


def _both(partition: pd.DataFrame, pair: tuple[str, str], correlations: pd.DataFrame | None) -> pd.DataFrame:
    """One row per pair of phases that has D of both elements, with the correlations in its two phases."""
    parts = [partition[partition["element"] == element] for element in pair]
    both = parts[0].merge(parts[1], on=list(PAIR_KEYS), suffixes=("_first", "_second"))
    for side in ("alpha", "beta"):
        names = {"phase": side, "technique": f"technique_{side}_first", "batch": f"batch_{side}_first"}
        names |= {f"analyte_{which}": f"analyte_{side}_{which}" for which in ("first", "second")}
        if correlations is None:
            both = both.assign(**{f"correlation_{side}": 0.0, f"n_common_{side}": 0})
            continue
        of_pair = (correlations["element_first"] == pair[0]) & (correlations["element_second"] == pair[1])
        known = correlations[of_pair].rename(
            columns=names | {"correlation": f"correlation_{side}", "n_common": f"n_common_{side}"}
        )
        keys = ["experiment", *names.values()]
        both = both.merge(known[[*keys, f"correlation_{side}", f"n_common_{side}"]], on=keys, how="left")
        together = both[f"n_common_{side}"].notna()
        for name in ("technique", "batch"):
            together &= both[f"{name}_{side}_first"] == both[f"{name}_{side}_second"]
        both[f"correlation_{side}"] = both[f"correlation_{side}"].where(together, 0.0)
        both[f"n_common_{side}"] = both[f"n_common_{side}"].where(together, 0).astype(np.int64)
    return both


def _shares(
    both: pd.DataFrame, ferric: Mapping[tuple[str, str], FerricShare]
) -> list[tuple[FerricShare | None, FerricShare | None]]:
    """The ferric shares of alpha and beta, row by row."""
    keys = zip(both["experiment"], both["alpha"], both["beta"], strict=True)
    return [
        (ferric.get((experiment, alpha)), ferric.get((experiment, beta))) for experiment, alpha, beta in keys
    ]


def _ferrous_factors(
    shares: Sequence[tuple[FerricShare | None, FerricShare | None]], count: int, inverse: bool
) -> tuple[FloatArray, FloatArray]:
    """Factor on K_D and its relative sd, (count,) each; inverse: iron is the second element."""
    found = [ferrous_factor(*one) for one in shares] or [(1.0, 0.0)] * count
    factor, relative = np.array(found, dtype=np.float64).reshape(-1, 2).T
    return (1.0 / factor if inverse else factor), relative


def _rows(
    both: pd.DataFrame,
    pair: tuple[str, str],
    found: Coefficients,
    shares: Sequence[tuple[FerricShare | None, FerricShare | None]],
    lacking: Mapping[tuple[str, str], str],
    windows: Windows,
    melts: Sequence[str],
    confidence: float,
) -> list[tuple[dict[str, Any], dict[str, Any]]]:
    """A row of coefficients and one of checks for every row of `both`."""
    made = []
    labels = both[list(PAIR_KEYS)].to_dict("records")
    correlations = both[["correlation_alpha", "correlation_beta"]].to_numpy(dtype=np.float64)
    known: dict[tuple[str, str], tuple[float, float, str]] = {}
    for place, keys in enumerate(labels):
        phases = keys["alpha"], keys["beta"]
        if phases not in known:
            known[phases] = _window(*phases, "-".join(pair), windows, melts)
        low, high, source = known[phases]
        share = shares[place][1] if shares else None
        K_D, ends = found.value[place], (found.low[place], found.high[place])
        why = [lacking.get((keys["experiment"], phase), "") for phase in phases]
        verdict = CANNOT_TELL if any(why) else compare(*ends, low, high)
        numbers = (
            K_D, found.sd[place], *ends, found.dof[place], *correlations[place],
            share.value if share else np.nan, share.sd if share else np.nan, low, high,
        )  # fmt: skip
        words = _words(K_D, *ends, str(found.reason[place]), source, confidence)
        words += _assumption(phases, shares[place], why) if shares else ""
        if shares and not share and not any(why) and pair[0] == "Fe" and ends[1] < low:
            words += (
                f" A ferric share of {1 - ends[1] / low:.2f} in {keys['beta']} would bring K_D to its window."
            )
        row = {**keys, "first": pair[0], "second": pair[1], "window_source": source, "verdict": verdict}
        made.append(
            (
                row | dict(zip(_NUMBERS, numbers, strict=True)),
                check("exchange", keys, f"K_D({pair[0]}-{pair[1]})", verdict, words, value=K_D,
                      sd=found.sd[place], expected_lo=low, expected_hi=high),
            )
        )  # fmt: skip
    return made


def _assumption(
    phases: tuple[str, str], shares: tuple[FerricShare | None, FerricShare | None], lacking: Sequence[str]
) -> str:
    parts = [
        f"{phase} {share.value:.3f} ± {share.sd:.3f} ({share.source})"
        if share
        else f"{phase} {f'not known, {why}' if why else 'none assumed'}"
        for phase, share, why in zip(phases, shares, lacking, strict=True)
    ]
    return f" Ferric share: {'; '.join(parts)}."


def compare(found_low: float, found_high: float, low: float, high: float) -> str:
    """Consistent where the interval meets the window; cannot tell where it reaches beyond it on both sides.

    An interval without an upper end, infinite, can still lie above the window.
    """
    if np.isnan(found_low) or np.isnan(found_high) or not (np.isfinite(low) and np.isfinite(high)):
        return CANNOT_TELL
    if found_high < low or found_low > high:
        return DIFFERS
    return CANNOT_TELL if found_low < low and found_high > high else CONSISTENT


def _window(
    alpha: str,
    beta: str,
    exchange: str,
    given: Windows,
    melts: Sequence[str],
) -> tuple[float, float, str]:
    over_melt = base_phase(beta) in melts
    for denominator in (beta, base_phase(beta), *((None,) if over_melt else ())):
        own = given.get((base_phase(alpha), exchange, denominator))
        if own is not None:
            return own
    known = windows_for(base_phase(alpha), "Fe-Mg") if exchange == "Fe-Mg" and over_melt else ()
    for window in known:
        if window.half_width is not None:
            memory = "" if window.verified else "; from memory in part"
            source = f"{window.source}, {window.holds_for}{memory}"
            return window.centre - window.half_width, window.centre + window.half_width, source
    return np.nan, np.nan, ""


def _words(K_D: float, low: float, high: float, reason: str, source: str, confidence: float) -> str:
    window = f" Window: {source}." if source else " No window is known for this pair."
    if np.isnan(low):
        return f"No exchange coefficient with an interval: {reason}."
    if np.isnan(K_D):
        return f"K_D lies between {low:.4g} and {high:.4g} at {100 * confidence:g}%: {reason}.{window}"
    remark = f" {reason[0].upper()}{reason[1:]}." if reason else ""
    return f"K_D {K_D:.4g}, {low:.4g} to {high:.4g} at {100 * confidence:g}%; by mass and by amount alike.{remark}{window}"
