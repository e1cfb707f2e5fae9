"""What a fitted lattice-strain curve says of other radii, and what each value says of the curve.

Public: `predict` and `leave_one_out`; `predictions` and `influences` for many fits side by side.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from tieline.statistics.lattice_strain_few import Linear, cut
from tieline.statistics.lattice_strain_outcome import FITTED, CurveFit, different_radii
from tieline.statistics.lattice_strain_problem import LEVEL, Problem
from tieline.statistics.lattice_strain_stack import side_by_side
from tieline.statistics.least_squares import (
    BoolArray,
    FloatArray,
    IntArray,
    ProfileSearch,
    covariances,
    minimise,
)


@dataclass(frozen=True)
class Fits:
    """Many fits as one problem: theta and free (fits, 4), spread (fits, 4, 4), scale and dof of the scatter (fits,)."""

    problem: Problem
    theta: FloatArray
    spread: FloatArray
    free: BoolArray
    scale: FloatArray
    dof: FloatArray

    @classmethod
    def of(cls, fits: Sequence[CurveFit]) -> Fits:
        return cls(
            side_by_side([fit.problem for fit in fits if fit.problem is not None]),
            *(np.array([getattr(fit, name) for fit in fits]) for name in ("theta", "log_covariance", "free", "scale", "dof")),
        )  # fmt: skip

    def take(self, rows: IntArray) -> Fits:
        return Fits(
            self.problem.take(rows), self.theta[rows], self.spread[rows], self.free[rows], self.scale[rows], self.dof[rows]
        )  # fmt: skip

    def cut(self, direction: FloatArray, confidence: float) -> FloatArray:
        """Rise of the sum of squares at the ends of the interval along `direction` (fits, 4)."""
        linear = Linear.of(self.problem, self.theta, self.spread)
        return cut(linear, direction, self.scale, self.dof, confidence)


@dataclass(frozen=True)
class Predicted:
    """D of the crystal at other radii, (k,), with its interval; nan where the fit cannot tell."""

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray


def predict(fit: CurveFit, radius: FloatArray) -> Predicted:
    """`predictions` of a single fit."""
    return predictions([fit], [radius])[0]


def predictions(fits: Sequence[CurveFit], radii: Sequence[FloatArray]) -> list[Predicted]:
    """D at radii (Å) of the same charge and site, with the profile-likelihood interval; all fits by the same confidence.

    The interval is that of the curve: how far real elements lie off it is not included. sd to first order.
    """
    told = [fit.verdict == FITTED for fit in fits]
    found = iter(
        levels(
            [fit for fit, known in zip(fits, told, strict=True) if known],
            [radius for radius, known in zip(radii, told, strict=True) if known],
        )
    )
    return [
        next(found) if known else Predicted(*np.full((4, len(radius)), np.nan))
        for radius, known in zip(radii, told, strict=True)
    ]


def levels(fits: Sequence[CurveFit], radii: Sequence[FloatArray]) -> list[Predicted]:
    """`predictions` of fits that came to rest, whether or not their parameters have limits."""
    if not len(fits):
        return []
    sizes = [len(radius) for radius in radii]
    whole = Fits.of(fits).take(np.repeat(np.arange(len(fits)), sizes))
    numbers = _levels(whole, np.concatenate(radii), fits[0].confidence)
    return [Predicted(*one) for one in np.split(numbers, np.cumsum(sizes)[:-1], axis=1)]


def _levels(fits: Fits, radius: FloatArray, confidence: float) -> FloatArray:
    """(4, k) value, sd, low and high of each curve at its radius."""
    many, theta, spread, free = fits.problem, fits.theta, fits.spread, fits.free
    value, gradient = many.curve(theta, radius[:, None])
    value, gradient = value[:, 0], gradient[:, 0]
    relative = np.sqrt(np.maximum(np.einsum("bp,bpq,bq->b", gradient, spread, gradient), 0.0))
    rise = fits.cut(gradient, confidence)
    # D0 that is held cannot move its level to another radius; elsewhere the level there takes the place of D0, and its
    # profile is that of the predicted D
    movable = free[:, LEVEL] & (many.prior_weight[:, LEVEL] == 0)
    factor = np.exp(np.where(movable, 0.0, np.sqrt(rise) * relative))
    low, high = value / factor, value * factor
    moves = np.flatnonzero(movable)
    turn = np.tile(np.eye(4), (len(moves), 1, 1))
    turn[:, LEVEL, :] = gradient[moves]
    turned = turn @ spread[moves] @ turn.transpose(0, 2, 1)
    origin = theta[moves].copy()
    origin[:, LEVEL] = np.log(value[moves])
    cost = np.sum(many.residuals(theta)[0] ** 2, axis=1)[moves]
    both = np.tile(np.arange(len(moves)), 2)
    there = replace(many.take(moves[both]), reference=radius[moves[both]])
    search = ProfileSearch(
        there.residuals, origin[both], cost[both], turned[both], rise[moves[both]], np.full(len(both), LEVEL),
        np.repeat([-1.0, 1.0], len(moves)), free[moves[both]], there.lower, there.upper, subset=there.subset,
    )  # fmt: skip
    low[moves], high[moves] = np.exp(search.run()).reshape(2, -1)
    return np.array([value, value * relative, low, high])


@dataclass(frozen=True)
class Rest:
    """Fits that each leave out one value of a series, fit after fit and value after value.

    fits: the fits, one per value left out, with scale and dof of the whole series; spread is nan where too few values are
    left. owner, index: (problems,) which fit, and which of its values is left out.
    """

    fits: Fits
    owner: IntArray
    index: IntArray


def without_each(fits: Sequence[CurveFit]) -> Rest:
    """Refit every series without each of its values in turn, from where the whole fit came to rest."""
    sizes = [len(fit.curve) for fit in fits]
    owner, index = np.repeat(np.arange(len(fits)), sizes), np.concatenate([np.arange(size) for size in sizes])
    whole = Fits.of(fits).take(owner)
    problem = whole.problem.without(index)
    found = minimise(
        problem.residuals, whole.theta, whole.free, problem.lower, problem.upper, subset=problem.subset
    )
    spread = covariances(problem.residuals(found.theta)[1], whole.free)
    known = np.sum(problem.prior_weight > 0, axis=1)
    for row, (fit, left_out) in enumerate(zip(owner, index, strict=True)):
        left = np.delete(problem.radius[row, : sizes[fit]], left_out)
        if different_radii(left) + known[row] < whole.free[row].sum():
            spread[row] = np.nan
    return Rest(replace(whole, problem=problem, theta=found.theta, spread=spread), owner, index)


@dataclass(frozen=True)
class Influence:
    """What leaving out each value does, one row per value.

    shift: (n, 3) change of D0, r0, E in their standard deviations; deleted_sigmas: (n,) the value less the D that the
    other values predict for it, in standard deviations; nan where the rest has no fit.
    """

    shift: FloatArray
    deleted_sigmas: FloatArray


def leave_one_out(fit: CurveFit) -> Influence:
    """`influences` of a single fit."""
    return influences([fit])[0]


def influences(fits: Sequence[CurveFit]) -> list[Influence]:
    """What each value does to its curve, from fits without it."""
    told = [row for row, fit in enumerate(fits) if fit.verdict == FITTED]
    found = [Influence(np.full((len(fit.curve), 3), np.nan), np.full(len(fit.curve), np.nan)) for fit in fits]
    if not told:
        return found
    rest = without_each([fits[row] for row in told])
    whole, left, every = (
        Fits.of([fits[row] for row in told]).take(rest.owner),
        rest.fits,
        np.arange(len(rest.owner)),
    )
    value, gradient = left.problem.apparent(left.theta, left.problem.radius)
    sd = np.sqrt(np.einsum("bpp->bp", whole.spread))[:, :3]
    shift = np.where(sd > 0, (left.theta - whole.theta)[:, :3] / np.where(sd > 0, sd, 1.0), 0.0)
    shift[np.isnan(left.spread[:, 0, 0])] = np.nan
    slope = gradient[every, rest.index]
    variance = whole.problem.sd[every, rest.index] ** 2 + np.einsum("bp,bpq,bq->b", slope, left.spread, slope)
    deleted = (whole.problem.value - value)[every, rest.index] / np.sqrt(variance)
    for place, row in enumerate(told):
        own = rest.owner == place
        found[row] = Influence(shift[own], deleted[own])
    return found
