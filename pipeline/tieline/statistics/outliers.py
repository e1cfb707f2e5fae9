"""Outlier tests of one analyte over many groups at once, and of one spot over many analytes.

Values are (..., n): the last axis holds the values of one group, NaN where there is none. Automatic
rejection by such tests costs coverage on clean data (Grubbs at 0.05 and n = 5: 95 % intervals cover 92 %),
so they are for marking.
"""

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import betaln, gammaln, stdtr, stdtrit

from tieline.statistics.groups import BoolArray, FloatArray, IntArray

_MEAN_DEVIATION_FACTOR = 1.253314  # sqrt(pi/2): mean absolute deviation to standard deviation of a normal
_SMALLEST_SQUARED_CORRELATION = 0.2
_INDICATOR_CORRELATION = 0.2


class Grubbs(NamedTuple):
    """Statistic, p-value, place of the most extreme value of every group (...); NaN and −1 below n = 3."""

    statistic: FloatArray
    p_value: FloatArray
    place: IntArray


class GeneralizedESD(NamedTuple):
    """number (...) of outliers, their mask (..., n), statistics R and critical values lambda (..., r)."""

    number: IntArray
    outlier: BoolArray
    statistic: FloatArray
    critical: FloatArray


class JointOutlier(NamedTuple):
    """Per spot (G, n): analytes that stand out, p-value, verdict. Per group (G,): count needed, mean r²."""

    analytes: IntArray
    p_value: FloatArray
    outlier: BoolArray
    needed: IntArray
    squared_correlation: FloatArray


def grubbs_critical(number: npt.ArrayLike, alpha: float = 0.05, *, two_sided: bool = True) -> FloatArray:
    """Critical value of Grubbs's statistic (Grubbs 1969, Technometrics 11:1); NaN below n = 3."""
    n = np.asarray(number, dtype=float)
    valid = n >= 3
    n = np.where(valid, n, 3.0)
    t = stdtrit(n - 2, 1 - alpha / ((2 if two_sided else 1) * n))
    return np.where(valid, (n - 1) / np.sqrt(n) * np.sqrt(t**2 / (n - 2 + t**2)), np.nan)


def grubbs(values: FloatArray, *, two_sided: bool = True) -> Grubbs:
    """Grubbs's test of the value farthest from the mean (two-sided), or of the largest value (one-sided).

    The p-value is the Bonferroni bound behind the published critical values, exact for G > sqrt((n−1)²/2n).
    Identical values give G = 0 and p = 1. Source: Grubbs (1969). One outlier per group: a second one can
    mask the first.
    """
    statistic, n = _studentised(values, two_sided)
    place = np.argmax(statistic, axis=-1)
    g = np.take_along_axis(statistic, place[..., None], axis=-1)[..., 0]
    enough = n >= 3
    safe_n = np.where(enough, n, 3)
    ratio = np.clip(g, 0, None) ** 2 * safe_n / (safe_n - 1.0) ** 2
    with np.errstate(divide="ignore"):
        t = np.sqrt((safe_n - 2) * ratio / np.maximum(1 - ratio, 0.0))
    p_value = np.minimum((2 if two_sided else 1) * safe_n * stdtr(safe_n - 2.0, -t), 1.0)
    return Grubbs(np.where(enough, g, np.nan), np.where(enough, p_value, np.nan), np.where(enough, place, -1))


def _studentised(values: FloatArray, two_sided: bool) -> tuple[FloatArray, IntArray]:
    """|x − mean|/s (or x − mean) with −inf for missing values, and the number of values."""
    present = np.isfinite(values)
    n = present.sum(axis=-1)
    x = np.where(present, values, 0.0)
    mean = x.sum(axis=-1) / np.maximum(n, 1)
    deviation = np.where(present, x - mean[..., None], 0.0)
    sd = np.sqrt(np.sum(deviation**2, axis=-1) / np.maximum(n - 1, 1))
    # Rounding leaves identical values with a tiny sd; they have no extreme.
    sd = np.where(sd > 1e-12 * np.max(np.abs(x), axis=-1, initial=0.0), sd, np.inf)
    scaled = deviation / sd[..., None]
    return np.where(present, np.abs(scaled) if two_sided else scaled, -np.inf), n


