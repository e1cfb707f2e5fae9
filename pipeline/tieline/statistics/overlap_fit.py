"""Level, covariance and mixing coordinates of a block of groups, found in turn a fixed number of rounds."""

import numpy as np

from tieline.statistics.groups import BoolArray, FloatArray
from tieline.statistics.overlap_covariance import (
    VarianceFunction,
    amplitudes_along,
    element_inflation,
    fit_variance_function,
    leverages,
    nuisance_directions,
    over_spots,
    raise_spread,
)
from tieline.statistics.overlap_level import clean_level

_ROUNDS = 5
_FEWEST_SPOTS = 3


class OverlapFit:
    """The state of one block of groups while level, covariance and coordinates are found in turn."""

    def __init__(
        self,
        values: FloatArray,
        sigmas: FloatArray,
        contaminant: FloatArray,
        contaminant_variance: FloatArray,
        is_trace: BoolArray,
    ) -> None:
        measured = np.isfinite(values)
        count = measured.sum(axis=1)
        n_spots = measured.any(axis=2).sum(axis=1)
        self.function: VarianceFunction = fit_variance_function(values, sigmas)
        enough = (count >= _FEWEST_SPOTS) & (2 * count >= n_spots[:, None])
        self.used = enough & np.isfinite(contaminant) & np.isfinite(self.function.constant)
        self.measured = measured & self.used[:, None, :]
        self.scored = self.measured.sum(axis=2) >= 2
        self.scored &= (self.scored.sum(axis=1) >= _FEWEST_SPOTS)[:, None]
        self.measured &= self.scored[:, :, None]
        # The same as a factor: multiplying takes a fraction of the time of choosing.
        self.weight = self.measured * 1.0
        self.x = np.where(self.measured, values, 0.0)
        self.g = np.where(self.used, contaminant, 0.0)
        self.g_variance = np.where(self.used, contaminant_variance, 0.0)
        self.function = VarianceFunction(*(np.where(self.used, part, 1.0) for part in self.function))
        self.in_class = np.stack([~is_trace, is_trace], axis=-1) * 1.0
        self.level = _low_end(self.x, self.measured, self.g)
        self.spread_squared = np.zeros((values.shape[0], 2))
        self.counting_factor = np.ones((values.shape[0], 2))
        self.kappa = np.ones_like(self.level)
        self.odd = np.zeros(self.scored.shape, dtype=bool)

    def spread_variance(self) -> FloatArray:
        """h²c² (G, p)."""
        variance: FloatArray = (self.spread_squared @ self.in_class.T) * np.maximum(self.level, 0.0) ** 2
        return variance

    def spot_variance(self) -> FloatArray:
        """Diagonal part (G, p) of the covariance of one clean spot."""
        counting = self.function.at(self.level) * self.counting_scale()
        variance: FloatArray = (counting + self.spread_variance()) * self.kappa
        return variance

    def deviations(self) -> FloatArray:
        """x − c (G, n, p), 0 where not measured."""
        deviations: FloatArray = self.x - self.level[:, None, :] * self.weight
        return deviations

    def counting_scale(self) -> FloatArray:
        """Factor (G, p) by which the stated counting variance of an element's class falls short."""
        factor: FloatArray = self.counting_factor @ self.in_class.T
        return factor


def _low_end(x: FloatArray, measured: BoolArray, contaminant: FloatArray) -> FloatArray:
    """A first level (G, p): the lower fifth of the spots, seen in the direction of the contaminant."""
    count = np.maximum(measured.sum(axis=1), 1)
    middle = np.sum(x, axis=1) / count
    sign = np.where(contaminant >= middle, 1.0, -1.0)
    ordered = np.sort(np.where(measured, x * sign[:, None, :], np.inf), axis=1)
    place = (count - 1) // 5
    chosen = np.take_along_axis(ordered, place[:, None, :], axis=1)[:, 0, :]
    return np.where(np.isfinite(chosen), chosen * sign, 0.0)


def fit_group_block(
    values: FloatArray,
    sigmas: FloatArray,
    contaminant: FloatArray,
    contaminant_variance: FloatArray,
    is_trace: BoolArray,
    nuisance: str,
) -> OverlapFit:
    """Alternate coordinates, clean level and covariance; arguments as in `overlap_scores`."""
    state = OverlapFit(values, sigmas, contaminant, contaminant_variance, is_trace)
    for _ in range(_ROUNDS):
        directions, prior = mixing_directions(state, is_trace, nuisance)
        _update(state, directions, prior)
    return state


def mixing_directions(state: OverlapFit, is_trace: BoolArray, nuisance: str) -> tuple[FloatArray, FloatArray]:
    harmless, allowed = nuisance_directions(state.level, state.g, is_trace, nuisance)
    contrast = np.where(state.used, state.g - state.level, 0.0)
    prior = np.array([np.inf, allowed**2, allowed**2])
    return np.concatenate([contrast[..., None], harmless], axis=-1), prior


