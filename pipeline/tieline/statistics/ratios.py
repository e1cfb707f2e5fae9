"""Ratios of two means with intervals that hold for few values.

Public, all ratios at once (every array of shape (K,); `MeanEstimate` comes from
`PhaseMeans.estimate(index)`):

- `ratio_interval(alpha, beta, *, u_alpha=0.0, u_beta=0.0, confidence=0.95, method="fieller") ->
  RatioInterval`
- `probability_above(alpha, beta, boundaries, *, u_alpha=0.0, u_beta=0.0, method="fieller") -> (K, B)`
- `ratio_dof(alpha, beta, u_alpha, u_beta) -> dof`
- `fieller_set(a, b, variance_a, variance_b, quantile) -> ConfidenceSet`

`u_alpha`, `u_beta`: relative standard uncertainties that the two means do not share (0 where a calibration
is shared by both, for it then cancels); scalar or shape (K,).
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from tieline.statistics.groups import BoolArray, FloatArray, divide
from tieline.statistics.gum_s1 import ScaledT, ratio_draws_interval, share_above
from tieline.statistics.means import MeanEstimate
from tieline.statistics.student import student_quantile

METHODS = ("fieller", "gum-s1")

VALUE, UPPER_LIMIT, LOWER_LIMIT, UNDETERMINED = "value", "upper-limit", "lower-limit", "undetermined"

NO_VALUES = "no values"
ONE_VALUE = "a mean rests on one value: its scatter is unknown, no interval"
NO_SCATTER = "the values of a mean are all equal and their uncertainty is unknown or zero: no interval"
TWO_VALUES = "a mean rests on two values: interval by propagating scaled t distributions"
NUMERATOR_AT_ZERO = "the numerator is not significantly above zero"
DENOMINATOR_AT_ZERO = "the denominator is not significantly above zero"
BOTH_AT_ZERO = "neither mean is significantly above zero"
NUMERATOR_NEGATIVE = "the numerator is significantly below zero: suspect a background or overlap correction"
DENOMINATOR_NEGATIVE = (
    "the denominator is significantly below zero: suspect a background or overlap correction"
)

Texts = npt.NDArray[np.object_]


@dataclass(frozen=True)
class RatioInterval:
    """K ratios; every field has shape (K,).

    `value` and `sd` (linear propagation) are NaN for upper and lower limits. `low` is 0 and `high` the
    limit for an upper limit; `high` is infinite for a lower limit; both are NaN where there is no interval.
    `kind` is one of "value", "upper-limit", "lower-limit", "undetermined"; `reason` says why in words and
    is empty for a plain value.
    """

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray
    dof: FloatArray
    kind: Texts
    reason: Texts


@dataclass(frozen=True)
class ConfidenceSet:
    """Ends of confidence sets, shape (K,); `negative_*` says that a mean is significantly below zero."""

    low: FloatArray
    high: FloatArray
    negative_numerator: BoolArray
    negative_denominator: BoolArray


def ratio_interval(
    alpha: MeanEstimate,
    beta: MeanEstimate,
    *,
    u_alpha: FloatArray | float = 0.0,
    u_beta: FloatArray | float = 0.0,
    confidence: float = 0.95,
    method: str = "fieller",
) -> RatioInterval:
    """alpha / beta with its interval, kind and reason.

    "fieller": all D with (a - D b)² <= t² [Va + u_a² a² + D² (Vb + u_b² b²)] (Fieller 1954, J. R. Stat.
    Soc. B 16:175), t for `ratio_dof` degrees of freedom. "gum-s1": JCGM 101:2008, see `gum_s1`; always
    taken where a mean rests on two values, for Fieller's set is then unbounded in up to half of all cases.
    Either is widened to what counting alone gives (V -> counting variance, t -> normal quantile), for by
    luck few values scatter less than their counting allows (ours). A set that reaches zero is an upper
    limit, one without an upper end a lower limit; a mean of one value has no interval.

    Raises ValueError for an unknown method or a confidence outside 0-1.
    """
    if method not in METHODS:
        raise ValueError(f"method {method!r} is not one of {', '.join(METHODS)}")
    if not 0 < confidence < 1:
        raise ValueError(f"confidence {confidence} is not between 0 and 1")
    u_alpha, u_beta = _full(u_alpha, alpha), _full(u_beta, beta)
    dof = ratio_dof(alpha, beta, u_alpha, u_beta)
    tail = 0.5 + 0.5 * confidence
    usable = _usable(alpha, beta)
    t = np.where(usable, student_quantile(np.where(usable, dof, 1.0), tail), np.nan)
    ends = fieller_set(alpha.mean, beta.mean, *_variances(alpha, beta, u_alpha, u_beta), t)
    draws = usable & _by_draws(alpha, beta, method)
    if draws.any():
        ends = _with_draws(ends, draws, alpha, beta, u_alpha, u_beta, confidence)
    floor = fieller_set(
        alpha.mean,
        beta.mean,
        *_counting_variances(alpha, beta, u_alpha, u_beta),
        np.full(dof.shape, special.ndtri(tail)),
    )
    ends = ConfidenceSet(
        np.minimum(ends.low, floor.low),
        np.maximum(ends.high, floor.high),
        ends.negative_numerator & floor.negative_numerator,
        ends.negative_denominator & floor.negative_denominator,
    )
    return _result(alpha, beta, u_alpha, u_beta, dof, ends, usable, draws)


def ratio_dof(alpha: MeanEstimate, beta: MeanEstimate, u_alpha: FloatArray, u_beta: FloatArray) -> FloatArray:
    """Degrees of freedom of alpha / beta, shape (K,); 0 where a mean has none.

    1/dof = sum(r_i^p / dof_i) with r_i the shares of the two means in the variance, r_cal that of the
    calibration, q the smaller over the larger dof, and p = 1 + q (1 - r_cal)^4 - r_cal (1 - r_cal)/2. p = 2
    is Welch-Satterthwaite (Welch 1947; GUM G.4). The exponent is ours: it mends the undercoverage of
    Welch-Satterthwaite for unequal numbers of values and where a part without error of its own, such as the
    calibration, makes a luckily small scatter look unimportant.
    """
    part_a, part_b = beta.mean**2 * alpha.variance, alpha.mean**2 * beta.variance
    calibration = (alpha.mean * beta.mean) ** 2 * (u_alpha**2 + u_beta**2)
    total = part_a + part_b + calibration
    share_a, share_b = divide(part_a, total, 0.5), divide(part_b, total, 0.5)
    means_share = divide(part_a + part_b, total, 1.0)
    balance = divide(np.minimum(alpha.dof, beta.dof), np.maximum(alpha.dof, beta.dof), 1.0)
    exponent = 1.0 + balance * means_share**4 - 0.5 * means_share * (1.0 - means_share)
    inverse = divide(share_a**exponent, alpha.dof, np.inf) + divide(share_b**exponent, beta.dof, np.inf)
    return np.where(np.isfinite(inverse), divide(np.ones_like(inverse), inverse, np.inf), 0.0)


def probability_above(
    alpha: MeanEstimate,
    beta: MeanEstimate,
    boundaries: FloatArray,
    *,
    u_alpha: FloatArray | float = 0.0,
    u_beta: FloatArray | float = 0.0,
    method: str = "fieller",
) -> FloatArray:
    """Probability that alpha / beta exceeds each boundary, shape (K, B); NaN where there is no interval.

    From the pivot (a - D b) / sqrt(V) at the boundary, of which Fieller's interval is the inversion: an end
    of the interval lies on a boundary exactly when this probability is the interval's tail. Means of two
    values: share of the draws. As for the interval, counting alone may only make the answer less sure.
    """
    u_alpha, u_beta = _full(u_alpha, alpha), _full(u_beta, beta)
    boundaries = np.atleast_1d(np.asarray(boundaries, dtype=np.float64))
    usable = _usable(alpha, beta)
    dof = np.where(usable, ratio_dof(alpha, beta, u_alpha, u_beta), 1.0)
    difference = alpha.mean[:, None] - boundaries * beta.mean[:, None]
    variance_a, variance_b = _variances(alpha, beta, u_alpha, u_beta)
    probability = special.stdtr(dof[:, None], _pivot(difference, variance_a, variance_b, boundaries))
    draws = usable & _by_draws(alpha, beta, method)
    if draws.any():
        scaled = _scaled_t(alpha, u_alpha, draws), _scaled_t(beta, u_beta, draws)
        probability[draws] = share_above(*scaled, boundaries)
    counting_a, counting_b = _counting_variances(alpha, beta, u_alpha, u_beta)
    floor = special.ndtr(_pivot(difference, counting_a, counting_b, boundaries))
    above = difference > 0
    probability = np.where(above, np.minimum(probability, floor), np.maximum(probability, floor))
    return np.where(usable[:, None], probability, np.nan)


def _full(relative: FloatArray | float, like: MeanEstimate) -> FloatArray:
    return np.broadcast_to(np.asarray(relative, dtype=np.float64), like.mean.shape)


def _usable(alpha: MeanEstimate, beta: MeanEstimate) -> BoolArray:
    """Both means have a variance that means something."""
    usable: BoolArray = (alpha.dof > 0) & (beta.dof > 0)
    for mean in (alpha, beta):
        usable &= ~((mean.variance == 0) & ~(mean.counting_variance > 0))
    return usable


def _by_draws(alpha: MeanEstimate, beta: MeanEstimate, method: str) -> BoolArray:
    few: BoolArray = (alpha.n == 2) | (beta.n == 2)
    return np.ones_like(few) if method == "gum-s1" else few


def _variances(
    alpha: MeanEstimate, beta: MeanEstimate, u_alpha: FloatArray, u_beta: FloatArray
) -> tuple[FloatArray, FloatArray]:
    return alpha.variance + (u_alpha * alpha.mean) ** 2, beta.variance + (u_beta * beta.mean) ** 2


def _counting_variances(
    alpha: MeanEstimate, beta: MeanEstimate, u_alpha: FloatArray, u_beta: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """As `_variances`, counting part only; an unknown one counts as zero, so that it widens nothing."""
    return (
        np.nan_to_num(alpha.counting_variance) + (u_alpha * alpha.mean) ** 2,
        np.nan_to_num(beta.counting_variance) + (u_beta * beta.mean) ** 2,
    )


def _pivot(
    difference: FloatArray, variance_a: FloatArray, variance_b: FloatArray, boundaries: FloatArray
) -> FloatArray:
    spread = np.sqrt(variance_a[:, None] + boundaries**2 * variance_b[:, None])
    exact = np.where(difference == 0, 0.0, np.copysign(np.inf, difference))
    return np.where(spread == 0, exact, divide(difference, spread, 0.0))


def fieller_set(
    a: FloatArray, b: FloatArray, variance_a: FloatArray, variance_b: FloatArray, quantile: FloatArray
) -> ConfidenceSet:
    """Ends of {D : (a - D b)² <= quantile² (Va + D² Vb)}, -inf and inf where it has none.

    With A = b² - q² Vb and C = a² - q² Va the ends solve A D² - 2 a b D + C = 0. They are written so that
    neither loses digits by subtraction.
    """
    reach_a, reach_b = quantile**2 * variance_a, quantile**2 * variance_b
    A, C = b**2 - reach_b, a**2 - reach_a
    bounded = A > 0
    discriminant = np.where(bounded, reach_a * A + reach_b * a**2, reach_b * C + reach_a * b**2)
    root = np.sqrt(np.maximum(discriminant, 0.0))
    far = a * b + np.where(a * b >= 0, root, -root)
    first = np.where(bounded, divide(far, A), -np.inf)
    second = np.where(bounded, divide(C, far, 0.0), np.inf)
    low, high = np.minimum(first, second), np.maximum(first, second)
    # Numerator sure, denominator not: everything beyond one positive end.
    beyond = ~bounded & (C > 0) & (a > 0)
    low = np.where(beyond, divide(C, a * b + root, np.inf), low)
    return ConfidenceSet(low, high, (C > 0) & (a < 0), bounded & (b < 0))


def _with_draws(
    ends: ConfidenceSet,
    draws: BoolArray,
    alpha: MeanEstimate,
    beta: MeanEstimate,
    u_alpha: FloatArray,
    u_beta: FloatArray,
    confidence: float,
) -> ConfidenceSet:
    """Replace the ends where `draws`, opened where a mean is not significantly above zero."""
    scaled = _scaled_t(alpha, u_alpha, draws), _scaled_t(beta, u_beta, draws)
    low, high = ends.low.copy(), ends.high.copy()
    low[draws], high[draws] = ratio_draws_interval(*scaled, confidence)
    tail = 0.5 + 0.5 * confidence
    low[draws & (_at_zero(alpha, tail) | np.isnan(low))] = -np.inf
    high[draws & (_at_zero(beta, tail) | np.isnan(high))] = np.inf
    return ConfidenceSet(low, high, ends.negative_numerator, ends.negative_denominator)


def _at_zero(mean: MeanEstimate, tail: float) -> BoolArray:
    """A mean not significantly above zero; of two values (t = 12.7) only sign and counting can tell.

    Where the counting of two values is unknown too, a mean within two of its standard errors counts as zero (ours).
    """
    of_two = np.where(np.isnan(mean.counting_variance), 2.0, 0.0)
    reach = np.where(mean.dof > 1.5, special.stdtrit(np.maximum(mean.dof, 1.0), tail), of_two)
    return np.asarray(mean.mean <= reach * np.sqrt(mean.variance))


def _scaled_t(mean: MeanEstimate, relative: FloatArray, rows: BoolArray) -> ScaledT:
    return ScaledT(
        mean.mean[rows], np.sqrt(mean.variance[rows]), np.maximum(mean.dof[rows], 1.0), relative[rows]
    )


def _result(
    alpha: MeanEstimate,
    beta: MeanEstimate,
    u_alpha: FloatArray,
    u_beta: FloatArray,
    dof: FloatArray,
    ends: ConfidenceSet,
    usable: BoolArray,
    draws: BoolArray,
) -> RatioInterval:
    """Kinds and reasons; the first condition that holds decides."""
    value = divide(alpha.mean, beta.mean)
    variance_a, variance_b = _variances(alpha, beta, u_alpha, u_beta)
    sd = divide(np.sqrt(variance_a + value**2 * variance_b), np.abs(beta.mean))
    # A mean that claims no uncertainty of its own makes that of the ratio unknown, not small.
    sd = np.where((alpha.variance == 0) | (beta.variance == 0), np.nan, sd)
    at_zero = usable & ~(ends.low > 0)
    no_top = usable & ~np.isfinite(ends.high)
    empty = (alpha.n == 0) | (beta.n == 0)
    single = (alpha.n == 1) | (beta.n == 1)
    cases: list[tuple[BoolArray, str, str]] = [
        (empty, UNDETERMINED, NO_VALUES),
        (single, UNDETERMINED, ONE_VALUE),
        (~usable, UNDETERMINED, NO_SCATTER),
        (ends.negative_denominator, UNDETERMINED, DENOMINATOR_NEGATIVE),
        (ends.negative_numerator, UNDETERMINED, NUMERATOR_NEGATIVE),
        (at_zero & no_top, UNDETERMINED, BOTH_AT_ZERO),
        (no_top, LOWER_LIMIT, DENOMINATOR_AT_ZERO),
        (at_zero, UPPER_LIMIT, NUMERATOR_AT_ZERO),
        (draws, VALUE, TWO_VALUES),
    ]
    chosen = np.select([case for case, _, _ in cases], np.arange(len(cases)), default=len(cases))
    kind = np.array([kind for _, kind, _ in cases] + [VALUE], dtype=object)[chosen]
    reason = np.array([reason for _, _, reason in cases] + [""], dtype=object)[chosen]
    has_value = (kind == VALUE) | ((chosen == 1) | (chosen == 2))
    has_interval = kind != UNDETERMINED
    low = np.where(kind == UPPER_LIMIT, 0.0, ends.low)
    return RatioInterval(
        value=np.where(has_value, value, np.nan),
        sd=np.where(has_value, sd, np.nan),
        low=np.where(has_interval, low, np.nan),
        high=np.where(has_interval, ends.high, np.nan),
        dof=dof,
        kind=kind,
        reason=reason,
    )
