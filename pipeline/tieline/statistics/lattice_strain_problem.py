"""The lattice-strain curve as a least-squares problem: data, priors and residuals."""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np

from tieline.statistics.least_squares import FloatArray, IntArray, Residuals

# 4 pi N_A / R with E in GPa and lengths in Å: 1e9 Pa x 1e-30 m3; N_A and R of the SI (2019)
STRAIN_FACTOR = 4.0 * np.pi * 6.02214076e23 * 1e-21 / 8.314462618

PARAMETERS = ("D0", "r0", "E", "overlap")
LEVEL, RADIUS, MODULUS, OVERLAP = range(4)
_NO_LIMITS = np.zeros(0)


def strain_energy(radius: FloatArray, r0: FloatArray) -> FloatArray:
    """½ r0 (r - r0)² + ⅓ (r - r0)³ in Å³, for arrays that broadcast."""
    away = radius - r0
    return away * away * (0.5 * r0 + away / 3.0)


@dataclass(frozen=True)
class Prior:
    """What is known of a parameter before the fit: its value and standard deviation; sd 0 fixes it."""

    value: float
    sd: float


@dataclass(frozen=True)
class Coefficients:
    """Partition coefficients of ions of one charge on one site.

    radius in Å and value: (n,). variance: (n,) of the independent errors that do not depend on the value that happened to
    be measured (scatter of spots, counting). relative_variance: (n,) of independent errors proportional to D, of ln D.
    dof: (n,) degrees of freedom with which these independent errors are known; infinite, the default, for known ones.
    relative_covariance: (n, n) of further errors of ln D, such as shared calibration and internal-standard factors. What is
    proportional to D is taken at the fitted curve, not at the measured values: otherwise values that happen to be low
    weigh more and shared errors pull the curve below all of them (Peelle's puzzle; D'Agostini 1994, Nucl. Instrum. Methods
    A 346:306).

    limit_radius, limit, limit_sd: (m,) of coefficients known only to lie below `limit`, which is blurred by a normal
    error of limit_sd; they must be independent of the others.
    """

    radius: FloatArray
    value: FloatArray
    variance: FloatArray
    relative_covariance: FloatArray | None = None
    limit_radius: FloatArray = field(default_factory=lambda: _NO_LIMITS)
    limit: FloatArray = field(default_factory=lambda: _NO_LIMITS)
    limit_sd: FloatArray = field(default_factory=lambda: _NO_LIMITS)
    relative_variance: FloatArray | None = None
    dof: FloatArray | None = None

    def __post_init__(self) -> None:
        n, m = len(self.radius), len(self.limit_radius)
        shared, own = self.relative_covariance, self.relative_variance
        if not (len(self.value) == len(self.variance) == n) or (
            shared is not None and np.shape(shared) != (n, n)
        ):
            raise ValueError(f"{n} radii need {n} values, {n} variances and a covariance of {n} x {n}")
        if any(one is not None and np.shape(one) != (n,) for one in (own, self.dof)):
            raise ValueError(f"{n} radii need {n} relative variances and {n} degrees of freedom")
        if not (len(self.limit) == len(self.limit_sd) == m):
            raise ValueError(f"{m} radii of limits need {m} limits with {m} standard deviations")
        spread = self.variance + (0.0 if shared is None else np.diag(shared)) + (0.0 if own is None else own)
        everything = (self.radius, self.value, spread, self.limit_radius, self.limit, self.limit_sd)
        if not all(np.all(np.isfinite(array)) for array in everything) or (n and not np.all(spread > 0)):
            raise ValueError(
                "radii, values, limits must be finite and every value needs an uncertainty above zero"
            )
        if m and (np.any(self.limit <= 0) or np.any(self.limit_sd <= 0)):
            raise ValueError("limits and their standard deviations must be above zero")
        if self.dof is not None and not np.all(self.dof > 0):
            raise ValueError("degrees of freedom must be above zero")

    def own_variance_at(self, curve: FloatArray) -> FloatArray:
        """(n,) variance of the independent errors if `curve` (n,) are the true values."""
        return self.variance + (0.0 if self.relative_variance is None else self.relative_variance * curve**2)

    def covariance_at(self, curve: FloatArray) -> FloatArray:
        """(n, n) covariance of the values if `curve` (n,) are the true ones."""
        total = np.diag(self.own_variance_at(curve))
        if self.relative_covariance is not None:
            total = total + self.relative_covariance * np.outer(curve, curve)
        return total


