"""The lattice-strain curve as a least-squares problem: residuals, starts and the covariance at the curve."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from tieline.statistics.least_squares import BoolArray, FloatArray, IntArray, Minimum, covariance, minimise

# 4 pi N_A / R with E in GPa and lengths in Å: 1e9 Pa x 1e-30 m3; N_A and R of the SI (2019)
STRAIN_FACTOR = 4.0 * np.pi * 6.02214076e23 * 1e-21 / 8.314462618

PARAMETERS = ("D0", "r0", "E", "overlap")
LEVEL, RADIUS, MODULUS, OVERLAP = range(4)
# searched range of (ln D0, r0 in Å, ln E in GPa, f); r0 is narrowed to the neighbourhood of the radii
_LOWER = np.array([-40.0, 0.1, np.log(1.0), 0.0])
_UPPER = np.array([20.0, 3.0, np.log(2e4), 0.999])
_BEYOND_RADII = 0.3
# Errors proportional to D are taken at the curve, but where that is off by more than this factor, at this factor from the
# value: a curve that falls to nothing would otherwise leave no error at all.
_FARTHEST = 100.0
# Starts that lead after this many steps are carried to the end.
_FIRST_STEPS, _LEADING = 10, 3
_NO_LIMITS = np.zeros(0)


def strain_energy(radius: FloatArray, r0: FloatArray) -> FloatArray:
    """½ r0 (r - r0)² + ⅓ (r - r0)³ in Å³, for arrays that broadcast."""
    return 0.5 * r0 * (radius - r0) ** 2 + (radius - r0) ** 3 / 3.0


@dataclass(frozen=True)
class Prior:
    """What is known of a parameter before the fit: its value and standard deviation; sd 0 fixes it."""

    value: float
    sd: float


@dataclass(frozen=True)
class Coefficients:
    """Partition coefficients of ions of one charge on one site.

    radius in Å and value: (n,). variance: (n,) of the independent errors that do not depend on the value that happened to
    be measured (scatter of spots, counting). relative_covariance: (n, n) of errors proportional to D, such as shared
    calibration and internal-standard factors, of ln D; None where there are none. It is taken at the fitted curve, not at
    the measured values: otherwise values that happen to be low weigh more and shared errors pull the curve below all of
    them (Peelle's puzzle; D'Agostini 1994, Nucl. Instrum. Methods A 346:306).

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

    def __post_init__(self) -> None:
        n, m = len(self.radius), len(self.limit_radius)
        relative = self.relative_covariance
        if not (len(self.value) == len(self.variance) == n) or (
            relative is not None and np.shape(relative) != (n, n)
        ):
            raise ValueError(f"{n} radii need {n} values, {n} variances and a covariance of {n} x {n}")
        if not (len(self.limit) == len(self.limit_sd) == m):
            raise ValueError(f"{m} radii of limits need {m} limits with {m} standard deviations")
        spread = self.variance if relative is None else self.variance + np.diag(relative)
        everything = (self.radius, self.value, self.variance, self.limit_radius, self.limit, self.limit_sd)
        if not all(np.all(np.isfinite(array)) for array in everything) or (n and not np.all(spread > 0)):
            raise ValueError(
                "radii, values, limits must be finite and every value needs an uncertainty above zero"
            )
        if m and (np.any(self.limit <= 0) or np.any(self.limit_sd <= 0)):
            raise ValueError("limits and their standard deviations must be above zero")

    def covariance_at(self, curve: FloatArray) -> FloatArray:
        """(n, n) covariance of the values if `curve` (n,) are the true ones."""
        total = np.diag(self.variance)
        if self.relative_covariance is not None:
            total = total + self.relative_covariance * np.outer(curve, curve)
        return total


