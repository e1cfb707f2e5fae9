"""Exchange coefficients K_D with their uncertainty: from the means of the spots, or from two partition coefficients."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import special

from tieline.assess.evidence import PAIR_KEYS, Variances
from tieline.statistics.groups import BoolArray, FloatArray, divide
from tieline.statistics.means import MeanEstimate
from tieline.statistics.paired_ratios import paired_ratio
from tieline.statistics.ratios import ratio_interval
from tieline.statistics.student import student_quantile

if TYPE_CHECKING:
    import pandas as pd

LIMITED = "a mean contains values known only as limits: from the two D, as if independent"
MEAN_COLUMNS = ("mean", "se", "counting_se")
_SMALLEST = 1e-9  # share of a variance that rounding can make out of nothing


@dataclass(frozen=True)
class ExchangeCoefficient:
    """K_D with its standard deviation and interval; nan and a reason where it cannot be told."""

    value: float
    sd: float
    low: float
    high: float
    reason: str = ""


@dataclass(frozen=True)
class Coefficients:
    """K_D of K pairs of phases, (K,) each; nan where there is none, and a reason where it is no plain value."""

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray
    dof: FloatArray
    reason: npt.NDArray[np.object_]


def exchange_coefficient(
    D_first: float,
    D_second: float,
    covariance: np.ndarray,
    *,
    dof: float = np.inf,
    ferrous_factor: float = 1.0,
    ferrous_factor_relative_sd: float = 0.0,
    confidence: float = 0.95,
) -> ExchangeCoefficient:
    """K_D = (first/second in alpha) / (first/second in beta) = factor · D_first / D_second.

    covariance (2, 2) of the two D. Atomic weights cancel: K_D by mass and by amount of substance are the same number.
    ferrous_factor, (1 - ferric share in alpha) / (1 - ferric share in beta), turns total iron into Fe2+ where `first` is
    iron. The interval is Fieller's (1954, J. R. Stat. Soc. B 16:175) for correlated D; it is open, and the result
    "cannot tell", where D_second is not significantly above zero.
    """
    if not (np.isfinite(D_first) and np.isfinite(D_second) and np.all(np.isfinite(covariance))):
        return _nothing("a partition coefficient or its error is missing")
    if D_first <= 0 or D_second <= 0 or np.any(np.diag(covariance) < 0):
        return _nothing("a partition coefficient is not above zero")
    a, b = ferrous_factor * D_first, D_second
    variance_a = ferrous_factor**2 * covariance[0, 0] + (a * ferrous_factor_relative_sd) ** 2
    joint, variance_b = ferrous_factor * covariance[0, 1], float(covariance[1, 1])
    tail = 0.5 + 0.5 * confidence
    t = float(special.stdtrit(dof, tail) if np.isfinite(dof) and dof > 0 else special.ndtri(tail))
    value = a / b
    sd = float(np.sqrt(max(variance_a - 2 * value * joint + value**2 * variance_b, 0.0))) / b
    square, middle, rest = b**2 - t**2 * variance_b, a * b - t**2 * joint, a**2 - t**2 * variance_a
    if square <= 0:
        return _nothing("the second partition coefficient is not significantly above zero")
    half = float(np.sqrt(max(middle**2 - square * rest, 0.0)))
    return ExchangeCoefficient(value, sd, max((middle - half) / square, 0.0), (middle + half) / square)


def _nothing(reason: str) -> ExchangeCoefficient:
    return ExchangeCoefficient(np.nan, np.nan, np.nan, np.nan, reason)


def coefficients(
    both: pd.DataFrame,
    variances: Mapping[tuple[str, str, str], Variances],
    elements: tuple[str, str],
    factor: FloatArray,
    factor_relative_sd: FloatArray,
    confidence: float,
) -> Coefficients:
    """K_D = factor · (first/second in alpha) / (first/second in beta) of every row of `both`.

    both: columns of `partition` for the two D, ending in `_first` and `_second`, with correlation_alpha, n_common_alpha and
    the same of beta: how the two elements vary together between the spots. Each phase's ratio of two means is an estimate
    of its own (`paired_ratio`), and K_D their ratio with the interval of every D (`ratio_interval`); errors of calibration
    and of internal standards enter as far as they are not common to both elements. The more certain of the two
    elements is divided by, so that K_D of the reversed pair is the reciprocal. Where a mean contains limits, K_D comes from
    the two D.
    """
    usable = np.ones(len(both), dtype=np.bool_)
    for name in ("mean_alpha_ppm", "mean_beta_ppm", "se_alpha_ppm", "se_beta_ppm"):
        for which in ("first", "second"):
            usable &= np.isfinite(both[f"{name}_{which}"].to_numpy(dtype=np.float64))
    covariance = _covariances(both, variances, elements)
    relative = np.hypot(_not_common(both, covariance), factor_relative_sd)
    straight = _by_means(both, ("first", "second"), relative, confidence, elements[1])
    reversed_ = _by_means(both, ("second", "first"), relative, confidence, elements[0])
    first, second = (
        np.hypot(*(_relative_se(both, side, which) for side in ("alpha", "beta")))
        for which in ("first", "second")
    )
    turned = second > first
    value = np.where(turned, divide(np.ones(len(both)), reversed_.value), straight.value)
    sd = np.where(turned, reversed_.sd * value**2, straight.sd)
    low = np.where(turned, _reciprocal(reversed_.high), straight.low)
    high = np.where(turned, _reciprocal(reversed_.low), straight.high)
    made = Coefficients(
        factor * value, factor * sd, factor * low, factor * high,
        np.where(turned, reversed_.dof, straight.dof), np.where(turned, reversed_.reason, straight.reason),
    )  # fmt: skip
    return _with_limits(made, ~usable, both, covariance, elements, factor, factor_relative_sd, confidence)


def _reciprocal(values: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        return np.asarray(1.0 / values)


def _relative_se(both: pd.DataFrame, side: str, which: str) -> FloatArray:
    mean, se = (both[f"{name}_{side}_ppm_{which}"].to_numpy(dtype=np.float64) for name in ("mean", "se"))
    return divide(se, np.abs(mean), np.inf)


def _by_means(
    both: pd.DataFrame, order: tuple[str, str], relative: FloatArray, confidence: float, below: str
) -> Coefficients:
    """The ratio of the phases' ratios order[0]/order[1]; below: the name of the element divided by."""
    ratios, sure = [], np.ones(len(both), dtype=np.bool_)
    for side in ("alpha", "beta"):
        top, bottom = (_estimate(both, side, which) for which in order)
        correlation = both[f"correlation_{side}"].to_numpy(dtype=np.float64)
        n_common = both[f"n_common_{side}"].to_numpy(dtype=np.int64)
        ratios.append(paired_ratio(top, bottom, correlation, n_common))
        t = student_quantile(np.where(bottom.dof > 0, bottom.dof, 1.0), 0.5 + 0.5 * confidence)
        # Of two values (t = 12.7) the counting alone can tell, as for every D.
        reach = np.where(bottom.dof > 1.5, t * np.sqrt(bottom.variance), 0.0)
        counted = special.ndtri(0.5 + 0.5 * confidence) * np.sqrt(np.nan_to_num(bottom.counting_variance))
        sure &= bottom.mean > np.maximum(reach, counted)
    found = ratio_interval(*ratios, u_alpha=relative, confidence=confidence)
    reason = np.where(sure, found.reason, f"{below} of a phase is not significantly above zero")
    value, sd, low, high = (
        np.where(sure, one, np.nan) for one in (found.value, found.sd, found.low, found.high)
    )
    return Coefficients(value, sd, low, high, found.dof, reason)