def counting_variance(state: OverlapFit, fraction: FloatArray, contrast: FloatArray) -> FloatArray:
    """Variance (G, n, p) of every spot's mixture from counting and from the contaminant, but for the host's spread."""
    counting = state.function.along(state.level, contrast, fraction)
    counting *= state.counting_scale()[:, None, :]
    counting += (fraction**2)[..., None] * state.g_variance[:, None, :]
    return counting


def _update(state: OverlapFit, directions: FloatArray, prior: FloatArray) -> None:
    spot_variance = state.spot_variance()
    inverse = state.weight * (1.0 / spot_variance)[:, None, :]
    deviations = state.deviations()
    amplitudes, variances, _ = amplitudes_along(deviations, inverse, directions, prior)
    coordinate = np.where(state.scored, amplitudes[..., 0], np.nan)
    usable = state.scored & ~state.odd & np.isfinite(coordinate)
    located = clean_level(coordinate, variances[..., 0], usable)
    fraction = np.nan_to_num(coordinate - located.mean[:, None])
    contrast = directions[..., 0]

    counting = counting_variance(state, np.clip(fraction, 0.0, 1.0), contrast)
    inverse = state.weight / (counting + state.spread_variance()[:, None, :])
    deviations -= np.nan_to_num(amplitudes) @ np.swapaxes(directions, 1, 2)
    squared = deviations * deviations
    squared *= state.weight
    state.odd = _odd_spots(((squared * inverse) @ (1.0 / state.kappa)[..., None])[..., 0], state)
    takes_part = (~state.odd).astype(np.float64)

    # The element's own factor kappa is common to all of its weights.
    total = over_spots(inverse, takes_part)
    unmixed = (
        over_spots(inverse * state.x, takes_part) - over_spots(inverse, takes_part * fraction) * contrast
    )
    state.level = np.where(total > 0, unmixed / np.where(total > 0, total, 1.0), state.level)

    taken = leverages(np.where(state.used, 1.0 / spot_variance, 0.0), directions, prior)
    squared *= takes_part[..., None]
    _update_spread(state, squared, counting, state.weight * takes_part[..., None], taken)


def _odd_spots(chi2: FloatArray, state: OverlapFit) -> BoolArray:
    """Spots with an improbable residual, over three times the group's median: kept out of the level."""
    from scipy.special import chdtrc

    degrees = np.maximum(state.weight.sum(axis=2) - 1.0, 1.0)
    reduced = np.where(state.scored, chi2 / degrees, np.inf)
    place = np.maximum(state.scored.sum(axis=1) - 1, 0) // 2
    median = np.take_along_axis(np.sort(reduced, axis=1), place[:, None], axis=1)
    odd = np.asarray(state.scored & (reduced > 3.0 * median))
    odd[odd] = chdtrc(degrees[odd], chi2[odd]) < 0.001
    return odd


def _update_spread(
    state: OverlapFit, squared: FloatArray, counting: FloatArray, takes_part: FloatArray, taken: FloatArray
) -> None:
    """Spread, counting factor and kappa from the squared residuals (G, n, p), which are overwritten."""
    number = over_spots(takes_part)
    degrees = np.where(number > 1, (number - 1.0) * (1.0 - taken), 0.0)
    level_squared = np.maximum(state.level, 0.0) ** 2
    # An element that scatters by itself is left to its own factor; it must not widen the whole class.
    expected = degrees * (state.kappa <= 2.0)
    in_class = (state.kappa <= 2.0)[..., None] * state.in_class
    state.spread_squared = raise_spread(
        squared, counting, level_squared, in_class, expected @ state.in_class, state.spread_squared
    )
    inverse = counting + state.spread_variance()[:, None, :]
    np.reciprocal(inverse, out=inverse)
    squared *= inverse
    state.kappa = element_inflation(over_spots(squared), degrees)
    # The share of counting in each variance.
    inverse *= counting
    squared *= inverse
    inverse *= takes_part
    shared = over_spots(inverse) * expected / np.maximum(number, 1.0)
    scatter = over_spots(squared) * (expected > 0)
    _update_counting_factor(state, scatter @ state.in_class, shared @ state.in_class)


def _update_counting_factor(state: OverlapFit, scatter: FloatArray, degrees: FloatArray) -> None:
    """Raise the counting variance of a class whose elements ruled by counting scatter beyond it.

    A relative spread cannot explain excess scatter of elements the host hardly contains, and it is those that
    see a contaminant. Only a factor beyond two standard deviations of its chance value counts.

    Parameters: scatter (G, 2) and its degrees of freedom, each element's with the share of counting in its variance.
    """
    ratio = np.where(degrees > 1, scatter / np.maximum(degrees, 1.0), 1.0)
    factor = state.counting_factor * ratio
    state.counting_factor = np.where(factor > 1 + 2 * np.sqrt(2 / np.maximum(degrees, 1.0)), factor, 1.0)
