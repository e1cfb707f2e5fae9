"""What errors that are estimated from few values do to intervals and tests of a lattice-strain curve."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from tieline.statistics.lattice_strain_problem import Problem
from tieline.statistics.least_squares import BoolArray, FloatArray, IntArray

# Degrees of freedom beyond this change no quantile.
_MANY = 1e9
EXCESS = 0.05


@dataclass(frozen=True)
class Linear:
    """Fits close to their minima: all that the degrees of freedom of the errors act on.

    slopes: (problems, n, 4) of the values, times the inverse covariance; information: (problems, n) diagonal of that
    inverse; uncertainty: (problems, n) variance of every independent variance, zero where it is known; spread: (problems, 4,
    4) covariance of the parameters.
    """

    slopes: FloatArray
    information: FloatArray
    uncertainty: FloatArray
    spread: FloatArray

    @classmethod
    def of(cls, problem: Problem, theta: FloatArray, spread: FloatArray) -> Linear:
        _model, slopes = problem.apparent(theta, problem.radius)
        inverse = problem.whitening.transpose(0, 2, 1) @ problem.whitening
        uncertainty = 2.0 * problem.own_variance**2 / problem.dof
        return cls(inverse @ slopes, np.einsum("bnn->bn", inverse), uncertainty, spread)

    def take(self, rows: IntArray) -> Linear:
        return Linear(**{name: array[rows] for name, array in vars(self).items()})

    def unexplained(self) -> FloatArray:
        """(problems, n) diagonal of the inverse covariance less the part that the parameters take up."""
        taken = np.einsum("bnp,bpq,bnq->bn", self.slopes, self.spread, self.slopes)
        return np.asarray(np.maximum(self.information - taken, 0.0))

    def few(self, direction: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Factor of the variance along `direction` (problems, 4) of the parameters, and its degrees of freedom, (problems,).

        To first order in one over the degrees of freedom of the errors: the factor makes up for weights that are taken from
        these errors, the degrees of freedom are Satterthwaite's (Kenward & Roger 1997, Biometrics 53:983; for a weighted
        mean they are those of Meier 1953, Biometrics 9:59).
        """
        along = np.einsum("bpq,bq->bp", self.spread, direction)
        variance = np.einsum("bp,bp->b", along, direction)[:, None]
        pull = np.einsum("bnp,bp->bn", self.slopes, along) ** 2 / np.where(variance > 0, variance, 1.0)
        added = 2.0 * np.sum(self.uncertainty * pull * self.unexplained(), axis=1)
        doubt = np.sum(self.uncertainty * pull**2, axis=1)
        return 1.0 + added, 2.0 / np.maximum(doubt, 2.0 / _MANY)

    def scatter(self, dof: FloatArray) -> tuple[FloatArray, FloatArray]:
        """What to divide chi-square/dof by, and the second degrees of freedom of the F distribution it then follows.

        Welch (1951, Biometrika 38:330), with what the curve leaves of a value in the place of one less its share of the mean.
        """
        left = 0.5 * np.sum(self.uncertainty * self.unexplained() ** 2, axis=1)
        both = dof * (dof + 2.0)
        divisor = 1.0 + 2.0 * (dof - 1.0) / np.maximum(both, 1.0) * left
        return divisor, np.maximum(both, 1.0) / np.maximum(3.0 * left, 1.0 / _MANY)


@dataclass(frozen=True)
class Scatter:
    """Scatter of values about their curves, (problems,) each.

    chi_square over dof, divided by `divisor`, follows F with dof and second_dof degrees of freedom if the errors are right;
    p_value of more. scale: that ratio where p < 0.05, else 1.
    """

    chi_square: FloatArray
    dof: FloatArray
    p_value: FloatArray
    scale: FloatArray
    divisor: FloatArray
    second_dof: FloatArray

    def excess(self) -> FloatArray:
        """The chi_square over dof that is exceeded in 5 % of cases."""
        dof = np.maximum(self.dof, 1.0)
        limit = special.fdtri(dof, np.minimum(self.second_dof, 1e6), 1.0 - EXCESS)
        limit = np.where(self.second_dof > 1e6, special.chdtri(dof, EXCESS) / dof, limit)
        return np.asarray(np.where(self.dof > 0, self.divisor * limit, np.nan))

    def take(self, rows: IntArray) -> Scatter:
        return Scatter(**{name: array[rows] for name, array in vars(self).items()})


def scatter_of(problem: Problem, theta: FloatArray, free: BoolArray, linear: Linear) -> Scatter:
    """How far the values, and what is known beforehand, lie off the curve."""
    residuals, _jacobian = problem.residuals(theta)
    width, limits = problem.value.shape[1], problem.limit.shape[1]
    squares = residuals**2
    chi_square = np.sum(squares[:, :width], axis=1) + np.sum(squares[:, width + limits :], axis=1)
    known = np.sum(problem.prior_weight > 0, axis=1)
    dof = (problem.whitening.any(axis=2).sum(axis=1) + known - free.sum(axis=1)).astype(np.float64)
    positive = np.maximum(dof, 1.0)
    divisor, second = linear.scatter(positive)
    ratio = chi_square / positive / divisor
    p_value = np.where(dof > 0, f_tail(positive, second, ratio), np.nan)
    return Scatter(
        chi_square, dof, p_value, np.where(p_value < EXCESS, np.maximum(ratio, 1.0), 1.0), divisor, second
    )


def cut(
    linear: Linear, direction: FloatArray, scale: FloatArray, scatter_dof: FloatArray, confidence: float
) -> FloatArray:
    """Rise of the sum of squares at the ends of the interval of a combination of parameters, (problems,).

    Where the scatter is too large, scale > 1, the interval rests on it and its degrees of freedom.
    """
    factor, dof = linear.few(direction)
    dof = np.where(scale > 1.0, np.minimum(dof, scatter_dof), dof)
    return np.asarray(scale * factor * quantile(dof, confidence) ** 2)


def f_tail(dof: FloatArray, second: FloatArray, ratio: FloatArray) -> FloatArray:
    """Probability of a larger F, of a larger chi-square/dof where the second degrees of freedom are very many."""
    tail = special.fdtrc(dof, np.minimum(second, 1e6), ratio)
    return np.asarray(np.where(second > 1e6, special.chdtrc(dof, dof * ratio), tail))


def quantile(dof: FloatArray, confidence: float) -> FloatArray:
    """Two-sided quantile of Student's t, of the normal distribution where dof is very large."""
    probability = 0.5 + 0.5 * confidence
    student = special.stdtrit(np.minimum(dof, 1e6), probability)
    return np.asarray(np.where(dof > 1e6, special.ndtri(probability), student))