@dataclass(frozen=True)
class Problem:
    """Residuals of (ln D, r0, ln E, f) for problems solved side by side; every array has one row per problem.

    radius, value: (problems, n); whitening: (problems, n, n) turns deviations into independent residuals of unit variance.
    A series shorter than the longest is filled up with values whose rows and columns of `whitening` are zero. sd: (problems,
    n) of every value; own_variance, dof: (problems, n) its independent part, and how well that is known. limit_*: (problems,
    m), filled up with limits at infinity. temperature_K: (problems,). prior_centre and prior_weight: (problems, 4) on the
    scale that is fitted, the weight one over the standard deviation, zero where there is no prior; any_prior: whether one of
    these problems, or of those they were taken from, has one. lower, upper: (problems,
    4) bounds of the search.

    ln D is the curve's level at r0, or at the radius `reference` (problems,) where that is given.
    """

    radius: FloatArray
    value: FloatArray
    whitening: FloatArray
    sd: FloatArray
    own_variance: FloatArray
    dof: FloatArray
    limit_radius: FloatArray
    limit: FloatArray
    limit_sd: FloatArray
    temperature_K: FloatArray  # noqa: N815 - a unit
    prior_centre: FloatArray
    prior_weight: FloatArray
    lower: FloatArray
    upper: FloatArray
    any_prior: bool
    reference: FloatArray | None = None

    def take(self, rows: IntArray) -> Problem:
        """These problems, in this order; one may be taken several times."""
        arrays: dict[str, Any] = {
            one.name: getattr(self, one.name)[rows]
            for one in fields(self)
            if isinstance(getattr(self, one.name), np.ndarray)
        }
        return replace(self, **arrays)

    def subset(self, rows: IntArray) -> Residuals:
        return self.take(rows).residuals

    def with_errors(self, rows: IntArray, whitening: FloatArray, sd: FloatArray, own: FloatArray) -> Problem:
        """The same problems with other errors of some of them, `rows`."""
        arrays = {"whitening": whitening, "sd": sd, "own_variance": own}
        changed = {name: getattr(self, name).copy() for name in arrays}
        for name, array in arrays.items():
            changed[name][rows] = array
        return replace(self, **changed)

    def without(self, index: IntArray) -> Problem:
        """Each problem without its value `index` (problems,): what that value says is projected out of the residuals."""
        every = np.arange(len(index))
        column = self.whitening[every, :, index]
        known = np.sum(column**2, axis=1)[:, None, None]
        onto = column[:, None, :] @ self.whitening
        return replace(
            self, whitening=self.whitening - column[:, :, None] * onto / np.where(known > 0, known, 1.0)
        )

    def curve(self, theta: FloatArray, radius: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D of the crystal alone at the radii (problems, k), and d ln D / d theta, (problems, k, 4)."""
        r0, modulus = theta[:, [RADIUS]], np.exp(theta[:, [MODULUS]])
        factor = STRAIN_FACTOR * modulus / self.temperature_K[:, None]
        strain, slope = strain_energy(radius, r0), -0.5 * (radius**2 - r0**2)
        if self.reference is not None:
            strain = strain - strain_energy(self.reference[:, None], r0)
            slope = slope + 0.5 * (self.reference[:, None] ** 2 - r0**2)
        strain = factor * strain
        gradient = np.zeros((*strain.shape, 4))
        gradient[..., LEVEL] = 1.0
        gradient[..., RADIUS] = -factor * slope
        gradient[..., MODULUS] = -strain
        log_d = np.minimum(np.maximum(theta[:, [LEVEL]] - strain, -300.0), 60.0)
        return np.exp(log_d), gradient

    def apparent(self, theta: FloatArray, radius: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D with the overlap, D + f (1 - D), and its derivatives."""
        crystal, gradient = self.curve(theta, radius)
        fraction = theta[:, [OVERLAP]]
        gradient *= (crystal * (1.0 - fraction))[..., None]
        gradient[..., OVERLAP] = 1.0 - crystal
        return crystal + fraction * (1.0 - crystal), gradient

    def residuals(self, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values, limits and priors in units of their standard deviation, with the Jacobian."""
        model, slopes = self.apparent(theta, self.radius)
        parts = [(self.whitening @ (self.value - model)[:, :, None])[:, :, 0]]
        jacobians = [-(self.whitening @ slopes)]
        if self.limit.shape[1]:
            below, below_slopes = self._limits(theta)
            parts.append(below)
            jacobians.append(below_slopes)
        if self.any_prior:
            parts.append((theta - self.prior_centre) * self.prior_weight)
            jacobians.append(self.prior_weight[:, :, None] * np.eye(4))
        return np.concatenate(parts, axis=1), np.concatenate(jacobians, axis=1)

    def _limits(self, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        """sqrt(-2 ln Φ((limit - D) / sd)): its square is the deviance of a value known to lie below a limit."""
        from scipy.special import erfcx, log_ndtr

        model, slopes = self.apparent(theta, self.limit_radius)
        z = (self.limit - model) / self.limit_sd
        residual = np.sqrt(-2.0 * log_ndtr(z))
        ratio = np.sqrt(2.0 / np.pi) / erfcx(-z / np.sqrt(2.0))
        slope = np.where(residual > 1e-12, ratio / np.maximum(residual, 1e-12), 0.0) / self.limit_sd
        return residual, slopes * slope[..., None]


def internal(index: int, prior: Prior) -> tuple[float, float]:
    """A prior on the scale that is fitted."""
    if index in (RADIUS, OVERLAP):
        return prior.value, prior.sd
    return float(np.log(prior.value)), prior.sd / prior.value
