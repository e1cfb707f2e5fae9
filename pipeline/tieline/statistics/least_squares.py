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
# which problems -> their residuals, where the problems have data of their own
Subset = Callable[[IntArray], Residuals]

_LARGEST_DAMPING = 1e14
_DOUBLINGS = 40
_ROUNDS = 40
# A limit is sought to a thousandth of the rise; the minima on the way need not be exact to more digits than that asks.
_PROFILE_TOLERANCE = 1e-5
# A parameter vector is below the minimum where its sum of squares is smaller by more than this, relative to one more than it.
_DEEPER = 1e-6


@dataclass(frozen=True)
class Minimum:
    """Where each problem came to rest: theta (problems, parameters), sum of squares and convergence (problems,)."""

    theta: FloatArray
    sum_of_squares: FloatArray
    converged: BoolArray


@dataclass
class _Walk:
    """Where the problems that still move stand: all arrays have one row per problem."""

    theta: FloatArray
    free: BoolArray
    lower: FloatArray
    upper: FloatArray
    cost: FloatArray
    residual: FloatArray
    jacobian: FloatArray
    damping: FloatArray
    growth: FloatArray

    def keep(self, rows: BoolArray) -> None:
        for name, array in vars(self).items():
            setattr(self, name, array[rows])


def minimise(
    residuals: Residuals,
    start: FloatArray,
    free: BoolArray,
    lower: FloatArray,
    upper: FloatArray,
    iterations: int = 300,
    tolerance: float = 1e-10,
    *,
    subset: Subset | None = None,
) -> Minimum:
    """Levenberg-Marquardt (Marquardt 1963) with Nielsen's damping (1999), run on all problems side by side.

    start, free: (problems, parameters), where free is False the parameter stays at its start; lower, upper: (parameters,)
    or (problems, parameters) bounds, kept by projection. tolerance: of the sum of squares, relative to one more than it.
    subset: the residuals of a few of the problems; without it every problem has the same. A local minimum is found: give
    several starts as several problems where that matters. No problem's path depends on the others.
    """
    theta = np.where(free, np.clip(start, lower, upper), start)
    r, jacobian = residuals(theta)
    found = Minimum(theta.copy(), np.sum(r**2, axis=1), np.zeros(len(theta), dtype=bool))
    walk = _Walk(
        theta, free, np.broadcast_to(lower, theta.shape), np.broadcast_to(upper, theta.shape),
        found.sum_of_squares.copy(), r, jacobian, np.full(len(theta), 1e-3), np.full(len(theta), 2.0),
    )  # fmt: skip
    rows = np.arange(len(theta))
    for _ in range(iterations):
        if not len(rows):
            break
        at_rest = _advance(residuals, walk, tolerance)
        if at_rest.any():
            done = rows[at_rest]
            found.theta[done], found.sum_of_squares[done] = walk.theta[at_rest], walk.cost[at_rest]
            found.converged[done] = True
            rows = rows[~at_rest]
            walk.keep(~at_rest)
            residuals = residuals if subset is None else subset(rows)
    found.theta[rows], found.sum_of_squares[rows] = walk.theta, walk.cost
    return found


def _advance(residuals: Residuals, walk: _Walk, tolerance: float) -> BoolArray:
    """One step of every problem; (problems,) which of them have come to rest."""
    theta, cost, damping = walk.theta, walk.cost, walk.damping
    gradient = (walk.residual[:, None, :] @ walk.jacobian)[:, 0, :]
    moving = walk.free & ~((theta <= walk.lower) & (gradient > 0)) & ~((theta >= walk.upper) & (gradient < 0))
    step, expected = _damped_step(walk.jacobian, gradient, moving, damping)
    trial = np.where(walk.free, np.minimum(np.maximum(theta + step, walk.lower), walk.upper), theta)
    trial_r, trial_jacobian = residuals(trial)
    trial_cost = np.sum(trial_r**2, axis=1)
    better = trial_cost <= cost
    gain = np.clip((cost - trial_cost) / (expected + 1e-300), -1.0, 1.0)
    small = (np.abs(trial - theta) <= 1e-10 * (np.abs(theta) + 1e-4)).all(axis=1)
    settled = better & (cost - trial_cost <= tolerance * (1.0 + cost)) & (damping <= 1.0)
    walk.theta = np.where(better[:, None], trial, theta)
    walk.cost = np.where(better, trial_cost, cost)
    walk.residual = np.where(better[:, None], trial_r, walk.residual)
    walk.jacobian = np.where(better[:, None, None], trial_jacobian, walk.jacobian)
    damping = np.where(better, damping * np.maximum(1 / 3, 1 - (2 * gain - 1) ** 3), damping * walk.growth)
    walk.damping = np.clip(damping, 1e-12, _LARGEST_DAMPING)
    walk.growth = np.where(better, 2.0, walk.growth * 2.0)
    return np.asarray(settled | small | (walk.damping >= _LARGEST_DAMPING))


