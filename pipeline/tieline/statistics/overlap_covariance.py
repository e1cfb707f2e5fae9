"""The covariance of one clean spot, and the least-squares fit of mixing directions against it.

Shapes throughout: G groups (one phase of one experiment each), n spots (padded), p elements. Concentrations
may be in any one unit; the results named fraction are dimensionless.
"""

from typing import NamedTuple

import numpy as np

from tieline.statistics.groups import BoolArray, FloatArray
from tieline.statistics.small_systems import inverse_root, times

# Every way of keeping some of the three terms b, a·x, (r·x)²: the best of those with no negative term is the
# non-negative least-squares solution.
_TERM_SUBSETS = ((0,), (1,), (2,), (0, 1), (0, 2), (1, 2), (0, 1, 2))
_LOWEST_SHARE_OF_SMALLEST_VARIANCE = 0.1
_KAPPA_PRIOR_WEIGHT = 8.0
_TIE = 1e-13


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

    def along(self, start: FloatArray, direction: FloatArray, fraction: FloatArray) -> FloatArray:
        """Counting variance (G, n, p) at start + fraction·direction, 0 <= fraction (G, n) <= 1.

        Along a line the function is a parabola, but for elements that one end has negative or at the floor.
        """
        end = start + direction
        parabola = np.stack(
            [
                self.constant + start * (self.linear + start * self.quadratic),
                direction * (self.linear + 2.0 * start * self.quadratic),
                direction**2 * self.quadratic,
            ],
            axis=1,
        )
        powers = np.stack([np.ones_like(fraction), fraction, fraction**2], axis=2)
        variance: FloatArray = powers @ parabola
        lowest = np.minimum(start, end)
        bent = (lowest < 0) | (self.constant + lowest * (self.linear + lowest * self.quadratic) < self.floor)
        group, element = np.nonzero(bent)
        x = start[group, element, None] + fraction[group] * direction[group, element, None]
        own = VarianceFunction(*(part[group, element, None] for part in self))
        variance[group, :, element] = own.at(x)
        return variance


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
    is_known = known * 1.0
    count = known.sum(axis=1)
    largest = np.max(x, axis=1, initial=0.0)
    scale = np.where(largest > 0, largest, 1.0)
    x /= scale[:, None, :]
    unit = np.where(count > 0, over_spots(is_known * variance) / np.maximum(count, 1), 1.0)
    unit += np.finfo(float).tiny
    relative = np.where(known, variance / unit[:, None, :], 1.0)
    weight_variance = relative
    coefficients = np.zeros((3, *unit.shape))
    for _ in range(2):
        coefficients = _nonnegative_quadratic(x, relative, is_known / weight_variance**2)
        fitted = coefficients[0][:, None, :] + x * (
            coefficients[1][:, None, :] + x * coefficients[2][:, None, :]
        )
        weight_variance = np.maximum(fitted, 0.05)
    smallest = np.min(np.where(known, variance, np.inf), axis=1, initial=np.inf)
    constant, linear, quadratic = coefficients * unit
    parts = [constant, linear / scale, quadratic / scale**2, _LOWEST_SHARE_OF_SMALLEST_VARIANCE * smallest]
    return VarianceFunction(*(np.where(count == 0, np.nan, part) for part in parts))


def over_spots(cells: FloatArray, weight: FloatArray | None = None) -> FloatArray:
    """Sum (G, p) of cells (G, n, p) over the spots, each with its weight (G, n) where given."""
    weight = np.ones(cells.shape[:2]) if weight is None else weight
    total: FloatArray = (weight[:, None, :] @ cells)[:, 0, :]
    return total


def _nonnegative_quadratic(x: FloatArray, y: FloatArray, weight: FloatArray) -> FloatArray:
    """Weighted non-negative least squares of y on 1, x, x² (G, n, p) by trying every subset of terms; (3, G, p)."""
    moments, right = [], []
    power = weight
    for order in range(5):
        moments.append(over_spots(power))
        if order < 3:
            right.append(over_spots(power * y))
        power = power * x
    gram = np.array([moments[row : row + 3] for row in range(3)])
    right_side = np.array(right)
    best = np.zeros_like(right_side)
    best_gain = np.full(best.shape[1:], -np.inf)
    for subset in _TERM_SUBSETS:
        index = np.array(subset)
        part = gram[index[:, None], index]
        # The ridge keeps a group whose values hardly differ solvable: the terms then share the variance.
        diagonal = np.arange(len(subset))
        part[diagonal, diagonal] += 1e-9 * part[diagonal, diagonal].sum(axis=0) + np.finfo(float).tiny
        root = inverse_root(part)
        solved = times(np.swapaxes(root, 0, 1), times(root, right_side[index]))
        gain = np.where(np.all(solved >= 0, axis=0), np.sum(solved * right_side[index], axis=0), -np.inf)
        # Of terms that do equally well, as all do where one sigma is known, the first: not what rounding prefers.
        better = gain > best_gain * (1.0 + _TIE)
        best_gain = np.where(better, gain, best_gain)
        full = np.zeros_like(best)
        full[index] = solved
        best = np.where(better, full, best)
    return best


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
    amplitudes, variances, right = amplitudes_along(deviations, inverse_variance, directions, prior_variance)
    blind = np.isnan(amplitudes)
    explained = np.sum(np.where(blind, 0.0, amplitudes) * right, axis=-1)
    chi2 = np.einsum("gnp,gnp,gnp->gn", inverse_variance, deviations, deviations) - explained
    free = np.isinf(prior_variance) & ~blind
    degrees = np.sum(inverse_variance > 0, axis=-1) - np.sum(free, axis=-1)
    return MixingFit(amplitudes, variances, np.maximum(chi2, 0.0), degrees * 1.0)


