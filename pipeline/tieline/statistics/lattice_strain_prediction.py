"""What a fitted lattice-strain curve says of other radii, and what each value says of the curve.

Public: `predict`, `leave_one_out`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from tieline.statistics.lattice_strain import FITTED, CurveFit, different_radii, free_parameters
from tieline.statistics.lattice_strain_problem import Coefficients, Problem, spreads
from tieline.statistics.least_squares import BoolArray, FloatArray, ProfileSearch, minimise


@dataclass(frozen=True)
class Predicted:
    """D of the crystal at other radii, (k,), with its interval; nan where the fit cannot tell."""

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray


def predict(fit: CurveFit, radius: FloatArray) -> Predicted:
    """D at radii (Å) of the same charge and site, with the profile-likelihood interval at the fit's confidence.

    The interval is that of the curve: how far real elements lie off it is not included. sd to first order.
    """
    radius = np.asarray(radius, dtype=np.float64)
    if fit.verdict != FITTED or fit.problem is None or len(radius) == 0:
        nothing = np.full(len(radius), np.nan)
        return Predicted(nothing, nothing, nothing, nothing)
    value, gradient = fit.problem.curve(fit.theta[None, :], radius)
    free = free_parameters(fit)
    relative = np.sqrt(
        np.maximum(np.einsum("np,pq,nq->n", gradient[0], fit.log_covariance, gradient[0]), 0.0)
    )
    if (
        not free[0] or fit.problem.priors[0] is not None
    ):  # D0 is held: its level cannot move to another radius
        factor = np.exp(fit.quantile * np.sqrt(fit.scale) * relative)
        return Predicted(value[0], value[0] * relative, value[0] / factor, value[0] * factor)
    # the curve's level at each radius takes the place of D0: its profile is that of the predicted D
    turn = np.tile(np.eye(4), (len(radius), 1, 1))
    turn[:, 0, :] = gradient[0]
    turned = turn @ fit.log_covariance @ turn.transpose(0, 2, 1)
    origin = np.tile(fit.theta, (len(radius), 1))
    origin[:, 0] = np.log(value[0])
    side = np.repeat([-1.0, 1.0], len(radius))
    problem = replace(fit.problem, reference=np.tile(radius, 2))
    cost = float(np.sum(fit.problem.residuals(fit.theta[None, :])[0] ** 2))
    search = ProfileSearch(
        problem.residuals, np.tile(origin, (2, 1)), np.full(len(side), cost), np.tile(turned, (2, 1, 1)),
        fit.scale * fit.quantile**2, np.zeros(len(side), dtype=np.int64), side, free, *problem.bounds,
    )  # fmt: skip
    low, high = np.exp(search.run()).reshape(2, -1)
    return Predicted(value[0], value[0] * relative, low, high)


@dataclass(frozen=True)
class Influence:
    """What leaving out each value does, one row per value.

    shift: (n, 3) change of D0, r0, E in their standard deviations; deleted_sigmas: (n,) the value less the D that the
    other values predict for it, in standard deviations; nan where the rest has no fit.
    """

    shift: FloatArray
    deleted_sigmas: FloatArray


def leave_one_out(data: Coefficients, fit: CurveFit) -> Influence:
    """Refit without each value in turn, from where the whole fit came to rest."""
    count = len(data.value)
    shift, deleted = np.full((count, 3), np.nan), np.full(count, np.nan)
    if fit.verdict != FITTED or fit.problem is None:
        return Influence(shift, deleted)
    free = free_parameters(fit)
    problem = replace(fit.problem, left_out=np.arange(count))
    found = minimise(
        problem.residuals, np.tile(fit.theta, (count, 1)), np.tile(free, (count, 1)), *problem.bounds
    )
    uncertain = rest_spreads(problem, found.theta, free)
    value, gradient = problem.apparent(found.theta, data.radius)
    sd = np.sqrt(np.diag(fit.log_covariance))[:3]
    for index, own in enumerate(uncertain):
        if own is not None:
            moved = (found.theta[index] - fit.theta)[:3]
            shift[index] = np.where(sd > 0, moved / np.where(sd > 0, sd, 1.0), 0.0)
            slope = gradient[index, index]
            variance = fit.problem.covariance[index, index] + slope @ own @ slope
            deleted[index] = (data.value[index] - value[index, index]) / np.sqrt(variance)
    return Influence(shift, deleted)


def rest_spreads(problem: Problem, theta: FloatArray, free: BoolArray) -> list[FloatArray | None]:
    """Covariances of fits that each leave out one value; None where the rest has too few different radii."""
    known = sum(prior is not None for prior in problem.priors)
    enough = [
        different_radii(np.delete(problem.data.radius, index)) + known >= free.sum()
        for index in range(len(problem.data.radius))
    ]
    return [one if kept else None for one, kept in zip(spreads(problem, theta, free), enough, strict=True)]
