"""How D changes across experiments: with temperature, pressure, composition, and with time at the same conditions."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, DIFFERS, check
from tieline.statistics.york import FITTED, Line, line_without_each, predict_line, york_line

if TYPE_CHECKING:
    import pandas as pd

TREND_COLUMNS = (
    "alpha", "beta", "element", "condition", "n_points", "n_left_out", "verdict", "reason", "intercept", "intercept_se",
    "intercept_se_scatter", "slope", "slope_se", "slope_se_scatter", "covariance", "chi_square", "dof", "mswd", "p_value",
    "scale", "slope_lo", "slope_hi",
)  # fmt: skip
POINT_COLUMNS = (
    "alpha", "beta", "element", "condition", "experiment", "x", "x_sd", "ln_D", "ln_D_sd", "sigmas", "slope_without",
    "slope_se_without", "predicted_without", "predicted_lo", "predicted_hi",
)  # fmt: skip


def inverse_temperature(
    temperature_C: np.ndarray, temperature_sd: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """10⁴/T in 1/K and its standard deviation, from °C."""
    kelvin = np.asarray(temperature_C, dtype=np.float64) + 273.15
    return 1e4 / kelvin, 1e4 * np.asarray(temperature_sd, dtype=np.float64) / kelvin**2


def trend_tables(
    partition: pd.DataFrame,
    condition: str,
    x: pd.Series[float],
    x_sd: pd.Series[float] | None = None,
    confidence: float = 0.95,
    *,
    without_each: bool = True,
) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """ln D against one condition for every pair and element with two experiments or more: trends, points, checks.

    x, x_sd: indexed by experiment; no x_sd means exact. The line has errors in both variables (`york_line`). Points tell,
    where `without_each`, what the line is without them and what it then predicts for them. Limits cannot enter a line: they
    are left out and counted. The check says whether one line describes the points; the slope's interval is in the trend.
    """
    import pandas as pd

    trends: list[dict[str, Any]] = []
    points: list[dict[str, Any]] = []
    checks: list[dict[str, Any]] = []
    at = {str(experiment): float(value) for experiment, value in x.dropna().items()}
    at_sd = (
        {} if x_sd is None else {str(experiment): float(value) for experiment, value in x_sd.dropna().items()}
    )
    for (alpha, beta, element), known in _by_element(partition, at):
        used = [row for row in known if row["kind"] == "value" and row["D"] > 0 and row["D_sd"] > 0]
        if len(known) < 2:
            continue
        keys = {"alpha": alpha, "beta": beta, "element": element, "condition": condition}
        experiments = [row["experiment"] for row in used]
        across = np.array([at[experiment] for experiment in experiments])
        across_sd = np.array([at_sd.get(experiment, 0.0) for experiment in experiments])
        D, D_sd = (np.array([row[name] for row in used], dtype=np.float64) for name in ("D", "D_sd"))
        arrays = (across, np.log(D), across_sd, D_sd / D)
        line = york_line(*arrays)
        trends.append(keys | _trend_row(line, len(used), len(known) - len(used), confidence))
        points.extend(keys | row for row in _point_rows(experiments, arrays, line, confidence, without_each))
        checks.append(_trend_check(keys, line, len(used), len(known) - len(used), confidence))
    return (
        pd.DataFrame(trends, columns=list(TREND_COLUMNS)),
        pd.DataFrame(points, columns=list(POINT_COLUMNS)),
        pd.DataFrame(checks, columns=list(CHECK_COLUMNS)),
    )


def _by_element(
    partition: pd.DataFrame, at: Mapping[str, float]
) -> list[tuple[tuple[str, str, str], list[dict[str, Any]]]]:
    """(alpha, beta, element) -> its rows of experiments whose condition is known, everything in order."""
    names = ["experiment", "alpha", "beta", "element", "kind", "D", "D_sd"]
    groups: dict[tuple[str, str, str], list[dict[str, Any]]] = {}
    for row in partition[names].to_dict("records"):
        if row["experiment"] in at:
            groups.setdefault((row["alpha"], row["beta"], row["element"]), []).append(row)
    return [(key, sorted(rows, key=lambda row: row["experiment"])) for key, rows in sorted(groups.items())]


def _trend_row(line: Line, count: int, left_out: int, confidence: float) -> dict[str, Any]:
    names = set(TREND_COLUMNS) - {"n_points", "n_left_out", "slope_lo", "slope_hi"}
    half = line.quantile(confidence) * np.sqrt(line.scale) * line.slope_se
    return {name: getattr(line, name) for name in sorted(names) if hasattr(line, name)} | {
        "n_points": count, "n_left_out": left_out, "slope_lo": line.slope - half, "slope_hi": line.slope + half,
    }  # fmt: skip


def _point_rows(
    experiments: list[str], arrays: tuple[np.ndarray, ...], line: Line, confidence: float, without_each: bool
) -> list[dict[str, Any]]:
    across, log_d, across_sd, log_sd = arrays
    rows: list[dict[str, Any]] = [
        {
            "experiment": experiment, "x": across[index], "x_sd": across_sd[index], "ln_D": log_d[index],
            "ln_D_sd": log_sd[index], "sigmas": line.weighted_sigmas[index],
        }
        for index, experiment in enumerate(experiments)
    ]  # fmt: skip
    for index, other in enumerate(line_without_each(*arrays) if without_each else ()):
        guess = predict_line(other, across[[index]], across_sd[[index]], confidence)
        rows[index] |= {
            "slope_without": other.slope, "slope_se_without": other.slope_se, "predicted_without": guess.value[0],
            "predicted_lo": guess.low[0], "predicted_hi": guess.high[0],
        }  # fmt: skip
    return rows


def _trend_check(
    keys: dict[str, Any], line: Line, count: int, left_out: int, confidence: float
) -> dict[str, Any]:
    subject = f"ln D({keys['element']}) against {keys['condition']}"
    pair = {"alpha": keys["alpha"], "beta": keys["beta"]}
    limits = f" {left_out} experiments left out: their D is a limit or undetermined." if left_out else ""
    if line.verdict != FITTED:
        return check("trend", pair, subject, CANNOT_TELL, f"No line: {line.reason}.{limits}")
    half = line.quantile(confidence) * np.sqrt(line.scale) * line.slope_se
    words = (
        f"{count} experiments, slope {line.slope:.4g} ± {line.slope_se:.2g} (stated errors), "
        f"{line.slope - half:.4g} to {line.slope + half:.4g} at {confidence:.0%}; York et al. (2004).{limits}"
    )
    if line.dof == 0:
        return check(
            "trend", pair, subject, CANNOT_TELL, f"Two points make any line. {words}", value=line.slope, sd=line.slope_se
        )  # fmt: skip
    verdict = DIFFERS if line.scale > 1 else CONSISTENT
    words = f"MSWD {line.mswd:.3g}, p {line.p_value:.2g} that one line describes them. {words}"
    return check("trend", pair, subject, verdict, words, value=line.slope, sd=line.slope_se)


def approach_checks(
    partition: pd.DataFrame, conditions: pd.DataFrame, duration: str = "duration_h", confidence: float = 0.95
) -> pd.DataFrame:
    """Does D still change with the length of the run, among runs at the same conditions? Rows of the `assess` table.

    conditions: indexed by experiment; every column but `duration` and the columns ending in `_sd` must be equal for two runs
    to belong together. value: change of ln D per factor e in duration, from the weighted line through ln D against ln
    duration. "consistent": no change at this confidence, the detail says how large a change would have been seen; "cannot
    tell" for fewer than two durations. D that no longer changes shows a steady state, no more.
    """
    import pandas as pd

    rows: list[dict[str, Any]] = []
    if duration not in conditions.columns:
        return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))
    same = [name for name in conditions.columns if name != duration and not str(name).endswith("_sd")]
    timed = conditions[conditions[duration] > 0]
    groups = timed.groupby(same, sort=True, dropna=False) if same else [((), timed)]
    for at, runs in groups:
        if len(runs) < 2:
            continue
        label = ", ".join(f"{name} {value:g}" if isinstance(value, float) else f"{name} {value}"
                          for name, value in zip(same, at if isinstance(at, tuple) else (at,), strict=True))  # fmt: skip
        own = partition[partition["experiment"].isin(runs.index)]
        log_time = np.log(runs[duration].astype(float))
        for (alpha, beta, element), group in own.groupby(
            ["alpha", "beta", "element"], sort=True, observed=True
        ):
            rows.append(_approach_check(group, log_time, f"{element} at {label or 'all runs'}",
                                        {"alpha": alpha, "beta": beta}, confidence))  # fmt: skip
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _approach_check(
    group: pd.DataFrame, log_time: pd.Series[float], subject: str, pair: dict[str, Any], confidence: float
) -> dict[str, Any]:
    used = group[(group["kind"] == "value") & (group["D"] > 0) & (group["D_sd"] > 0)].sort_values(
        "experiment"
    )
    D = used["D"].to_numpy(dtype=np.float64)
    time = used["experiment"].map(log_time).to_numpy(dtype=np.float64)
    line = york_line(time, np.log(D), np.zeros(len(D)), used["D_sd"].to_numpy(dtype=np.float64) / D)
    if line.verdict != FITTED:
        return check("approach", pair, subject, CANNOT_TELL, "Fewer than two durations with a D.")
    sd = float(np.sqrt(line.scale) * line.slope_se)
    half = line.quantile(confidence) * sd
    span = float(np.ptp(time))
    words = (
        f"{len(D)} runs over a factor {np.exp(span):.3g} in duration: D changes by {np.expm1(line.slope * span):+.1%} "
        f"({np.expm1((line.slope - half) * span):+.1%} to {np.expm1((line.slope + half) * span):+.1%}) from the shortest "
        "to the longest. D that no longer changes is a steady state, no proof of equilibrium."
    )
    verdict = DIFFERS if abs(line.slope) > half else CONSISTENT
    return check(
        "approach", pair, subject, verdict, words, value=line.slope, sd=sd, expected_lo=0.0, expected_hi=0.0
    )
