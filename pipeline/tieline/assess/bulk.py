"""Bulk partition coefficients of a crystal assemblage from the D's of its phases and their proportions."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import special

from tieline.statistics.least_squares import FloatArray
from tieline.statistics.mass_balance import weighted_sum

if TYPE_CHECKING:
    import pandas as pd

BULK_COLUMNS = (
    "experiment",
    "beta",
    "element",
    "bulk_D",
    "bulk_D_sd",
    "bulk_D_lo",
    "bulk_D_hi",
    "kind",
    "reason",
)


def bulk_partition(
    partition: pd.DataFrame,
    modes: Mapping[str, tuple[tuple[str, ...], FloatArray, FloatArray]],
    beta: str,
    beta_relative_sd: Mapping[tuple[str, str], float] | None = None,
    confidence: float = 0.95,
) -> pd.DataFrame:
    """Bulk D = sum X D / sum X over the crystals of each experiment and element, X by mass.

    partition: columns as in the stage file. modes: experiment -> phases, their proportions (k,) and covariance (k, k), beta
    left aside where it is among them. beta_relative_sd: (experiment, element) -> relative standard deviation of beta's mean,
    which all D's over it share; without it the D's are taken as independent and the error of the bulk D is too small.

    Intervals use Student's t with the degrees of freedom of Welch (1947, Biometrika 34:28), the proportions' being many.
    `kind` is value; bounds where a phase's D is a limit, its interval then running from none of it to its limit; or
    undetermined, with the reason, where a phase that is present has no D.
    """
    import pandas as pd

    rows: list[dict[str, Any]] = []
    groups: dict[tuple[str, str], dict[str, dict[str, Any]]] = {}
    names = ["experiment", "element", "alpha", "kind", "D", "D_sd", "D_hi", "dof"]
    for row in partition.loc[partition["beta"] == beta, names].to_dict("records"):
        groups.setdefault((row["experiment"], row["element"]), {})[row["alpha"]] = row
    for (experiment, element), group in sorted(groups.items()):
        if experiment not in modes:
            continue
        phases, proportions, covariance = modes[experiment]
        crystals = [index for index, name in enumerate(phases) if name != beta and proportions[index] > 0]
        keys = {"experiment": experiment, "beta": beta, "element": element}
        shared = (beta_relative_sd or {}).get((experiment, element), 0.0)
        found = _bulk(
            group, [phases[index] for index in crystals], np.asarray(proportions)[crystals],
            np.asarray(covariance)[np.ix_(crystals, crystals)], shared, confidence,
        )  # fmt: skip
        rows.append(keys | found)
    return pd.DataFrame(rows, columns=list(BULK_COLUMNS))


def _bulk(
    group: dict[str, dict[str, Any]],
    phases: list[str],
    weights: FloatArray,
    covariance: FloatArray,
    shared: float,
    confidence: float,
) -> dict[str, Any]:
    if not phases:
        return _nothing("no crystals")
    absent = [phase for phase in phases if phase not in group]
    if absent:
        return _nothing(f"no D for {', '.join(absent)}")
    rows = [group[phase] for phase in phases]
    bad = [row for row in rows if row["kind"] not in ("value", "upper-limit")]
    if bad:
        return _nothing("; ".join(f"D of {row['alpha']} is {row['kind']}" for row in bad))
    limits = np.array([row["kind"] == "upper-limit" for row in rows])
    measured, measured_sd, highest_D = (
        np.array([row[name] for row in rows], dtype=np.float64) for name in ("D", "D_sd", "D_hi")
    )
    D, sd = np.where(limits, 0.0, measured), np.where(limits, 0.0, measured_sd)
    variances = np.outer(D, D) * shared**2
    np.fill_diagonal(variances, np.maximum(sd**2, np.diag(variances)))
    mean, error = weighted_sum(weights, covariance, D, variances)
    dof = np.array([row["dof"] if row["dof"] > 0 else np.inf for row in rows], dtype=np.float64)
    parts = (weights / np.sum(weights) * sd) ** 2
    quantile = _quantile(error**2, float(np.sum(parts**2 / dof)), confidence)
    if not limits.any():
        return {
            "bulk_D": mean, "bulk_D_sd": error, "bulk_D_lo": max(mean - quantile * error, 0.0),
            "bulk_D_hi": mean + quantile * error, "kind": "value", "reason": "",
        }  # fmt: skip
    most = np.where(limits, highest_D, D)
    highest, highest_error = weighted_sum(weights, covariance, most, variances)
    return {
        "bulk_D": np.nan, "bulk_D_sd": np.nan, "bulk_D_lo": max(mean - quantile * error, 0.0),
        "bulk_D_hi": highest + quantile * highest_error, "kind": "bounds",
        "reason": f"D of {', '.join(np.array(phases)[limits])} is a limit",
    }  # fmt: skip


def _quantile(variance: float, parts: float, confidence: float) -> float:
    """Half-width in standard deviations; parts: sum of the squared variances of the parts over their degrees of freedom."""
    tail = 0.5 + 0.5 * confidence
    return float(special.stdtrit(variance**2 / parts, tail) if parts > 0 else special.ndtri(tail))


def _nothing(reason: str) -> dict[str, Any]:
    blank = dict.fromkeys(("bulk_D", "bulk_D_sd", "bulk_D_lo", "bulk_D_hi"), np.nan)
    return {**blank, "kind": "undetermined", "reason": reason}