def _estimate(both: pd.DataFrame, side: str, which: str) -> MeanEstimate:
    mean, se, counting = (
        both[f"{name}_{side}_ppm_{which}"].to_numpy(dtype=np.float64) for name in MEAN_COLUMNS
    )
    dof = np.nan_to_num(both[f"dof_{side}_{which}"].to_numpy(dtype=np.float64))
    n = both[f"n_independent_{side}_{which}"].to_numpy(dtype=np.int64)
    return MeanEstimate(mean, se**2, counting**2, dof, n)


def _not_common(both: pd.DataFrame, covariance: FloatArray) -> FloatArray:
    """Relative standard uncertainty of K_D from calibrations and internal standards: what the two D do not share.

    covariance: of the two D, row by row.
    What is known of one D from few measurements counts by Student's quantile, as in the interval of that D.
    """
    parts, widening = [], np.ones(len(both))
    for which in ("first", "second"):
        D, D_sd, a, b = (
            both[f"{name}_{which}"].to_numpy(dtype=np.float64)
            for name in ("D", "D_sd", "shared_sd_alpha", "shared_sd_beta")
        )
        whole = divide(D_sd, np.abs(D)) ** 2
        spots = _relative_se(both, "alpha", which) ** 2 + _relative_se(both, "beta", which) ** 2
        factors = np.maximum(whole - spots, 0.0)
        factors = np.where(np.isfinite(factors) & (factors > _SMALLEST * whole), factors, 0.0)
        widening = np.fmax(widening, divide(np.nan_to_num(a) ** 2 + np.nan_to_num(b) ** 2, factors, 1.0))
        parts.append(factors)
    product = both["D_first"].to_numpy(dtype=np.float64) * both["D_second"].to_numpy(dtype=np.float64)
    shared = np.nan_to_num(divide(covariance, product, 0.0))
    return np.sqrt(np.maximum(parts[0] + parts[1] - 2.0 * shared, 0.0) * widening)