def generalized_esd(values: FloatArray, max_outliers: int, alpha: float = 0.05) -> GeneralizedESD:
    """Generalized extreme Studentized deviate test (Rosner 1983, Technometrics 25:165, eq. 2.5).

    The number of outliers is the largest i with R_i > lambda_i, not the first failure: two alike outliers
    hide each other in R_1. At least three values are kept. Published as accurate for n >= 25, usable from
    15.
    """
    remaining = np.array(values, dtype=float)
    n = np.isfinite(remaining).sum(axis=-1)
    order = np.full((*n.shape, max_outliers), -1)
    statistic = np.full((*n.shape, max_outliers), np.nan)
    critical = np.full((*n.shape, max_outliers), np.nan)
    for i in range(max_outliers):
        scaled, left = _studentised(remaining, True)
        enough = left >= 3
        place = np.argmax(scaled, axis=-1)
        statistic[..., i] = np.where(enough, np.max(scaled, axis=-1), np.nan)
        critical[..., i] = grubbs_critical(left, alpha)
        order[..., i] = np.where(enough, place, -1)
        removed = (np.arange(values.shape[-1]) == place[..., None]) & enough[..., None]
        remaining = np.where(removed, np.nan, remaining)
    beyond = np.nan_to_num(statistic) > np.nan_to_num(critical, nan=np.inf)
    number = np.max(np.where(beyond, np.arange(1, max_outliers + 1), 0), axis=-1, initial=0)
    taken = np.where(np.arange(max_outliers) < number[..., None], order, -1)
    outlier = np.any(taken[..., None] == np.arange(values.shape[-1]), axis=-2)
    return GeneralizedESD(number, outlier, statistic, critical)


def modified_z(values: FloatArray) -> FloatArray:
    """0.6745·(x − median)/MAD (Iglewicz & Hoaglin 1993; they mark |M| > 3.5), same shape as values.

    Where more than half of the values are equal, MAD = 0 and the mean absolute deviation takes its place,
    (x − median)/(1.2533·mean|x − median|), as the same authors propose; where all are equal the result is 0.
    """
    present = np.isfinite(values)
    middle = _median(values, present)
    distance = np.where(present, np.abs(np.where(present, values, 0.0) - middle[..., None]), np.nan)
    mad = _median(distance, present)
    count = np.maximum(present.sum(axis=-1), 1)
    mean_deviation = np.sum(np.where(present, distance, 0.0), axis=-1) / count
    scale = np.where(mad > 0, mad / 0.6745, _MEAN_DEVIATION_FACTOR * mean_deviation)
    safe = np.where(scale > 0, scale, 1.0)
    score = np.where(scale[..., None] > 0, (values - middle[..., None]) / safe[..., None], 0.0)
    return np.where(present, score, np.nan)


