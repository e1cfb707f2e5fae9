"""Proportions of components that add up to a known mixture, with errors in all of them.

Public: `mix`, `shortfall`, `weighted_sum`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from tieline.statistics.least_squares import BoolArray, FloatArray, covariance, minimise, profile_limits

FITTED, CANNOT_TELL = "fitted", "cannot tell"
_EXCESS = 0.05
_MOST = 100.0
_SUM_SD = (
    1e-4  # the sum is held at one to within this: far below any error of a proportion, and quick to solve
)
_ABSENT = 1e-9


@dataclass(frozen=True)
class Mixture:
    """Proportions (k,) of the components, or the reason why there are none.

    sd (nan where a proportion is zero: it has an upper limit only), low, high: (k,); covariance: (k, k). They rest on the
    stated errors times `scale`: 1, or chi_square/dof where that is too large (p < 0.05). residuals (m,): mixture less the
    sum of the components; sigmas (m,): the same in standard deviations. total and total_sd: sum of the proportions.
    squares: the sum of squared residuals of the unweighted fit, the older yardstick, and `unweighted` its proportions.
    """

    verdict: str
    reason: str
    proportions: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray
    covariance: FloatArray
    total: float
    total_sd: float
    residuals: FloatArray
    sigmas: FloatArray
    chi_square: float
    dof: int
    p_value: float
    scale: float
    quantile: float
    squares: float
    unweighted: FloatArray


@dataclass(frozen=True)
class _Problem:
    """Residuals in standard deviations; the errors of the components count in the measure of their proportions."""

    mixture: FloatArray
    mixture_variance: FloatArray
    components: FloatArray
    component_variance: FloatArray
    sum_to_one: bool

    def residuals(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        raw = self.mixture - x @ self.components.T
        variance = self.mixture_variance + x**2 @ self.component_variance.T
        root = np.sqrt(variance)
        slope = -self.components[None] / root[:, :, None]
        slope = slope - (raw / root**3)[:, :, None] * self.component_variance[None] * x[:, None, :]
        if not self.sum_to_one:
            return raw / root, slope
        excess = (x.sum(axis=1, keepdims=True) - 1.0) / _SUM_SD
        row = np.full((len(x), 1, x.shape[1]), 1.0 / _SUM_SD)
        return np.concatenate([raw / root, excess], axis=1), np.concatenate([slope, row], axis=1)


def mix(
    mixture: FloatArray,
    mixture_sd: FloatArray,
    components: FloatArray,
    components_sd: FloatArray,
    *,
    sum_to_one: bool = False,
    confidence: float = 0.95,
) -> Mixture:
    """Non-negative proportions x of the components with mixture = components · x.

    mixture, mixture_sd: (m,); components, components_sd: (m, k), all in one unit, errors independent and not all zero in any
    row. Minimises sum (mixture - A x)² / (sd² + sum x² sd_A²) over x >= 0, which is maximum likelihood for normal errors
    on both sides (a structural relation; Fuller 1987, Measurement Error Models, section 2.3; for mineral modes Albarède
    1995, Introduction to Geochemical Modeling, section 5.2; both from memory). Intervals follow the profile likelihood.
    The unweighted fit is that of Bryan et al. (1969), Science 163:926.

    "cannot tell" where there are fewer rows than components, or components that others can replace. Raises ValueError for
    missing numbers, negative errors, shapes that do not fit, or a row without any error.
    """
    problem = _problem(mixture, mixture_sd, components, components_sd, sum_to_one)
    rows, count = problem.components.shape
    if count == 0 or rows + sum_to_one < count:
        return _no_mixture(rows, count, f"{rows} elements cannot determine {count} proportions")
    plain = _Problem(
        problem.mixture, np.ones(rows), problem.components, np.zeros_like(problem.components), sum_to_one
    )
    unweighted, _cost = _solve(plain)
    x, cost = _solve(problem)
    free = np.ones(count, dtype=bool)
    _residuals, jacobian = problem.residuals(x[None, :])
    whole = covariance(jacobian[0], free)
    if whole is None:
        return _no_mixture(
            rows, count, "some phases can be replaced by a mixture of the others: no single answer"
        )
    present = x > _ABSENT
    spread = covariance(jacobian[0], present)
    assert spread is not None
    dof = rows + int(sum_to_one) - int(present.sum())
    p_value = float(special.chdtrc(dof, cost)) if dof > 0 else np.nan
    scale = cost / dof if dof > 0 and p_value < _EXCESS else 1.0
    tail = 0.5 + 0.5 * confidence
    quantile = float(special.stdtrit(dof, tail) if scale > 1 else special.ndtri(tail))
    limits = _limits(problem, x, cost, whole, scale * quantile**2, free)
    residuals = problem.mixture - problem.components @ x
    variance = problem.mixture_variance + problem.component_variance @ x**2
    plain_residuals = problem.mixture - problem.components @ unweighted
    return Mixture(
        FITTED, "", x, np.where(present, np.sqrt(scale * np.diag(spread)), np.nan), limits[:, 0], limits[:, 1], scale * spread,
        float(x.sum()), float(np.sqrt(scale * max(spread.sum(), 0.0))), residuals, residuals / np.sqrt(variance),
        cost, dof, p_value, scale, quantile, float(np.sum(plain_residuals**2)), unweighted,
    )  # fmt: skip


def _problem(
    mixture: FloatArray, mixture_sd: FloatArray, components: FloatArray, components_sd: FloatArray, one: bool
) -> _Problem:
    arrays = [
        np.asarray(array, dtype=np.float64) for array in (mixture, mixture_sd, components, components_sd)
    ]
    b, b_sd, a, a_sd = arrays
    if b.ndim != 1 or a.ndim != 2 or b_sd.shape != b.shape or a_sd.shape != a.shape or len(a) != len(b):
        raise ValueError("a mixture (m,) needs components (m, k), each with errors of the same shape")
    if not all(np.all(np.isfinite(array)) for array in arrays) or np.any(b_sd < 0) or np.any(a_sd < 0):
        raise ValueError("concentrations must be finite and errors must not be negative")
    if np.any((b_sd == 0) & np.all((a_sd == 0) | (a == 0), axis=1)):
        raise ValueError("every element needs an error in the mixture or in a phase that contains it")
    return _Problem(b, b_sd**2, a, a_sd**2, one)


def _solve(problem: _Problem) -> tuple[FloatArray, float]:
    """The least of the minima reached from equal parts and from each component alone."""
    count = problem.components.shape[1]
    starts = np.concatenate([np.full((1, count), 1.0 / count), 0.9 * np.eye(count) + 0.1 / count])
    found = minimise(
        problem.residuals, starts, np.ones_like(starts, dtype=bool), np.zeros(count), np.full(count, _MOST)
    )
    best = int(np.argmin(found.sum_of_squares))
    return found.theta[best], float(found.sum_of_squares[best])


def _limits(
    problem: _Problem, x: FloatArray, cost: float, spread: FloatArray, cut: float, free: BoolArray
) -> FloatArray:
    lowest, highest = np.zeros(len(x)), np.full(len(x), _MOST)
    profile = profile_limits(problem.residuals, x, cost, spread, cut, free, lowest, highest)
    return np.maximum(profile.limits, 0.0)


def _no_mixture(rows: int, count: int, reason: str) -> Mixture:
    blank, long = np.full(count, np.nan), np.full(rows, np.nan)
    return Mixture(
        CANNOT_TELL, reason, blank, blank, blank, blank, np.full((count, count), np.nan), np.nan, np.nan,
        long, long, np.nan, 0, np.nan, 1.0, np.nan, np.nan, blank,
    )  # fmt: skip


@dataclass(frozen=True)
class Shortfall:
    """Relative loss of each element that was not fitted, (j,): positive where the components hold less than the mixture.

    low, high: interval; z: loss over its standard deviation, p_value two-sided.
    """

    loss: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray
    z: FloatArray
    p_value: FloatArray


def shortfall(
    mixture: Mixture,
    start: FloatArray,
    start_sd: FloatArray,
    components: FloatArray,
    components_sd: FloatArray,
) -> Shortfall:
    """1 - (components · x) / start for elements kept out of the fit, to first order.

    start, start_sd: (j,); components, components_sd: (j, k). The elements must not have entered `mix`, or their loss would
    have drawn the proportions along. nan where start is not above zero or there are no proportions.
    """
    x = mixture.proportions
    start = np.where(np.asarray(start) > 0, start, np.nan)
    held = components @ x
    variance = np.einsum("jk,kl,jl->j", components, mixture.covariance, components) + components_sd**2 @ x**2
    ratio = held / start
    sd = np.sqrt(variance + (ratio * start_sd) ** 2) / start
    loss, half = 1.0 - ratio, mixture.quantile * sd
    z = np.where(sd > 0, loss / np.where(sd > 0, sd, 1.0), np.nan)
    tail = (
        special.ndtr(-np.asarray(np.abs(z)))
        if mixture.scale == 1
        else 1.0 - special.stdtr(max(mixture.dof, 1), np.abs(z))
    )
    return Shortfall(loss, sd, loss - half, loss + half, z, 2.0 * tail)


def weighted_sum(
    weights: FloatArray,
    weights_covariance: FloatArray,
    values: FloatArray,
    values_covariance: FloatArray,
) -> tuple[float, float]:
    """sum w v / sum w and its standard deviation, to first order, weights and values being independent.

    weights, values: (k,) with covariances (k, k). nan where the weights do not add up to more than zero.
    """
    total = float(np.sum(weights))
    if not total > 0:
        return np.nan, np.nan
    shares = weights / total
    mean = float(shares @ values)
    slope = (values - mean) / total
    variance = shares @ values_covariance @ shares + slope @ weights_covariance @ slope
    return mean, float(np.sqrt(max(float(variance), 0.0)))
