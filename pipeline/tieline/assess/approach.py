"""Does D still change with the length of the run, among runs at the same conditions?"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import special

from tieline.assess.consistency import holm
from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, DIFFERS, check
from tieline.statistics.york import FITTED, york_line

if TYPE_CHECKING:
    import pandas as pd


def runs_at_the_same_conditions(
    conditions: pd.DataFrame, duration: str, same: Sequence[str] = ()
) -> list[tuple[str, pd.DataFrame]]:
    """Groups of two experiments or more that differ in `duration` alone, each with its conditions in words.

    conditions: indexed by experiment, numbers and texts; same: the columns that must agree, all but `duration` and those
    ending in `_sd` where none is named.
    """
    if duration not in conditions.columns:
        return []
    named = [name for name in same if name in conditions.columns]
    columns = named or [
        name for name in conditions.columns if name != duration and not str(name).endswith("_sd")
    ]
    timed = conditions[conditions[duration] > 0]
    groups = timed.groupby(columns, sort=True, dropna=False) if columns else [((), timed)]
    found = []
    for at, runs in groups:
        if runs[duration].nunique() < 2:
            continue
        values = at if isinstance(at, tuple) else (at,)
        words = [_condition(name, value) for name, value in zip(columns, values, strict=True)]
        found.append((", ".join(words) or "all runs", runs))
    return found


def _condition(name: str, value: Any) -> str:
    return f"{name} {value:g}" if isinstance(value, float) else f"{name} {value}"


def approach_checks(
    partition: pd.DataFrame,
    conditions: pd.DataFrame,
    duration: str = "duration_h",
    same: Sequence[str] = (),
    confidence: float = 0.95,
) -> pd.DataFrame:
    """Rows of the `assess` table: the change of D with the length of the run.

    conditions, same: as for `runs_at_the_same_conditions`. value: change of ln D per factor e in duration, from the weighted
    line through ln D against ln duration. "consistent": no change at this confidence, with Holm's correction (1979, Scand. J.
    Stat. 6:65) over the elements of a pair at the same conditions; the detail says how large a change would have been seen.
    "cannot tell" for fewer than two durations. D that no longer changes shows a steady state, no more.
    """
    import pandas as pd

    rows: list[dict[str, Any]] = []
    for label, runs in runs_at_the_same_conditions(conditions, duration, same):
        own = partition[partition["experiment"].isin(runs.index)]
        log_time = np.log(runs[duration].astype(float))
        for (alpha, beta), group in own.groupby(["alpha", "beta"], sort=True, observed=True):
            rows += _pair_checks(group, log_time, label, {"alpha": alpha, "beta": beta}, confidence)
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _pair_checks(
    group: pd.DataFrame, log_time: pd.Series[float], label: str, pair: dict[str, Any], confidence: float
) -> list[dict[str, Any]]:
    """The elements of one pair of phases, judged together."""
    found = [
        (str(element), *_change(own, log_time, confidence))
        for element, own in group.groupby("element", sort=True, observed=True)
    ]
    changed = holm(np.array([p_value for _, _, _, p_value, _ in found]), 1 - confidence)
    rows = []
    for (element, slope, sd, p_value, words), differs in zip(found, changed, strict=True):
        verdict = (DIFFERS if differs else CONSISTENT) if np.isfinite(p_value) else CANNOT_TELL
        numbers = {} if np.isnan(slope) else {"expected_lo": 0.0, "expected_hi": 0.0}
        rows.append(
            check("approach", pair, f"{element} at {label}", verdict, words, value=slope, sd=sd, **numbers)
        )
    return rows


def _change(
    group: pd.DataFrame, log_time: pd.Series[float], confidence: float
) -> tuple[float, float, float, str]:
    """Change of ln D per unit of ln duration, its standard deviation, its p-value, and the same in words."""
    used = group[(group["kind"] == "value") & (group["D"] > 0) & (group["D_sd"] > 0)].sort_values(
        "experiment"
    )
    D = used["D"].to_numpy(dtype=np.float64)
    time = used["experiment"].map(log_time).to_numpy(dtype=np.float64)
    line = york_line(time, np.log(D), np.zeros(len(D)), used["D_sd"].to_numpy(dtype=np.float64) / D)
    if line.verdict != FITTED:
        return np.nan, np.nan, np.nan, "Fewer than two durations with a D."
    sd = float(np.sqrt(line.scale) * line.slope_se)
    half = line.quantile(confidence) * sd
    ratio = abs(line.slope) / sd
    p_value = 2.0 * float(special.stdtr(line.dof, -ratio) if line.scale > 1 else special.ndtr(-ratio))
    span = float(np.ptp(time))
    words = (
        f"{len(D)} runs over a factor {np.exp(span):.3g} in duration: D changes by {np.expm1(line.slope * span):+.1%} "
        f"({np.expm1((line.slope - half) * span):+.1%} to {np.expm1((line.slope + half) * span):+.1%}) from the shortest "
        f"to the longest, p {p_value:.2g}; the elements of the pair judged together. D that no longer changes is a steady "
        "state, no proof of equilibrium."
    )
    return line.slope, sd, p_value, words
