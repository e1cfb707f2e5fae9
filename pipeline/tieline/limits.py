"""What D can be when a phase mean contains values known only as limits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    IntArray,
    TextArray,
    common_keys,
    group_rows,
    labels,
    matches,
    numbers,
)
from tieline.settings.results import PartitionSettings
from tieline.statistics.censored import censored_limits
from tieline.statistics.limits import MeanLimits, limits_ratio, mean_limits
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import RatioInterval

KEYS = ("experiment", "phase", "element", "technique", "batch", "analyte")


def lowest_limits(pair: pa.Table, limits: pa.Table) -> FloatArray:
    """The lowest limit among the values of every mean, NaN where a mean has none, shape (rows of pair,)."""
    lowest = np.full(pair.num_rows, np.inf)
    of_limits, of_means = common_keys((limits, pair), (KEYS, KEYS))
    value, mean = matches(of_limits, of_means)
    np.fmin.at(lowest, mean, numbers(limits, "limit_ppm")[value])
    return np.where(np.isfinite(lowest), lowest, np.nan)


def resolve_limits(
    pair: pa.Table,
    limits: pa.Table,
    sides: tuple[IntArray, IntArray],
    unshared: tuple[FloatArray, FloatArray],
    interval: RatioInterval,
    settings: PartitionSettings,
) -> tuple[RatioInterval, TextArray]:
    """The intervals with those of censored means put in, and how each interval was made.

    sides: rows of `pair` for alpha and beta of K D's; unshared: their relative uncertainties that do not
    cancel; interval: what the means alone gave.
    """
    how = _made_by(interval, pair, sides, settings)
    censored = numbers(pair, "n_limit_only") > 0
    affected = censored[sides[0]] | censored[sides[1]]
    if not affected.any():
        return interval, how
    wanted = np.zeros(pair.num_rows, dtype=np.bool_)
    for side in sides:
        wanted[side[affected]] = True
    known = _means_with_limits(pair, limits, censored, wanted, settings)
    alpha, beta = (known.take(side[affected]) for side in sides)
    u = np.hypot(unshared[0][affected], unshared[1][affected])
    result = limits_ratio(alpha, beta, u_relative=u, confidence=settings.confidence)
    how[affected] = np.where(result.kind == "undetermined", "none", "likelihood")
    return _replaced(interval, affected, result), how


def _made_by(
    interval: RatioInterval, pair: pa.Table, sides: tuple[IntArray, IntArray], settings: PartitionSettings
) -> TextArray:
    n = numbers(pair, "n_independent")
    two = (n[sides[0]] == 2) | (n[sides[1]] == 2)
    how = np.where(two, "gum-s1", settings.interval).astype(object)
    how[interval.kind == "undetermined"] = "none"
    return how


def _means_with_limits(
    pair: pa.Table, limits: pa.Table, censored: BoolArray, wanted: BoolArray, settings: PartitionSettings
) -> MeanLimits:
    """The wanted rows of `pair` as means with limits, from their likelihood or from their standard error."""
    plain = mean_limits(
        MeanEstimate(
            numbers(pair, "mean_ppm"),
            numbers(pair, "se_ppm") ** 2,
            numbers(pair, "counting_se_ppm") ** 2,
            np.where(wanted, np.nan_to_num(numbers(pair, "dof")), 0.0),
            np.asarray(numbers(pair, "n_independent"), dtype=np.int64),
        ),
        confidence=settings.confidence,
    )
    groups = group_rows([labels(limits, name) for name in KEYS])
    value, sigma, limit = (numbers(limits, f"{name}_ppm") for name in ("value", "sigma", "limit"))
    likelihood = censored_limits(
        value,
        sigma,
        limit,
        np.isnan(value),
        groups.code,
        groups.count,
        confidence=settings.confidence,
        limit_in_sigmas=settings.sigma_from_limit,
    )
    with_limits = np.flatnonzero(censored)
    of_limits, of_means = common_keys((limits, pair), (KEYS, KEYS))
    group, place = matches(of_limits[groups.first], of_means[with_limits])
    rows = with_limits[place]
    for name in ("mean", "low", "high", "n", "n_censored"):
        getattr(plain, name)[rows] = getattr(likelihood, name)[group]
    return plain


def _replaced(interval: RatioInterval, rows: BoolArray, by: RatioInterval) -> RatioInterval:
    changes = {}
    for name in ("value", "sd", "low", "high", "dof", "kind", "reason"):
        column = getattr(interval, name).copy()
        column[rows] = getattr(by, name)
        changes[name] = column
    return replace(interval, **changes)
