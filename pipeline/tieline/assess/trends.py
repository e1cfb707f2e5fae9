"""How D changes across experiments: with temperature, pressure, composition or any other condition."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, DIFFERS, check
from tieline.statistics.york import FITTED, Line, line_without_each, predict_line, predict_new, york_line

if TYPE_CHECKING:
    import pandas as pd

TREND_COLUMNS = (
    "alpha", "beta", "element", "condition", "n_points", "n_left_out", "verdict", "reason", "intercept", "intercept_se",
    "intercept_se_scatter", "slope", "slope_se", "slope_se_scatter", "covariance", "chi_square", "dof", "mswd", "p_value",
    "scale", "slope_lo", "slope_hi",
)  # fmt: skip
POINT_COLUMNS = (
    "alpha", "beta", "element", "condition", "experiment", "x", "x_sd", "ln_D", "ln_D_sd", "sigmas", "slope_without",
    "slope_se_without", "predicted_without", "predicted_lo", "predicted_hi", "deleted_sigmas",
)  # fmt: skip
PREDICTION_COLUMNS = (
    "alpha", "beta", "element", "condition", "x", "outside", "D", "D_lo", "D_hi", "new_lo", "new_hi",
)  # fmt: skip
_LARGEST_CORRELATION = 0.99


@dataclass(frozen=True)
class TrendTables:
    """Side tables of the trends against one condition, and rows of `assess`."""

    trends: pd.DataFrame
    points: pd.DataFrame
    predictions: pd.DataFrame
    checks: pd.DataFrame


def trend_tables(
    partition: pd.DataFrame,
    condition: str,
    x: pd.Series[float],
    x_sd: pd.Series[float] | None = None,
    confidence: float = 0.95,
    *,
    without_each: bool = True,
    predict: Sequence[float] = (),
    common: tuple[str, str] | None = None,
) -> TrendTables:
    """ln D against one condition for every pair and element with two experiments or more: trends, points, checks.

    x, x_sd: indexed by experiment; no x_sd means exact. The line has errors in both variables (`york_line`). Points tell,
    where `without_each`, what the line is without them and what it then predicts for them. Limits cannot enter a line: they
    are left out and counted. The check says whether one line describes the points; the slope's interval is in the trend.
    predict: conditions at which to give D. common: (phase, element) of the mean that the condition is: D made with it has
    an error correlated with that of the condition.
    """
    import pandas as pd

    trends: list[dict[str, Any]] = []
    points: list[dict[str, Any]] = []
    predictions: list[dict[str, Any]] = []
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
        log_d, log_sd = np.log(D), D_sd / D
        correlation = _correlation(common, keys, across, log_d, across_sd, log_sd)
        arrays = (across, log_d, across_sd, log_sd, correlation)
        line = york_line(*arrays)
        predictions.extend(keys | row for row in _prediction_rows(line, across, predict, confidence))
        trends.append(keys | _trend_row(line, len(used), len(known) - len(used), confidence))
        points.extend(keys | row for row in _point_rows(experiments, arrays, line, confidence, without_each))
        checks.append(_trend_check(keys, line, len(used), len(known) - len(used), confidence))
    return TrendTables(
        pd.DataFrame(trends, columns=list(TREND_COLUMNS)),
        pd.DataFrame(points, columns=list(POINT_COLUMNS)),
        pd.DataFrame(predictions, columns=list(PREDICTION_COLUMNS)),
        pd.DataFrame(checks, columns=list(CHECK_COLUMNS)),
    )


def _correlation(
    common: tuple[str, str] | None,
    keys: Mapping[str, str],
    x: np.ndarray,
    log_d: np.ndarray,
    x_sd: np.ndarray,
    log_sd: np.ndarray,
) -> np.ndarray:
    """Correlation of the errors of condition and ln D, where both rest on one mean: ln D = ln alpha - ln beta."""
    sign = 0.0
    if common is not None and common[1] == keys["element"]:
        sign = float(common[0] == keys["alpha"]) - float(common[0] == keys["beta"])
    shared = np.divide(x_sd, np.abs(x) * log_sd, out=np.zeros_like(log_d), where=(x != 0) & (log_sd > 0))
    return np.asarray(sign * np.minimum(shared, _LARGEST_CORRELATION))


def _prediction_rows(
    line: Line, across: np.ndarray, predict: Sequence[float], confidence: float
) -> list[dict[str, Any]]:
    """D at each condition asked for: the line's, and a further experiment's."""
    if line.verdict != FITTED or not len(predict):
        return []
    x = np.asarray(predict, dtype=np.float64)
    on_line, new = (made(line, x, 0.0, confidence) for made in (predict_line, predict_new))
    outside = (x < across.min()) | (x > across.max())
    columns = (
        x,
        outside,
        *(np.exp(one) for one in (on_line.value, on_line.low, on_line.high, new.low, new.high)),
    )
    names = PREDICTION_COLUMNS[4:]
    return [
        dict(zip(names, row, strict=True)) for row in zip(*(one.tolist() for one in columns), strict=True)
    ]


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
    across, log_d, across_sd, log_sd, _correlations = arrays
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
            "deleted_sigmas": (log_d[index] - guess.value[0]) / np.sqrt(guess.sd[0] ** 2 + other.scale * log_sd[index] ** 2),
        }  # fmt: skip
    return rows


def _trend_check(
    keys: dict[str, Any], line: Line, count: int, left_out: int, confidence: float
) -> dict[str, Any]:
    subject = f"ln D({keys['element']}) against {keys['condition']}"
    pair = {"alpha": keys["alpha"], "beta": keys["beta"]}
    number = "1 experiment" if left_out == 1 else f"{left_out} experiments"
    limits = f" {number} left out, with a D that is a limit or undetermined." if left_out else ""
    if line.verdict != FITTED:
        return check("trend", pair, subject, CANNOT_TELL, f"No line: {line.reason}.{limits}")
    half = line.quantile(confidence) * np.sqrt(line.scale) * line.slope_se
    words = (
        f"{count} experiments, slope {line.slope:.4g} ± {line.slope_se:.2g} (stated errors), "
        f"{line.slope - half:.4g} to {line.slope + half:.4g} at {100 * confidence:g}%; York et al. (2004).{limits}"
    )
    if line.dof == 0:
        return check(
            "trend", pair, subject, CANNOT_TELL, f"Two points make any line. {words}", value=line.slope, sd=line.slope_se
        )  # fmt: skip
    verdict = DIFFERS if line.scale > 1 else CONSISTENT
    more = "" if verdict == CONSISTENT else " Other conditions count too: no evidence against equilibrium."
    words = f"MSWD {line.mswd:.3g}, p {line.p_value:.2g} that one line describes them.{more} {words}"
    return check("trend", pair, subject, verdict, words, value=line.slope, sd=line.slope_se)
