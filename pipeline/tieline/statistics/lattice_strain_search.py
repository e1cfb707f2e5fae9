"""Where the lattice-strain fit starts and comes to rest: the best of many starts, with the covariance taken at the curve."""

from __future__ import annotations

import numpy as np

from tieline.statistics.lattice_strain_problem import (
    LEVEL,
    MODULUS,
    OVERLAP,
    RADIUS,
    STRAIN_FACTOR,
    Problem,
    strain_energy,
)
from tieline.statistics.lattice_strain_stack import Errors
from tieline.statistics.least_squares import BoolArray, FloatArray, IntArray, Minimum, minimise

# Errors proportional to D are taken at the curve, but where that is off by more than this factor, at this factor from the
# value: a curve that falls to nothing would otherwise leave no error at all.
_FARTHEST = 100.0
_COVARIANCE_ROUNDS = 4
# Starts that lead after this many steps are carried to the end.
_FIRST_STEPS, _LEADING = 10, 3
# More steps only creep along valleys where the values tell nothing: the limits are found from anywhere in them.
_ITERATIONS = 100
_RADII, _FRACTIONS = 9, np.array([0.03, 0.4, 0.95])


def solve(problem: Problem, errors: Errors, free: BoolArray, base: FloatArray) -> tuple[Problem, FloatArray]:
    """The problems with the covariance at their curves, and where they come to rest (problems, 4).

    free, base: (problems, 4), which parameters are fitted, and the values of those that are not.
    """
    starts, owner = _starts(problem, free, base)
    first = _run(problem, starts, owner, free, _FIRST_STEPS)
    leading = _rank(first.sum_of_squares, owner) < _LEADING
    owner = owner[leading]
    second = _run(problem, first.theta[leading], owner, free)
    theta = second.theta[_rank(second.sum_of_squares, owner) == 0]
    measured = np.maximum(problem.value, 0.0)
    curve, rows = measured.copy(), np.flatnonzero(errors.relative)
    for _ in range(_COVARIANCE_ROUNDS - 1):
        part = problem.take(rows)
        model, _slopes = part.apparent(theta[rows], part.radius)
        model = np.clip(model, measured[rows] / _FARTHEST, measured[rows] * _FARTHEST)
        moved = (np.abs(model - curve[rows]) > 1e-7 * curve[rows]).any(axis=1)
        rows = rows[moved]
        if not len(rows):
            break
        curve[rows] = model[moved]
        problem = problem.with_errors(rows, *errors.take(rows).at(curve[rows]))
        theta[rows] = _run(problem, theta[rows], rows, free).theta
    return problem, theta


def _run(
    problem: Problem, starts: FloatArray, owner: IntArray, free: BoolArray, iterations: int = _ITERATIONS
) -> Minimum:
    """Minima from starts (number, 4) of the problems `owner` (number,)."""
    many = problem.take(owner)
    return minimise(
        many.residuals, starts, free[owner], many.lower, many.upper, iterations, subset=many.subset
    )


def _rank(cost: FloatArray, owner: IntArray) -> IntArray:
    """(number,) the place of each start among those of its problem, 0 the best; owner must be sorted."""
    order = np.lexsort((cost, owner))
    place = np.empty_like(order)
    place[order] = np.arange(len(order)) - np.searchsorted(owner, owner)
    return place


def _starts(problem: Problem, free: BoolArray, base: FloatArray) -> tuple[FloatArray, IntArray]:
    """Starts (number, 4) and whose they are: for several r0 and f, ln D0 and E by straight-line least squares.

    ln D of the curve is linear in ln D0 and E.
    """
    known = problem.whitening.any(axis=2)
    limited = np.isfinite(problem.limit)
    used = np.concatenate([known, limited], axis=1)
    radii = np.concatenate([problem.radius, problem.limit_radius], axis=1)
    limit = np.where(limited, problem.limit, 1.0)
    values = np.concatenate([problem.value, 0.3 * limit], axis=1)
    sd = np.concatenate([problem.sd, 0.5 * limit], axis=1)
    least, most = np.where(used, radii, np.inf).min(axis=1), np.where(used, radii, -np.inf).max(axis=1)
    margin = 0.05 + 0.2 * (most - least)
    r0s = np.linspace(least - margin, most + margin, _RADII, axis=1)
    r0s = np.where(free[:, [RADIUS]], r0s, base[:, [RADIUS]])
    lowest = np.maximum(np.where(used, values, np.inf).min(axis=1), 1e-6)
    fractions = np.where(free[:, [OVERLAP]], lowest[:, None] * _FRACTIONS, base[:, [OVERLAP]])
    r0, fraction = r0s[:, :, None, None], fractions[:, None, :, None]  # (problems, r0, f, values)
    strain = (
        STRAIN_FACTOR
        / problem.temperature_K[:, None, None, None]
        * strain_energy(radii[:, None, None, :], r0)
    )
    crystal = np.maximum((values[:, None, None, :] - fraction) / (1.0 - fraction), 0.2 * sd[:, None, None, :])
    weight = np.minimum((crystal / sd[:, None, None, :]) ** 2, 1e4) * used[:, None, None, :]
    total = weight.sum(axis=-1)
    level = np.sum(weight * np.log(crystal), axis=-1) / total
    centre = np.sum(weight * strain, axis=-1) / total
    away = strain - centre[..., None]
    scatter = np.maximum(np.sum(weight * away**2, axis=-1), 1e-12)
    modulus = -np.sum(weight * away * (np.log(crystal) - level[..., None]), axis=-1) / scatter
    start = np.broadcast_to(base[:, None, None, :], (*scatter.shape, 4)).copy()
    start[..., RADIUS] = r0[..., 0]
    start[..., OVERLAP] = fraction[..., 0]
    held = ~free[:, None, None, :]
    start[..., MODULUS] = np.where(
        held[..., MODULUS], base[:, None, None, MODULUS], np.log(np.clip(modulus, 20.0, 5000.0))
    )
    start[..., LEVEL] = np.where(
        held[..., LEVEL], base[:, None, None, LEVEL], level + np.exp(start[..., MODULUS]) * centre
    )
    # one r0, or one f, is enough where it is held
    wanted = (free[:, [RADIUS]] | (np.arange(_RADII) == 0))[:, :, None]
    wanted = wanted & (free[:, [OVERLAP]] | (np.arange(len(_FRACTIONS)) == 0))[:, None, :]
    return start[wanted], np.nonzero(wanted)[0]
