"""The covariance of one clean spot, and the least-squares fit of mixing directions against it.

Shapes throughout: G groups (one phase of one experiment each), n spots (padded), p elements. Concentrations
may be in any one unit; the results named fraction are dimensionless.
"""

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from tieline.statistics.groups import BoolArray, FloatArray

# Every way of keeping some of the three terms b, a·x, (r·x)²: the best of those with no negative term is the
# non-negative least-squares solution.
_TERM_SUBSETS = ((0,), (1,), (2,), (0, 1), (0, 2), (1, 2), (0, 1, 2))
_LOWEST_SHARE_OF_SMALLEST_VARIANCE = 0.1
_KAPPA_PRIOR_WEIGHT = 8.0


class MixingFit(NamedTuple):
    """Amplitudes of the directions in every spot (G, n, m), their variances, and the residual chi-square."""

    amplitudes: FloatArray
    variances: FloatArray
    residual_chi2: FloatArray
    degrees_of_freedom: FloatArray


class VarianceFunction(NamedTuple):
    """sigma²(x) = constant + linear·x + quadratic·x², per group and element (G, p), never below `floor`."""

    constant: FloatArray
    linear: FloatArray
    quadratic: FloatArray
    floor: FloatArray

    def at(self, concentration: FloatArray) -> FloatArray:
        """Counting variance at concentrations (G, p) or (G, n, p), same unit as the values fitted."""
        x = np.maximum(concentration, 0.0)
        if x.ndim == 2:
            return np.maximum(self.constant + x * (self.linear + x * self.quadratic), self.floor)
        linear, quadratic = self.linear[:, None, :], self.quadratic[:, None, :]
        return np.maximum(self.constant[:, None, :] + x * (linear + x * quadratic), self.floor[:, None, :])

    def rows(self, index: npt.NDArray[np.intp]) -> "VarianceFunction":
        """The same function for the groups at `index`."""
        return VarianceFunction(*(part[index] for part in self))


def fit_variance_function(values: FloatArray, sigmas: FloatArray) -> VarianceFunction:
    """Fit sigma² = b + a·x + (r·x)², no term negative, to the reported sigmas of every group and element.

    A spot's own sigma grows with its own value, so that weights made from it prefer the spots that happened
    to be low; a function of concentration fitted over the group does not. Two passes weight by the relative
    error of sigma², the second with the fitted instead of the reported variance.

    Parameters: values, sigmas (G, n, p), NaN or sigma <= 0 where not known. Returns coefficients (G, p),
    NaN for an element without any sigma. Valid between zero and the largest value of the group.
    """
    known = np.isfinite(values) & (sigmas > 0)
    x = np.where(known, np.maximum(values, 0.0), 0.0)
    variance = np.where(known, sigmas, 1.0) ** 2
    count = known.sum(axis=1)
    largest = np.max(x, axis=1, initial=0.0)
    scale = np.where(largest > 0, largest, 1.0)
    x = x / scale[:, None, :]
    reference = np.sum(np.where(known, variance, 0.0), axis=1) / np.maximum(count, 1)
    coefficients = np.zeros((*reference.shape, 3))
    weight_variance = np.where(known, variance, 1.0)
    for _ in range(2):
        weight = np.where(known, 1.0 / weight_variance**2, 0.0)
        coefficients = _nonnegative_quadratic(x, variance, weight, reference)
        fitted = coefficients[:, None, :, 0] + x * (
            coefficients[:, None, :, 1] + x * coefficients[:, None, :, 2]
        )
        weight_variance = np.where(known, np.maximum(fitted, 0.05 * reference[:, None, :]), 1.0)
    smallest = np.min(np.where(known, variance, np.inf), axis=1, initial=np.inf)
    unknown = count == 0
    parts = [coefficients[..., 0], coefficients[..., 1] / scale, coefficients[..., 2] / scale**2]
    parts.append(_LOWEST_SHARE_OF_SMALLEST_VARIANCE * smallest)
    return VarianceFunction(*(np.where(unknown, np.nan, part) for part in parts))


