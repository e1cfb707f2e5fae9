"""Ratios of means that are known by their limits, as means with censored values are.

- `MeanLimits`: K means with their limits, from `mean_limits` or `censored.censored_limits`
- `mean_limits(mean: MeanEstimate, *, confidence=0.95) -> MeanLimits` for a mean without censored values
- `limits_ratio(alpha: MeanLimits, beta: MeanLimits, *, u_relative=0.0, confidence=0.95) -> RatioInterval`
"""

from dataclasses import dataclass

import numpy as np
from scipy import special

from tieline.statistics.groups import BoolArray, FloatArray, IntArray, divide
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import (
    BOTH_AT_ZERO,
    DENOMINATOR_AT_ZERO,
    LOWER_LIMIT,
    NO_VALUES,
    NUMERATOR_AT_ZERO,
    ONE_VALUE,
    UNDETERMINED,
    UPPER_LIMIT,
    VALUE,
    RatioInterval,
)

BELOW_NUMERATOR = "numerator below its limit of detection"
BELOW_DENOMINATOR = "denominator below its limit of detection"
BELOW_BOTH = "both means below their limits of detection"
PARTLY_BELOW = "some values below the limit of detection: limits by profile likelihood"


@dataclass(frozen=True)
class MeanLimits:
    """K means known by their limits; shape (K,) each.

    `mean` is 0 and `low` 0 where every value is censored; `high` may be infinite; all are NaN where there
    is no interval. `n` is the number of values, `n_censored` that of the censored ones.
    """

    mean: FloatArray
    low: FloatArray
    high: FloatArray
    n: IntArray
    n_censored: IntArray

    def take(self, index: IntArray) -> "MeanLimits":
        """The same means picked or repeated by `index`, or by a mask."""
        return MeanLimits(
            self.mean[index], self.low[index], self.high[index], self.n[index], self.n_censored[index]
        )


def mean_limits(mean: MeanEstimate, *, confidence: float = 0.95) -> MeanLimits:
    """Limits of means without censored values: t limits, no narrower than counting allows, kept >= 0."""
    tail = 0.5 + 0.5 * confidence
    some = mean.dof > 0
    t = np.full(some.shape, np.nan)
    t[some] = special.stdtrit(mean.dof[some], tail)
    reach = np.fmax(t * np.sqrt(mean.variance), special.ndtri(tail) * np.sqrt(mean.counting_variance))
    reach = np.where(some, reach, np.nan)
    return MeanLimits(
        np.where(some, np.maximum(mean.mean, 0.0), np.nan),
        np.maximum(mean.mean - reach, 0.0),
        np.maximum(mean.mean + reach, 0.0),
        mean.n,
        np.zeros_like(mean.n),
    )


def limits_ratio(
    alpha: MeanLimits,
    beta: MeanLimits,
    *,
    u_relative: FloatArray | float = 0.0,
    confidence: float = 0.95,
) -> RatioInterval:
    """alpha / beta from the limits of the two means, by the method of variance estimates recovery.

    MOVER-R (Donner & Zou 2012, Stat. Methods Med. Res. 21:347, eq. 10-11). u_relative: relative standard
    uncertainty that the two means do not share (square root of the sum of squares of both), scalar or shape
    (K,).
    """
    relative = float(special.ndtri(0.5 + 0.5 * confidence)) * np.asarray(u_relative, dtype=np.float64)
    alpha, beta = (
        _with_calibration(alpha, np.where(beta.mean > 0, 0.0, relative)),
        _with_calibration(beta, relative),
    )
    low = _mover_low(alpha.mean, alpha.low, beta.mean, beta.high)
    high = divide(np.ones_like(low), _mover_low(beta.mean, beta.low, alpha.mean, alpha.high), np.inf)
    return _limits_result(alpha, beta, low, high, confidence)


def _with_calibration(limits: MeanLimits, relative: FloatArray) -> MeanLimits:
    """Limits drawn apart by an independent relative reach, in quadrature."""
    extra = relative * limits.mean
    low = limits.mean - np.hypot(limits.mean - limits.low, extra)
    high = limits.mean + np.hypot(limits.high - limits.mean, extra)
    return MeanLimits(limits.mean, np.maximum(low, 0.0), high, limits.n, limits.n_censored)


def _mover_low(a: FloatArray, a_low: FloatArray, b: FloatArray, b_high: FloatArray) -> FloatArray:
    """Lower limit of a / b, written without loss of digits; 0 where b has no upper limit."""
    numerator = a_low * (2.0 * a - a_low)
    bounded = np.isfinite(b_high)
    top = np.where(bounded, b_high, 0.0)
    inside = (a * b) ** 2 - numerator * top * (2.0 * b - top)
    low = divide(numerator, a * b + np.sqrt(np.maximum(inside, 0.0)), 0.0)
    return np.where(bounded, low, np.where(np.isnan(b_high), np.nan, 0.0))


def _limits_result(
    alpha: MeanLimits, beta: MeanLimits, low: FloatArray, high: FloatArray, confidence: float
) -> RatioInterval:
    """Kinds and reasons; the first condition that holds decides."""
    alpha_below, beta_below = alpha.n_censored == alpha.n, beta.n_censored == beta.n
    empty = (alpha.n == 0) | (beta.n == 0)
    unknown = np.isnan(alpha.mean) | np.isnan(beta.mean)
    cases: list[tuple[BoolArray, str, str]] = [
        (empty, UNDETERMINED, NO_VALUES),
        (unknown, UNDETERMINED, ONE_VALUE),
        (alpha_below & beta_below, UNDETERMINED, BELOW_BOTH),
        (~(low > 0) & ~np.isfinite(high), UNDETERMINED, BOTH_AT_ZERO),
        (beta_below, LOWER_LIMIT, BELOW_DENOMINATOR),
        (alpha_below, UPPER_LIMIT, BELOW_NUMERATOR),
        (~np.isfinite(high) & (beta.n_censored == 0), LOWER_LIMIT, DENOMINATOR_AT_ZERO),
        (~np.isfinite(high), LOWER_LIMIT, PARTLY_BELOW),
        (~(low > 0) & (alpha.n_censored == 0), UPPER_LIMIT, NUMERATOR_AT_ZERO),
        (~(low > 0), UPPER_LIMIT, PARTLY_BELOW),
    ]
    chosen = np.select([case for case, _, _ in cases], np.arange(len(cases)), default=len(cases))
    kind = np.array([kind for _, kind, _ in cases] + [VALUE], dtype=object)[chosen]
    reason = np.array([reason for _, _, reason in cases] + [PARTLY_BELOW], dtype=object)[chosen]
    is_value = kind == VALUE
    quantile = 2.0 * float(special.ndtri(0.5 + 0.5 * confidence))
    none = kind == UNDETERMINED
    return RatioInterval(
        value=np.where(is_value, divide(alpha.mean, beta.mean), np.nan),
        sd=np.where(
            is_value, (np.where(is_value, high, 0.0) - np.where(is_value, low, 0.0)) / quantile, np.nan
        ),
        low=np.where(none, np.nan, np.where(kind == UPPER_LIMIT, 0.0, low)),
        high=np.where(none, np.nan, np.where(kind == LOWER_LIMIT, np.inf, high)),
        dof=np.full(len(low), np.nan),
        kind=kind,
        reason=reason,
    )
