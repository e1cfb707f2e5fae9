"""Nonlinear least squares for many small problems at once, and profile-likelihood limits of their parameters."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
# theta (problems, parameters) -> residuals (problems, m) and their Jacobian (problems, m, parameters)
Residuals = Callable[[FloatArray], tuple[FloatArray, FloatArray]]

_LARGEST_DAMPING = 1e14
_DOUBLINGS = 40
_ROUNDS = 40
# A limit is sought to a thousandth of the rise; the minima on the way need not be exact to more digits than that asks.
_PROFILE_TOLERANCE = 1e-5


@dataclass(frozen=True)
class Minimum:
    """Where each problem came to rest: theta (problems, parameters), sum of squares and convergence (problems,)."""

    theta: FloatArray
    sum_of_squares: FloatArray
    converged: BoolArray


def minimise(
    residuals: Residuals,
    start: FloatArray,
    free: BoolArray,
    lower: FloatArray,
    upper: FloatArray,
    iterations: int = 300,
    tolerance: float = 1e-10,
) -> Minimum:
    """Levenberg-Marquardt (Marquardt 1963) with Nielsen's damping (1999), run on all problems side by side.

    start, free: (problems, parameters), where free is False the parameter stays at its start; lower, upper: (parameters,)
    bounds, kept by projection. tolerance: of the sum of squares, relative to one more than it. A local minimum is found:
    give several starts as several problems where that matters.
    """
    theta = np.where(free, np.clip(start, lower, upper), start)
    r, jacobian = residuals(theta)
    cost = np.sum(r**2, axis=1)
    damping, growth = np.full(len(theta), 1e-3), np.full(len(theta), 2.0)
    converged = np.zeros(len(theta), dtype=bool)
    for _ in range(iterations):
        gradient = np.einsum("bmp,bm->bp", jacobian, r)
        moving = free & ~((theta <= lower) & (gradient > 0)) & ~((theta >= upper) & (gradient < 0))
        step = _damped_step(jacobian, gradient, moving, damping)
        trial = np.where(free, np.clip(theta + step, lower, upper), theta)
        trial_r, trial_jacobian = residuals(trial)
        trial_cost = np.sum(trial_r**2, axis=1)
        better = (trial_cost <= cost) & ~converged
        expected = -2.0 * np.sum(step * gradient, axis=1) + 1e-300
        gain = np.clip((cost - trial_cost) / expected, -1.0, 1.0)
        small = (np.abs(trial - theta) <= 1e-10 * (np.abs(theta) + 1e-4)).all(axis=1)
        settled = better & (cost - trial_cost <= tolerance * (1.0 + cost)) & (damping <= 1.0)
        theta = np.where(better[:, None], trial, theta)
        cost = np.where(better, trial_cost, cost)
        r = np.where(better[:, None], trial_r, r)
        jacobian = np.where(better[:, None, None], trial_jacobian, jacobian)
        damping = np.where(better, damping * np.maximum(1 / 3, 1 - (2 * gain - 1) ** 3), damping * growth)
        damping = np.clip(damping, 1e-12, _LARGEST_DAMPING)
        growth = np.where(better, 2.0, growth * 2.0)
        converged |= settled | small | (damping >= _LARGEST_DAMPING)
        if converged.all():
            break
    return Minimum(theta, cost, converged)


def _damped_step(
    jacobian: FloatArray, gradient: FloatArray, moving: BoolArray, damping: FloatArray
) -> FloatArray:
    held = jacobian * moving[:, None, :]
    normal = np.einsum("bmp,bmq->bpq", held, held)
    diagonal = np.einsum("bpp->bp", normal)
    scale = np.where(moving, np.maximum(diagonal, 1e-12 * diagonal.max(axis=1, keepdims=True) + 1e-30), 1.0)
    # scaled to unit diagonal: parameters of very different size must not spoil the solution
    root = np.sqrt(scale)
    scaled = normal / (root[:, :, None] * root[:, None, :])
    scaled += np.eye(gradient.shape[1]) * np.where(moving, damping[:, None] + 1e-14, 1.0)[:, None, :]
    step: FloatArray = np.linalg.solve(scaled, (-gradient * moving / root)[:, :, None])[:, :, 0]
    return step / root * moving


def covariance(jacobian: FloatArray, free: BoolArray) -> FloatArray | None:
    """(JᵀJ)⁻¹ over the free parameters, zero elsewhere; None where the parameters cannot be told apart.

    jacobian: (m, parameters) of residuals in units of their standard deviation; free: (parameters,).
    """
    total = np.zeros((len(free), len(free)))
    if not free.any():
        return total
    columns = jacobian[:, free]
    norms = np.sqrt(np.sum(columns**2, axis=0))
    if not np.all(np.isfinite(norms)) or np.any(norms <= 1e-12):
        return None
    singular = np.linalg.svd(columns / norms, compute_uv=False)
    if len(columns) < free.sum() or singular[-1] < 1e-7:
        return None
    inverse = np.linalg.inv((columns / norms).T @ (columns / norms)) / np.outer(norms, norms)
    total[np.ix_(free, free)] = inverse
    return total


@dataclass(frozen=True)
class ProfileLimits:
    """Limits (parameters, 2) of each free parameter, nan for the others, infinite where the profile stays open.

    better: a parameter vector with a smaller sum of squares met on the way, or None.
    """

    limits: FloatArray
    better: FloatArray | None


def profile_limits(
    residuals: Residuals,
    theta: FloatArray,
    minimum: float,
    parameter_covariance: FloatArray,
    cut: float,
    free: BoolArray,
    lower: FloatArray,
    upper: FloatArray,
) -> ProfileLimits:
    """Where the sum of squares, minimised over the other parameters, has risen by `cut` (Venzon & Moolgavkar 1988).

    theta (parameters,) is the minimum, `minimum` its sum of squares. The search brackets each limit by doubling the
    distance and closes in with the regula falsi (Illinois form) on the signed root of the rise, which is nearly straight.
    """
    which = np.repeat(np.flatnonzero(free), 2)
    side = np.tile([-1.0, 1.0], len(which) // 2)
    limits = np.full((len(theta), 2), np.nan)
    if len(which) == 0:
        return ProfileLimits(limits, None)
    rows = len(which)
    search = ProfileSearch(
        residuals, np.tile(theta, (rows, 1)), np.full(rows, minimum), np.tile(parameter_covariance, (rows, 1, 1)),
        cut, which, side, free, lower, upper,
    )  # fmt: skip
    limits[which, (side > 0).astype(int)] = search.run()
    return ProfileLimits(limits, search.better)


class ProfileSearch:
    """The rise of the profile at trial distances from the minimum, one problem per limit that is looked for.

    origin (problems, parameters) is where each problem has its minimum, spread (problems, parameters, parameters) the
    covariance there; problem i looks for a limit of parameter which[i] in the direction side[i]. After `run`, `better` is
    a parameter vector below the minimum that was met on the way, or None.
    """

    def __init__(
        self, residuals: Residuals, origin: FloatArray, minimum: FloatArray, spread: FloatArray, cut: float,
        which: IntArray, side: FloatArray, free: BoolArray, lower: FloatArray, upper: FloatArray,
    ) -> None:  # fmt: skip
        self.residuals, self.minimum, self.cut = residuals, minimum, cut
        self.which, self.side, self.lower, self.upper = which, side, lower, upper
        self.rows = np.arange(len(which))
        self.free = np.tile(free, (len(which), 1))
        self.free[self.rows, which] = False
        # trials start from the farthest point still below the cut: from a point beyond, they can stray to another branch
        self.inside = origin.copy()
        self.centre = origin[self.rows, which]
        self.room = np.where(side > 0, upper[which] - self.centre, self.centre - lower[which])
        variance = np.maximum(spread[self.rows, which, which], 1e-20)
        self.first = 0.5 * np.sqrt(cut * variance)
        self.slope = spread[self.rows, which] / variance[:, None]
        self.better: FloatArray | None = None

    def rise(self, distance: FloatArray) -> FloatArray:
        """Root of the rise less that of the cut, at these distances from the minimum."""
        place = self.centre + self.side * distance
        shift = place - self.inside[self.rows, self.which]
        start = self.inside + self.slope * shift[:, None]
        start[self.rows, self.which] = place
        found = minimise(self.residuals, start, self.free, self.lower, self.upper, 60, _PROFILE_TOLERANCE)
        value: FloatArray = np.sqrt(np.maximum(found.sum_of_squares - self.minimum, 0.0)) - np.sqrt(self.cut)
        self.inside = np.where((value < 0)[:, None], found.theta, self.inside)
        lowest = int(np.argmin(found.sum_of_squares - self.minimum))
        if found.sum_of_squares[lowest] < self.minimum[lowest] - 1e-6 * (1.0 + self.minimum[lowest]):
            self.better = found.theta[lowest]
        return value

    def run(self) -> FloatArray:
        """The limits (problems,), infinite where the profile stays below the cut up to the bound."""
        near, far = np.zeros(len(self.which)), np.minimum(self.first, self.room)
        near_value = np.full(len(self.which), -np.sqrt(self.cut))
        far_value = self.rise(far)
        for _ in range(_DOUBLINGS):
            short = (far_value < 0) & (far < self.room)
            if not short.any():
                break
            near, near_value = np.where(short, far, near), np.where(short, far_value, near_value)
            far = np.where(short, np.minimum(2.0 * far, self.room), far)
            far_value = np.where(short, self.rise(far), far_value)
        distance = self._close_in(near, near_value, far, far_value)
        return np.where(np.isfinite(distance), self.centre + self.side * distance, self.side * np.inf)

    def _close_in(
        self, near: FloatArray, near_value: FloatArray, far: FloatArray, far_value: FloatArray
    ) -> FloatArray:
        closed = far_value >= 0
        trial = far
        for round_ in range(_ROUNDS):
            chord = near - near_value * (far - near) / np.where(
                far_value > near_value, far_value - near_value, 1.0
            )
            # a bisection now and then, for a rise that is far from straight
            trial = np.where(closed, 0.5 * (near + far) if round_ % 4 == 3 else chord, far)
            value = np.where(closed, self.rise(trial), far_value)
            inside = value < 0
            # Illinois: halve the value at the end that stays, so that both ends move
            moves_near, moves_far = inside & closed, ~inside & closed
            near, far = np.where(moves_near, trial, near), np.where(moves_far, trial, far)
            far_value = np.where(moves_far, value, np.where(moves_near, far_value / 2.0, far_value))
            near_value = np.where(moves_near, value, np.where(moves_far, near_value / 2.0, near_value))
            if np.all(~closed | (np.abs(value) < 1e-3 * np.sqrt(self.cut)) | (far - near < 1e-9 * far)):
                break
        return np.where(closed, trial, np.inf)