def _nonnegative_quadratic(
    x: FloatArray, variance: FloatArray, weight: FloatArray, reference: FloatArray
) -> FloatArray:
    """Weighted non-negative least squares on 1, x, x² by trying every subset of terms; returns (G, p, 3)."""
    unit = reference[:, None, :] + np.finfo(float).tiny
    y = variance / unit
    w = weight * unit**2
    moments = [np.sum(w, axis=1)]
    power = w
    for _ in range(4):
        power = power * x
        moments.append(np.sum(power, axis=1))
    right = np.stack(
        [np.sum(w * y, axis=1), np.sum(w * x * y, axis=1), np.sum(w * x * x * y, axis=1)], axis=-1
    )
    gram = np.stack([np.stack([moments[i + j] for j in range(3)], axis=-1) for i in range(3)], axis=-2)
    best = np.zeros_like(right)
    best_gain = np.full(reference.shape, -np.inf)
    for subset in _TERM_SUBSETS:
        index = np.array(subset)
        part = gram[..., index[:, None], index]
        # The ridge keeps a group whose values hardly differ solvable: the terms then share the variance.
        ridge = 1e-9 * np.trace(part, axis1=-2, axis2=-1)[..., None, None] + np.finfo(float).tiny
        solved = np.linalg.solve(part + ridge * np.eye(len(subset)), right[..., index, None])[..., 0]
        gain = np.where(np.all(solved >= 0, axis=-1), np.sum(solved * right[..., index], axis=-1), -np.inf)
        better = gain > best_gain
        best_gain = np.where(better, gain, best_gain)
        full = np.zeros_like(right)
        full[..., index] = solved
        best = np.where(better[..., None], full, best)
    return best * (reference[..., None] + np.finfo(float).tiny)


def nuisance_directions(
    clean: FloatArray, contaminant: FloatArray, is_trace: BoolArray, nuisance: str
) -> tuple[FloatArray, float]:
    """Directions (G, p, 2) along which clean spots differ for harmless reasons, and the sd allowed.

    "yield-and-growth": a common yield of the traces (first), and growth zoning, which multiplies elements
    of low partition coefficient alike and moves compatible ones the other way (second), both ± 50 %.
    "yield": a common yield of all elements, ± 3 % (a glass, whose spots share neither growth zoning nor an
    internal standard drift). Own method; the growth direction is the first-order change of c with the
    fraction crystallised (Rayleigh).
    """
    level = np.maximum(clean, 0.0)
    if nuisance == "yield":
        return np.stack([level, np.zeros_like(level)], axis=-1), 0.03
    if nuisance != "yield-and-growth":
        raise ValueError(f"nuisance is {nuisance!r}; expected 'yield-and-growth' or 'yield'")
    level = np.where(is_trace, level, 0.0)
    return np.stack([level, level * growth_factor(clean, contaminant)], axis=-1), 0.5