def _covariances(
    both: pd.DataFrame, variances: Mapping[tuple[str, str, str], Variances], elements: tuple[str, str]
) -> FloatArray:
    keys = zip(*(both[name] for name in PAIR_KEYS), strict=True)
    found = (variances.get(key, {}) for key in keys)
    return np.array([own.get(elements, own.get(elements[::-1], 0.0)) for own in found], dtype=np.float64)


def _with_limits(
    made: Coefficients,
    rows: BoolArray,
    both: pd.DataFrame,
    covariance: FloatArray,
    elements: tuple[str, str],
    factor: FloatArray,
    factor_relative_sd: FloatArray,
    confidence: float,
) -> Coefficients:
    """The rows whose means contain limits, from their two D; these are few."""
    numbers = [np.array(one) for one in (made.value, made.sd, made.low, made.high, made.dof)]
    reason = made.reason.copy()
    for row in np.flatnonzero(rows):
        own = both.iloc[row]
        bad = [
            f"D of {element} is {own[f'kind_{which}']}"
            for element, which in zip(elements, ("first", "second"), strict=True)
            if own[f"kind_{which}"] != "value"
        ]
        matrix = np.diag([own["D_sd_first"] ** 2, own["D_sd_second"] ** 2])
        matrix[0, 1] = matrix[1, 0] = covariance[row]
        dof = float(np.nanmin([np.inf, own["dof_first"], own["dof_second"]]))
        found = exchange_coefficient(
            own["D_first"], own["D_second"], matrix, dof=dof, ferrous_factor=float(factor[row]),
            ferrous_factor_relative_sd=float(factor_relative_sd[row]), confidence=confidence,
        )  # fmt: skip
        if bad:
            found = _nothing("; ".join(bad))
        reason[row] = found.reason or LIMITED
        for column, entry in zip(numbers, (found.value, found.sd, found.low, found.high, dof), strict=True):
            column[row] = entry
    value, sd, low, high, freedom = numbers
    return Coefficients(value, sd, low, high, freedom, reason)