def amplitudes_along(
    deviations: FloatArray, inverse_variance: FloatArray, directions: FloatArray, prior_variance: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Amplitudes of the same fit, their variances, and the right side of its normal equations, all (G, n, m)."""
    m = directions.shape[-1]
    places = [(row, column) for row in range(m) for column in range(row + 1)]
    products = inverse_variance @ np.stack(
        [directions[..., row] * directions[..., column] for row, column in places], axis=-1
    )
    gram = np.zeros((m, m, *products.shape[:2]))
    for number, place in enumerate(places):
        gram[place] = products[..., number]
    right = (inverse_variance * deviations) @ directions
    root, blind = _solution(gram, prior_variance)
    amplitudes = times(np.swapaxes(root, 0, 1), times(root, np.moveaxis(right, -1, 0)))
    found = np.where(blind, np.nan, [amplitudes, np.sum(root**2, axis=0)])
    return np.moveaxis(found[0], 0, -1), np.moveaxis(found[1], 0, -1), right


def _solution(gram: FloatArray, prior_variance: FloatArray) -> tuple[FloatArray, BoolArray]:
    """R (m, m, ...) with RᵀR the covariance of the amplitudes, from the lower triangle of the normal equations.

    Also which directions (m, ...) nothing tells of: their amplitude is held at zero instead of failing. The triangle is
    changed in place.
    """
    m = len(gram)
    diagonal = np.arange(m)
    prior = (1.0 / prior_variance).reshape(m, *[1] * (gram.ndim - 2))
    blind = gram[diagonal, diagonal] + prior <= 0
    gram[diagonal, diagonal] += prior + blind
    # Scaling to a unit diagonal keeps the inverse accurate when directions differ by orders of magnitude.
    scale = 1.0 / np.sqrt(gram[diagonal, diagonal])
    gram *= scale[:, None] * scale
    gram[diagonal, diagonal] += 1e-12
    return inverse_root(gram) * scale, blind


def leverages(inverse_variance: FloatArray, directions: FloatArray, prior_variance: FloatArray) -> FloatArray:
    """Share (G, p) of an element's variance that the directions take up in a spot with all elements."""
    gram = np.swapaxes(directions, 1, 2) @ (inverse_variance[..., None] * directions)
    root, _ = _solution(np.ascontiguousarray(np.moveaxis(gram, 0, -1)), prior_variance)
    turned = directions @ np.swapaxes(np.moveaxis(root, -1, 0), 1, 2)
    taken: FloatArray = inverse_variance * np.sum(turned**2, axis=-1)
    return np.clip(taken, 0.0, 0.95)


def raise_spread(
    squared_residuals: FloatArray,
    counting: FloatArray,
    level_squared: FloatArray,
    in_class: FloatArray,
    expected: FloatArray,
    spread: FloatArray,
    steps: int = 2,
) -> FloatArray:
    """Steps of the relative spread h² toward Σ r²/(sigma² + h²c²) = degrees of freedom (Paule & Mandel 1982).

    Parameters: squared residuals, 0 where not used, and counting variance (G, n, p); c² (G, p); in_class (G, p, k),
    1 where an element counts for a class; expected (G, k) degrees of freedom; spread (G, k) the h² to start from.
    An element of no class has h² = 0. The steps are Newton's on the reciprocal of the sum, which is concave in h²:
    they never pass the solution from below. h² >= 0 is kept.
    """
    for _ in range(steps):
        real = (in_class @ spread[..., None])[..., 0] * level_squared
        inverse = counting + real[:, None, :]
        np.reciprocal(inverse, out=inverse)
        standardised = squared_residuals * inverse
        inverse *= standardised
        total = _over_classes(over_spots(standardised), in_class)
        slope = _over_classes(over_spots(inverse) * level_squared, in_class)
        solvable = (slope > 0) & (expected > 0)
        change = (total - expected) * total / np.where(solvable, slope * expected, 1.0)
        spread = np.clip(spread + np.where(solvable, change, 0.0), 0.0, 4.0)
    return spread


def _over_classes(of_element: FloatArray, in_class: FloatArray) -> FloatArray:
    """Sums (G, k) over the elements (G, p) of every class (G, p, k)."""
    sums: FloatArray = (of_element[:, None, :] @ in_class)[:, 0, :]
    return sums


def element_inflation(standardised_sum: FloatArray, degrees_of_freedom: FloatArray) -> FloatArray:
    """Variance factor kappa >= 1 (G, p) of an element that scatters more than its class.

    (8 + q)/(8 + ν): the residual sum of squares q, in units of the variance, against its expectation ν,
    shrunk toward 1 with the weight of eight spots. Own method.
    """
    return np.maximum(
        1.0, (_KAPPA_PRIOR_WEIGHT + standardised_sum) / (_KAPPA_PRIOR_WEIGHT + degrees_of_freedom)
    )