def growth_factor(clean: FloatArray, contaminant: FloatArray) -> FloatArray:
    """1 − c/g limited to −1.5 … 1 (G, p): what growth zoning does to an element of coefficient c/g."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.maximum(clean, 0.0) / contaminant
    return np.clip(1.0 - np.where(np.isfinite(ratio), ratio, 2.5), -1.5, 1.0)


def fit_directions(
    deviations: FloatArray, inverse_variance: FloatArray, directions: FloatArray, prior_variance: FloatArray
) -> MixingFit:
    """Generalized least squares of every spot's deviation on directions, some of them with a prior variance.

    With S = diag(variance) + Σ prior·l·lᵀ this is the matched filter w = S⁻¹Δ/(ΔᵀS⁻¹Δ) in Henderson's
    (1975) mixed model form: the amplitude of a direction with infinite prior variance is wᵀy, its variance
    1/(ΔᵀS⁻¹Δ), and the residual chi-square that of S.

    Parameters: deviations (G, n, p), 0 where not measured; inverse_variance (G, n, p), 0 where not measured;
    directions (G, p, m); prior_variance (m,), inf for a free amplitude.
    """
    m = directions.shape[-1]
    first, second = np.triu_indices(m)
    products = inverse_variance @ (directions[..., first] * directions[..., second])
    gram = np.empty((*products.shape[:2], m, m))
    gram[..., first, second] = products
    gram[..., second, first] = products
    weighted = inverse_variance * deviations
    right = weighted @ directions
    information = gram[..., np.arange(m), np.arange(m)]
    prior = np.broadcast_to(1.0 / prior_variance, information.shape)
    # A free direction no element of the spot can see has no amplitude: give it no value instead of failing.
    blind = (information + prior) <= 0
    gram[..., np.arange(m), np.arange(m)] += prior + blind
    # Scaling to a unit diagonal keeps the inverse accurate when directions differ by orders of magnitude.
    root = np.sqrt(gram[..., np.arange(m), np.arange(m)])
    inverse = np.linalg.inv(gram / (root[..., :, None] * root[..., None, :]) + 1e-12 * np.eye(m))
    amplitudes = (inverse @ (right / root)[..., None])[..., 0] / root
    variances = inverse[..., np.arange(m), np.arange(m)] / root**2
    chi2 = np.einsum("gnp,gnp->gn", weighted, deviations) - np.sum(amplitudes * right, axis=-1)
    free = np.isinf(prior_variance) & ~blind
    degrees = np.sum(inverse_variance > 0, axis=-1) - np.sum(free, axis=-1)
    return MixingFit(
        np.where(blind, np.nan, amplitudes),
        np.where(blind, np.nan, variances),
        np.maximum(chi2, 0.0),
        degrees * 1.0,
    )


def leverages(inverse_variance: FloatArray, directions: FloatArray, prior_variance: FloatArray) -> FloatArray:
    """Share (G, p) of an element's variance that the directions take up in a spot with all elements."""
    gram = np.einsum("gp,gpi,gpj->gij", inverse_variance, directions, directions)
    diagonal = np.einsum("gii->gi", gram)
    gram = gram + (1.0 / prior_variance + (diagonal <= 0))[..., None] * np.eye(gram.shape[-1])
    root = np.sqrt(np.einsum("gii->gi", gram))
    inverse = np.linalg.inv(gram / (root[:, :, None] * root[:, None, :]) + 1e-12 * np.eye(gram.shape[-1]))
    scaled = directions / root[:, None, :]
    taken: FloatArray = inverse_variance * np.einsum("gpi,gij,gpj->gp", scaled, inverse, scaled)
    return np.clip(taken, 0.0, 0.95)


def raise_spread(
    squared_residuals: FloatArray,
    counting: FloatArray,
    level_squared: FloatArray,
    expected: FloatArray,
    spread: FloatArray,
    steps: int = 2,
) -> FloatArray:
    """Steps of the relative spread h² toward Σ r²/(sigma² + h²c²) = degrees of freedom (Paule & Mandel 1982).

    Parameters: squared residuals, counting variance and c² (G, n, p) of one class of elements, residuals 0
    where not used; expected (G,) degrees of freedom; spread (G,) the h² to start from. The steps are
    Newton's on the reciprocal of the sum, which is concave in h²: they never pass the solution from below.
    h² >= 0 is kept.
    """
    for _ in range(steps):
        inverse = 1.0 / (counting + spread[:, None, None] * level_squared)
        standardised = squared_residuals * inverse
        total = np.sum(standardised, axis=(1, 2))
        slope = np.einsum("gnp,gnp,gnp->g", standardised, inverse, level_squared)
        solvable = (slope > 0) & (expected > 0)
        change = (total - expected) * total / np.where(solvable, slope * expected, 1.0)
        spread = np.clip(spread + np.where(solvable, change, 0.0), 0.0, 4.0)
    return spread


def element_inflation(standardised_sum: FloatArray, degrees_of_freedom: FloatArray) -> FloatArray:
    """Variance factor kappa >= 1 (G, p) of an element that scatters more than its class.

    (8 + q)/(8 + ν): the residual sum of squares q, in units of the variance, against its expectation ν,
    shrunk toward 1 with the weight of eight spots. Own method.
    """
    return np.maximum(
        1.0, (_KAPPA_PRIOR_WEIGHT + standardised_sum) / (_KAPPA_PRIOR_WEIGHT + degrees_of_freedom)
    )