def _damped_step(
    jacobian: FloatArray, gradient: FloatArray, moving: BoolArray, damping: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """The step (problems, parameters), and by how much the sum of squares would fall if the residuals were straight."""
    held = jacobian * moving[:, None, :]
    normal = held.transpose(0, 2, 1) @ held
    diagonal = np.einsum("bpp->bp", normal)
    scale = np.where(moving, np.maximum(diagonal, 1e-12 * diagonal.max(axis=1, keepdims=True) + 1e-30), 1.0)
    # scaled to unit diagonal: parameters of very different size must not spoil the solution
    root = np.sqrt(scale)
    scaled = normal / (root[:, :, None] * root[:, None, :])
    place = np.arange(gradient.shape[1])
    scaled[:, place, place] += np.where(moving, damping[:, None] + 1e-14, 1.0)
    step: FloatArray = np.linalg.solve(scaled, (-gradient * moving / root)[:, :, None])[:, :, 0]
    expected = np.sum(step * (damping[:, None] * step - gradient / root) * moving, axis=1)
    return step / root * moving, expected


def covariances(jacobian: FloatArray, free: BoolArray) -> FloatArray:
    """(JᵀJ)⁻¹ over the free parameters, zero elsewhere, of every problem; nan where parameters cannot be told apart.

    jacobian: (problems, m, parameters) of residuals in units of their standard deviation; free: (problems, parameters).
    """
    columns = jacobian * free[:, None, :]
    norms = np.sqrt(np.sum(columns**2, axis=1))
    usable = np.where(free, np.isfinite(norms) & (norms > 1e-12), True).all(axis=1)
    usable &= np.sum(np.abs(columns).max(axis=2) > 0, axis=1) >= free.sum(axis=1)
    scale = np.where(free & usable[:, None], norms, 1.0)
    unit = np.where(usable[:, None, None], columns / scale[:, None, :], 0.0)
    # a row of its own for every parameter that is held: a singular value of 1, which decides nothing
    held = np.eye(free.shape[1]) * ~(free & usable[:, None])[:, None, :]
    singular = np.linalg.svd(np.concatenate([unit, held], axis=1), compute_uv=False)
    usable &= singular[:, -1] >= 1e-7
    normal = unit.transpose(0, 2, 1) @ unit + held
    normal[~usable] = np.eye(free.shape[1])
    inverse = np.linalg.inv(normal) / (scale[:, :, None] * scale[:, None, :])
    total = np.where(free[:, :, None] & free[:, None, :], inverse, 0.0)
    total[~usable] = np.nan
    return total


def covariance(jacobian: FloatArray, free: BoolArray) -> FloatArray | None:
    """`covariances` of one problem, (m, parameters) and (parameters,); None where parameters cannot be told apart."""
    found = covariances(jacobian[None], free[None])[0]
    return None if np.isnan(found).any() else found


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
        np.full(rows, cut), which, side, np.tile(free, (rows, 1)), lower, upper,
    )  # fmt: skip
    limits[which, (side > 0).astype(int)] = search.run()
    deepest = int(np.argmin(search.lowest - search.minimum))
    return ProfileLimits(limits, search.better[deepest] if search.found_deeper[deepest] else None)


