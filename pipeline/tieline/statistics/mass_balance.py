"""Proportions of components that add up to a known mixture, with errors in all of them.

Public: `mix`, `shortfall`.
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
    shared_sd: FloatArray
    sum_to_one: bool

    def residuals(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        raw = self.mixture - x @ self.components.T
        root = np.sqrt(self.variance(x))
        shared = np.einsum("gmk,nk->ngm", self.shared_sd, x)
        half_slope = self.component_variance * x[:, None, :] + np.einsum(
            "ngm,gmk->nmk", shared, self.shared_sd
        )
        slope = -self.components[None] / root[:, :, None] - (raw / root**3)[:, :, None] * half_slope
        if not self.sum_to_one:
            return raw / root, slope
        excess = (x.sum(axis=1, keepdims=True) - 1.0) / _SUM_SD
        row = np.full((len(x), 1, x.shape[1]), 1.0 / _SUM_SD)
        return np.concatenate([raw / root, excess], axis=1), np.concatenate([slope, row], axis=1)

    def variance(self, x: FloatArray) -> FloatArray:
        """Of the residuals, (n, m), at the proportions x (n, k): shared errors add up before they are squared."""
        shared = np.einsum("gmk,nk->ngm", self.shared_sd, x)
        return np.asarray(
            self.mixture_variance + x**2 @ self.component_variance.T + np.sum(shared**2, axis=1)
        )


def mix(
    mixture: FloatArray,
    mixture_sd: FloatArray,
    components: FloatArray,
    components_sd: FloatArray,
    *,
    shared_sd: FloatArray | None = None,
    sum_to_one: bool = False,
    confidence: float = 0.95,
) -> Mixture:
    """Non-negative proportions x of the components with mixture = components · x.

    mixture, mixture_sd: (m,); components, components_sd: (m, k), all in one unit, errors independent and not all zero in any
    row. shared_sd (g, m, k): errors that the components of a row have in common, such as that of one calibration:
    entries of one g and row are one variable, and a negative one goes against the others. Minimises
    sum (mixture - A x)² / (sd² + sum x² sd_A² + sum_g (sum x sd_g)²) over x >= 0, which is maximum likelihood for
    normal errors on both sides (a functional relation; Fuller 1987, Measurement Error Models, section 2.3; for mineral
    modes Albarède 1995, Introduction to Geochemical Modeling, section 5.2; both from memory). Intervals follow the
    profile likelihood. The unweighted fit is that of Bryan et al. (1969), Science 163:926.

    "cannot tell" where there are fewer rows than components, or components that others can replace. Raises ValueError for
    missing numbers, negative errors, shapes that do not fit, or a row without any error.
    """
    problem = _problem(mixture, mixture_sd, components, components_sd, shared_sd, sum_to_one)
    rows, count = problem.components.shape
    if count == 0 or rows + sum_to_one < count:
        return _no_mixture(rows, count, f"{rows} elements cannot determine {count} proportions")
    plain = _Problem(
        problem.mixture, np.ones(rows), problem.components, np.zeros_like(problem.components),
        np.zeros((0, rows, count)), sum_to_one,
    )  # fmt: skip
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
    variance = problem.variance(x[None, :])[0]
    plain_residuals = problem.mixture - problem.components @ unweighted
    return Mixture(
        FITTED, "", x, np.where(present, np.sqrt(scale * np.diag(spread)), np.nan), limits[:, 0], limits[:, 1], scale * spread,
        float(x.sum()), float(np.sqrt(scale * max(spread.sum(), 0.0))), residuals, residuals / np.sqrt(variance),
        cost, dof, p_value, scale, quantile, float(np.sum(plain_residuals**2)), unweighted,
    )  # fmt: skip


def _problem(
    mixture: FloatArray,
    mixture_sd: FloatArray,
    components: FloatArray,
    components_sd: FloatArray,
    shared_sd: FloatArray | None,
    one: bool,
) -> _Problem:
    arrays = [
        np.asarray(array, dtype=np.float64) for array in (mixture, mixture_sd, components, components_sd)
    ]
    b, b_sd, a, a_sd = arrays
    if b.ndim != 1 or a.ndim != 2 or b_sd.shape != b.shape or a_sd.shape != a.shape or len(a) != len(b):
        raise ValueError("a mixture (m,) needs components (m, k), each with errors of the same shape")
    shared = np.zeros((0, *a.shape)) if shared_sd is None else np.asarray(shared_sd, dtype=np.float64)
    if shared.ndim != 3 or shared.shape[1:] != a.shape:
        raise ValueError("shared errors need the shape (g, m, k) of g sources and components (m, k)")
    if not all(np.all(np.isfinite(array)) for array in (*arrays, shared)):
        raise ValueError("concentrations and their errors must be finite")
    if np.any(b_sd < 0) or np.any(a_sd < 0):
        raise ValueError("errors must not be negative")
    if np.any((b_sd == 0) & np.all(((a_sd == 0) & (shared == 0).all(axis=0)) | (a == 0), axis=1)):
        raise ValueError("every element needs an error in the mixture or in a phase that contains it")
    return _Problem(b, b_sd**2, a, a_sd**2, shared, one)


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
    shared_sd: FloatArray | None = None,
) -> Shortfall:
    """1 - (components · x) / start for elements kept out of the fit, to first order.

    start, start_sd: (j,); components, components_sd: (j, k); shared_sd (g, j, k) as for `mix`. The elements must not have
    entered `mix`, or their loss would have drawn the proportions along. nan where start is not above zero or there are no
    proportions.
    """
    x = mixture.proportions
    start = np.where(np.asarray(start) > 0, start, np.nan)
    held = components @ x
    variance = np.einsum("jk,kl,jl->j", components, mixture.covariance, components) + components_sd**2 @ x**2
    if shared_sd is not None:
        variance = variance + np.sum((shared_sd @ x) ** 2, axis=0)
    ratio = held / start
    sd = np.sqrt(variance + (ratio * start_sd) ** 2) / start
    loss, half = 1.0 - ratio, mixture.quantile * sd
    z = np.where(sd > 0, loss / np.where(sd > 0, sd, 1.0), np.nan)
    tail = (
        special.ndtr(-np.asarray(np.abs(z)))
        if mixture.scale == 1
        else special.stdtr(max(mixture.dof, 1), -np.abs(z))
    )
    return Shortfall(loss, sd, loss - half, loss + half, z, 2.0 * tail)