def _median(values: FloatArray, present: BoolArray) -> FloatArray:
    count = present.sum(axis=-1)
    ordered = np.sort(np.where(present, values, np.inf), axis=-1)
    low = np.take_along_axis(ordered, np.maximum((count - 1) // 2, 0)[..., None], axis=-1)[..., 0]
    high = np.take_along_axis(ordered, np.minimum(count // 2, values.shape[-1] - 1)[..., None], axis=-1)[
        ..., 0
    ]
    return np.where(count > 0, 0.5 * (low + high), np.nan)


def holm(p_values: FloatArray) -> FloatArray:
    """p-values (..., m) adjusted for m tests (last axis) (Holm 1979, Scand. J. Stat. 6:65); NaN stays."""
    present = np.isfinite(p_values)
    order = np.argsort(np.where(present, p_values, np.inf), axis=-1)
    ordered = np.take_along_axis(p_values, order, axis=-1)
    factor = present.sum(axis=-1)[..., None] - np.arange(p_values.shape[-1])
    adjusted = np.maximum.accumulate(np.where(np.isfinite(ordered), ordered * factor, 0.0), axis=-1)
    result = np.empty_like(p_values, dtype=float)
    np.put_along_axis(result, order, np.minimum(adjusted, 1.0), axis=-1)
    return np.where(present, result, np.nan)


def joint_outliers(values: FloatArray, alpha: float = 0.05, session_rate: float = 0.02) -> JointOutlier:
    """Spots at which too many analytes are the extreme of their group at once.

    Every analyte is tested by Grubbs at `alpha` (two-sided), which picks a given spot with probability
    alpha/n. The number of analytes picking the same spot is referred to a beta-binomial with that mean and
    the indicator correlation 0.2·r², r² the mean squared correlation between analytes less its chance value
    1/(n−1), at least 0.2; p-values are multiplied by n, so that `session_rate` is the chance of marking
    anything in a clean group. With 30 weakly correlated analytes six must agree. Own method.

    Measured on 3,000 normal groups of 30 analytes, n = 4 … 16: clean groups marked, at most 0.1 % at a
    correlation of 0.3, 1.1 % at 0.5, 2.3 % at 0.7, 4.4 % at 0.9; a shift of 8 sd in 8 analytes found in
    15–24 % at n = 4, 62–75 % at n = 5, over 92 % from n = 8 (correlation up to 0.7). Simulated crystals
    with a common spread of 15 %, where some analytes correlate far more than the mean: 2–4 % of clean
    groups.

    Parameters: values (G, n, p). Groups with fewer than 4 spots or 2 analytes get p = NaN.
    """
    by_analyte = np.swapaxes(values, 1, 2)
    test = grubbs(by_analyte)
    tested = np.isfinite(test.p_value)
    extreme = tested & (test.p_value < alpha)
    spots = values.shape[1]
    count = np.sum(extreme[..., None] & (test.place[..., None] == np.arange(spots)), axis=1)
    occupied = np.isfinite(values).any(axis=2)
    n = occupied.sum(axis=1)
    analytes = tested.sum(axis=1)
    squared = _mean_squared_correlation(by_analyte, tested, n)
    rho = _INDICATOR_CORRELATION * np.maximum(squared, _SMALLEST_SQUARED_CORRELATION)
    usable = (n >= 4) & (analytes >= 2)
    tail = _beta_binomial_tail(np.where(usable, analytes, 2), alpha / np.maximum(n, 4), rho, values.shape[2])
    corrected = np.minimum(tail * n[:, None], 1.0)
    p_value = np.take_along_axis(corrected, count, axis=1)
    needed = np.argmax(corrected < session_rate, axis=1)
    p_value = np.where(usable[:, None] & occupied, p_value, np.nan)
    return JointOutlier(count, p_value, np.nan_to_num(p_value, nan=1.0) < session_rate, needed, squared)


def _mean_squared_correlation(by_analyte: FloatArray, tested: BoolArray, n: IntArray) -> FloatArray:
    """Mean squared correlation (G,) over pairs of tested analytes (G, p, n), less its chance value."""
    present = np.isfinite(by_analyte) & tested[..., None]
    x = np.where(present, by_analyte, 0.0)
    mean = x.sum(axis=2) / np.maximum(present.sum(axis=2), 1)
    deviation = np.where(present, x - mean[..., None], 0.0)
    norm = np.sqrt(np.sum(deviation**2, axis=2))
    unit = deviation / np.where(norm > 0, norm, 1.0)[..., None]
    # Σ over pairs of r² equals the squared norm of the n × n matrix uᵀu, which is the smaller one.
    inner = np.swapaxes(unit, 1, 2) @ unit
    counted = np.sum(norm > 0, axis=1)
    pairs = np.maximum(counted * (counted - 1), 1)
    mean_square = (np.sum(inner**2, axis=(1, 2)) - counted) / pairs
    chance = 1 / np.maximum(n - 1, 2)
    squared: FloatArray = np.clip((mean_square - chance) / (1 - chance), 0.0, 1.0)
    return squared


def _beta_binomial_tail(trials: IntArray, mean: FloatArray, rho: FloatArray, largest: int) -> FloatArray:
    """P(K >= k) for k = 0 … largest + 1, shape (G, largest + 2)."""
    k = np.arange(largest + 2)
    m = trials[:, None]
    inside = np.minimum(k, m)
    first = (mean * (1 - rho) / rho)[:, None]
    second = ((1 - mean) * (1 - rho) / rho)[:, None]
    choose = gammaln(m + 1.0) - gammaln(inside + 1.0) - gammaln(m - inside + 1.0)
    mass = np.exp(choose + betaln(inside + first, m - inside + second) - betaln(first, second))
    mass = np.where(k <= m, mass, 0.0)
    tail: FloatArray = np.minimum(np.cumsum(mass[:, ::-1], axis=1)[:, ::-1], 1.0)
    return tail