class ProfileSearch:
    """The rise of the profile at trial distances from the minimum, one problem per limit that is looked for.

    origin (problems, parameters) is where each problem has its minimum, spread (problems, parameters, parameters) the
    covariance there; problem i looks for a limit of parameter which[i] in the direction side[i], where the sum of squares
    has risen by cut[i]. free: (problems, parameters); lower, upper, subset: as in `minimise`. After `run`, found_deeper
    (problems,) says where a parameter vector below the minimum, `better`, was met on the way.
    """

    def __init__(
        self, residuals: Residuals, origin: FloatArray, minimum: FloatArray, spread: FloatArray, cut: FloatArray,
        which: IntArray, side: FloatArray, free: BoolArray, lower: FloatArray, upper: FloatArray,
        *, subset: Subset | None = None,
    ) -> None:  # fmt: skip
        self.residuals_of: Subset = subset or (lambda _rows: residuals)
        self.minimum, self.root, self.which, self.side = minimum, np.sqrt(cut), which, side
        self.lower, self.upper = np.broadcast_to(lower, origin.shape), np.broadcast_to(upper, origin.shape)
        every = np.arange(len(which))
        self.free = free.copy()
        self.free[every, which] = False
        # trials start from the farthest point still below the cut: from a point beyond, they can stray to another branch
        self.inside = origin.copy()
        self.centre = origin[every, which]
        bound = np.where(side > 0, self.upper[every, which], self.lower[every, which])
        self.room = np.abs(bound - self.centre)
        variance = np.maximum(spread[every, which, which], 1e-20)
        self.first = 0.5 * np.sqrt(cut * variance)
        self.slope = spread[every, which] / variance[:, None]
        self.better, self.lowest = origin.copy(), minimum.copy()

    @property
    def found_deeper(self) -> BoolArray:
        return np.asarray(self.lowest < self.minimum - _DEEPER * (1.0 + self.minimum))

    def rise(self, rows: IntArray, distance: FloatArray) -> FloatArray:
        """Root of the rise less that of the cut, of these problems at these distances from their minima."""
        which = self.which[rows]
        place = self.centre[rows] + self.side[rows] * distance
        shift = place - self.inside[rows, which]
        start = self.inside[rows] + self.slope[rows] * shift[:, None]
        start[np.arange(len(rows)), which] = place
        found = minimise(
            self.residuals_of(rows), start, self.free[rows], self.lower[rows], self.upper[rows], 60, _PROFILE_TOLERANCE,
            subset=lambda some: self.residuals_of(rows[some]),
        )  # fmt: skip
        rise = found.sum_of_squares - self.minimum[rows]
        value: FloatArray = np.sqrt(np.maximum(rise, 0.0)) - self.root[rows]
        self.inside[rows] = np.where((value < 0)[:, None], found.theta, self.inside[rows])
        lower = found.sum_of_squares < self.lowest[rows]
        self.better[rows[lower]] = found.theta[lower]
        self.lowest[rows[lower]] = found.sum_of_squares[lower]
        return value

    def run(self) -> FloatArray:
        """The limits (problems,), infinite where the profile stays below the cut up to the bound."""
        near, far = np.zeros(len(self.which)), np.minimum(self.first, self.room)
        near_value = -self.root
        far_value = self.rise(np.arange(len(far)), far)
        for _ in range(_DOUBLINGS):
            short = np.flatnonzero((far_value < 0) & (far < self.room))
            if not len(short):
                break
            near[short], near_value[short] = far[short], far_value[short]
            far[short] = np.minimum(2.0 * far[short], self.room[short])
            far_value[short] = self.rise(short, far[short])
        distance = self._close_in(near, near_value, far, far_value)
        return np.where(np.isfinite(distance), self.centre + self.side * distance, self.side * np.inf)

    def _close_in(
        self, near: FloatArray, near_value: FloatArray, far: FloatArray, far_value: FloatArray
    ) -> FloatArray:
        limit = np.full(len(far), np.inf)
        rows = np.flatnonzero(far_value >= 0)
        for round_ in range(_ROUNDS):
            if not len(rows):
                break
            low, high, low_value, high_value = near[rows], far[rows], near_value[rows], far_value[rows]
            climb = np.where(high_value > low_value, high_value - low_value, 1.0)
            chord = low - low_value * (high - low) / climb
            # a bisection now and then, for a rise that is far from straight
            trial = 0.5 * (low + high) if round_ % 4 == 3 else chord
            value = self.rise(rows, trial)
            inside = value < 0
            # Illinois: halve the value at the end that stays, so that both ends move
            near[rows], far[rows] = np.where(inside, trial, low), np.where(inside, high, trial)
            far_value[rows] = np.where(inside, high_value / 2.0, value)
            near_value[rows] = np.where(inside, value, low_value / 2.0)
            limit[rows] = trial
            close = (np.abs(value) < 1e-3 * self.root[rows]) | (far[rows] - near[rows] < 1e-9 * far[rows])
            rows = rows[~close]
        return limit