@dataclass(frozen=True)
class Problem:
    """Residuals of (ln D, r0, ln E, f) for problems solved side by side on the same data.

    ln D is the curve's level at r0, or at the radius `reference` (problems,) where that is given. Each problem goes without
    the value `left_out` (problems,) where that is given.
    """

    data: Coefficients
    temperature_K: float  # noqa: N815 - a unit
    covariance: FloatArray
    priors: tuple[Prior | None, ...]
    reference: FloatArray | None = None
    left_out: IntArray | None = None

    @cached_property
    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """(4,) lower and upper bounds of what is searched; r0 no farther than 0.3 Å from the radii or its fixed value."""
        radii = np.concatenate([self.data.radius, self.data.limit_radius])
        lower, upper = _LOWER.copy(), _UPPER.copy()
        prior = self.priors[RADIUS]
        if prior is not None:
            radii = np.append(radii, prior.value)
        lower[RADIUS] = max(radii.min() - _BEYOND_RADII, lower[RADIUS])
        upper[RADIUS] = radii.max() + _BEYOND_RADII
        return lower, upper

    @cached_property
    def whitening(self) -> FloatArray:
        """Inverse Cholesky factors of the covariance, (problems or 1, n, n): independent residuals of unit variance."""
        if self.left_out is None:
            return np.asarray(np.linalg.inv(np.linalg.cholesky(self.covariance)))[None, :, :]
        total = np.zeros((len(self.left_out), *self.covariance.shape))
        for row, index in enumerate(self.left_out):
            keep = np.arange(len(self.covariance)) != index
            part = self.covariance[np.ix_(keep, keep)]
            total[row][np.ix_(keep, keep)] = np.linalg.inv(np.linalg.cholesky(part))
        return total

    def curve(self, theta: FloatArray, radius: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D of the crystal alone at the radii, (problems, n), and d ln D / d theta, (problems, n, 4)."""
        r0, modulus = theta[:, [RADIUS]], np.exp(theta[:, [MODULUS]])
        factor = STRAIN_FACTOR * modulus / self.temperature_K
        strain, slope = strain_energy(radius[None, :], r0), -0.5 * (radius[None, :] ** 2 - r0**2)
        if self.reference is not None:
            strain = strain - strain_energy(self.reference[:, None], r0)
            slope = slope + 0.5 * (self.reference[:, None] ** 2 - r0**2)
        log_d = np.clip(theta[:, [LEVEL]] - factor * strain, -300.0, 60.0)
        gradient = np.zeros((*log_d.shape, 4))
        gradient[..., LEVEL] = 1.0
        gradient[..., RADIUS] = -factor * slope
        gradient[..., MODULUS] = -factor * strain
        return np.exp(log_d), gradient

    def apparent(self, theta: FloatArray, radius: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D with the overlap, D + f (1 - D), and its derivatives."""
        crystal, gradient = self.curve(theta, radius)
        fraction = theta[:, [OVERLAP]]
        slopes = gradient * (crystal * (1.0 - fraction))[..., None]
        slopes[..., OVERLAP] = 1.0 - crystal
        return crystal + fraction * (1.0 - crystal), slopes

    def residuals(self, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values, limits and priors in units of their standard deviation, with the Jacobian."""
        model, slopes = self.apparent(theta, self.data.radius)
        parts = [(self.whitening @ (self.data.value - model)[:, :, None])[:, :, 0]]
        jacobians = [-(self.whitening @ slopes)]
        if len(self.data.limit):
            below, below_slopes = self._limits(theta)
            parts.append(below)
            jacobians.append(below_slopes)
        for index, prior in enumerate(self.priors):
            if prior is not None and prior.sd > 0:
                column = np.zeros((len(theta), 1, 4))
                centre, sd = internal(index, prior)
                column[:, 0, index] = 1.0 / sd
                parts.append((theta[:, [index]] - centre) / sd)
                jacobians.append(column)
        return np.concatenate(parts, axis=1), np.concatenate(jacobians, axis=1)

    def _limits(self, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        """sqrt(-2 ln Φ((limit - D) / sd)): its square is the deviance of a value known to lie below a limit."""
        from scipy.special import erfcx, log_ndtr

        model, slopes = self.apparent(theta, self.data.limit_radius)
        z = (self.data.limit - model) / self.data.limit_sd
        log_probability = log_ndtr(z)
        residual = np.sqrt(-2.0 * log_probability)
        ratio = np.sqrt(2.0 / np.pi) / erfcx(-z / np.sqrt(2.0))
        slope = np.where(residual > 1e-12, ratio / np.maximum(residual, 1e-12), 0.0) / self.data.limit_sd
        return residual, slopes * slope[..., None]


def internal(index: int, prior: Prior) -> tuple[float, float]:
    """A prior on the scale that is fitted."""
    if index in (RADIUS, OVERLAP):
        return prior.value, prior.sd
    return float(np.log(prior.value)), prior.sd / prior.value


def solve(
    data: Coefficients,
    temperature_K: float,
    priors: tuple[Prior | None, ...],
    free: BoolArray,
    base: FloatArray,
) -> tuple[Problem, Minimum]:
    """The best of many starts, the covariance taken at the curve in a few rounds. `base`: (4,) values of fixed parameters."""
    starts = _starts(data, temperature_K, free, base)
    problem = Problem(data, temperature_K, data.covariance_at(np.maximum(data.value, 0.0)), priors)
    for _ in range(4):
        if len(starts) > _LEADING:
            found = minimise(
                problem.residuals, starts, np.tile(free, (len(starts), 1)), *problem.bounds, _FIRST_STEPS
            )
            starts = found.theta[np.argsort(found.sum_of_squares, kind="stable")[:_LEADING]]
        found = minimise(problem.residuals, starts, np.tile(free, (len(starts), 1)), *problem.bounds)
        best = int(np.argmin(found.sum_of_squares))
        found = Minimum(found.theta[[best]], found.sum_of_squares[[best]], found.converged[[best]])
        if data.relative_covariance is None:
            break
        model, _slopes = problem.apparent(found.theta, data.radius)
        measured = np.maximum(data.value, 0.0)
        updated = data.covariance_at(np.clip(model[0], measured / _FARTHEST, measured * _FARTHEST))
        if np.allclose(updated, problem.covariance, rtol=1e-6, atol=0.0):
            break
        problem = Problem(data, temperature_K, updated, priors)
        starts = found.theta
    return problem, found


def _starts(data: Coefficients, temperature_K: float, free: BoolArray, base: FloatArray) -> FloatArray:
    """For several r0 and f, ln D0 and E by weighted straight-line least squares: ln D is linear in them."""
    radii = np.concatenate([data.radius, data.limit_radius])
    values = np.concatenate([data.value, 0.3 * data.limit])
    sd = np.concatenate([np.sqrt(np.diag(data.covariance_at(data.value))), 0.5 * data.limit])
    margin = 0.05 + 0.2 * np.ptp(radii)
    r0s = np.linspace(radii.min() - margin, radii.max() + margin, 9) if free[RADIUS] else base[[RADIUS]]
    lowest = max(float(values.min()), 1e-6)
    fractions = lowest * np.array([0.03, 0.4, 0.95]) if free[OVERLAP] else np.array([0.0])
    starts = []
    for r0 in r0s:
        strain = STRAIN_FACTOR / temperature_K * strain_energy(radii, np.array(r0))
        for fraction in fractions:
            crystal = np.maximum((values - fraction) / (1.0 - fraction), 0.2 * sd)
            weight = np.minimum((crystal / sd) ** 2, 1e4)
            start = base.copy()
            start[RADIUS] = r0
            if free[OVERLAP]:
                start[OVERLAP] = fraction
            level = np.sum(weight * np.log(crystal)) / np.sum(weight)
            centre = np.sum(weight * strain) / np.sum(weight)
            scatter = np.sum(weight * (strain - centre) ** 2)
            modulus = -np.sum(weight * (strain - centre) * (np.log(crystal) - level)) / max(
                float(scatter), 1e-12
            )
            if free[MODULUS]:
                start[MODULUS] = np.log(np.clip(modulus, 20.0, 5000.0))
            if free[LEVEL]:
                start[LEVEL] = level + np.exp(start[MODULUS]) * centre
            starts.append(start)
    return np.array(starts)


def spreads(problem: Problem, theta: FloatArray, free: BoolArray) -> list[FloatArray | None]:
    """(4, 4) covariances of the parameters as fitted, one per row of theta; None where they cannot be told apart."""
    _residuals, jacobian = problem.residuals(theta)
    return [covariance(one, free) for one in jacobian]
