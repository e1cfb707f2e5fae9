"""Level, covariance and mixing coordinates of a block of groups, found in turn a fixed number of rounds."""

import numpy as np

from tieline.statistics.groups import BoolArray, FloatArray, IntArray
from tieline.statistics.overlap_covariance import (
    VarianceFunction,
    element_inflation,
    fit_directions,
    fit_variance_function,
    leverages,
    nuisance_directions,
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
        self.x = np.where(self.measured, values, 0.0)
        self.g = np.where(self.used, contaminant, 0.0)
        self.g_variance = np.where(self.used, contaminant_variance, 0.0)
        self.function = VarianceFunction(*(np.where(self.used, part, 1.0) for part in self.function))
        self.in_class = np.stack([~is_trace, is_trace], axis=-1) & np.ones((values.shape[2], 2), dtype=bool)
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


def own_variances(
    state: OverlapFit, fraction: FloatArray, contrast: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Counting variance of every spot's mixture with that of the contaminant (G, n, p); and h²c² (G, p)."""
    mixture = state.level[:, None, :] + fraction[..., None] * contrast[:, None, :]
    counting = state.function.at(mixture) * state.counting_scale()[:, None, :]
    counting += (fraction**2)[..., None] * state.g_variance[:, None, :]
    return counting, state.spread_variance()


def _update(state: OverlapFit, directions: FloatArray, prior: FloatArray) -> None:
    spot_variance = state.spot_variance()
    inverse = np.where(state.measured, 1.0 / spot_variance[:, None, :], 0.0)
    deviations = np.where(state.measured, state.x - state.level[:, None, :], 0.0)
    fit = fit_directions(deviations, inverse, directions, prior)
    coordinate = np.where(state.scored, fit.amplitudes[..., 0], np.nan)
    usable = state.scored & ~state.odd & np.isfinite(coordinate)
    located = clean_level(coordinate, fit.variances[..., 0], usable)
    fraction = np.nan_to_num(coordinate - located.mean[:, None])
    contrast = directions[..., 0]

    counting, spread_variance = own_variances(state, np.clip(fraction, 0.0, 1.0), contrast)
    own = (counting + spread_variance[:, None, :]) * state.kappa[:, None, :]
    amplitudes = np.nan_to_num(fit.amplitudes)
    residuals = np.where(state.measured, deviations - amplitudes @ np.swapaxes(directions, 1, 2), 0.0)
    state.odd = _odd_spots(residuals, own, state)
    takes_part = state.measured & ~state.odd[:, :, None]

    weight = np.where(takes_part, 1.0 / own, 0.0)
    unmixed = np.where(takes_part, state.x - fraction[..., None] * contrast[:, None, :], 0.0)
    total = weight.sum(axis=1)
    level = np.sum(weight * unmixed, axis=1) / np.where(total > 0, total, 1.0)
    state.level = np.where(total > 0, level, state.level)

    taken = leverages(np.where(state.used, 1.0 / spot_variance, 0.0), directions, prior)
    _update_spread(state, residuals, counting, takes_part, taken)


def _odd_spots(residuals: FloatArray, own: FloatArray, state: OverlapFit) -> BoolArray:
    """Spots with an improbable residual, over three times the group's median: kept out of the level."""
    from scipy.special import chdtrc

    chi2 = np.sum(residuals**2 / own, axis=2)
    degrees = np.maximum(state.measured.sum(axis=2) - 1.0, 1.0)
    reduced = np.where(state.scored, chi2 / degrees, np.inf)
    place = np.maximum(state.scored.sum(axis=1) - 1, 0) // 2
    median = np.take_along_axis(np.sort(reduced, axis=1), place[:, None], axis=1)
    return np.asarray(state.scored & (reduced > 3.0 * median) & (chdtrc(degrees, chi2) < 0.001))


def _update_spread(
    state: OverlapFit, residuals: FloatArray, counting: FloatArray, takes_part: BoolArray, taken: FloatArray
) -> None:
    number = takes_part.sum(axis=1)
    degrees = np.where(number > 1, (number - 1.0) * (1.0 - taken), 0.0)
    squared = np.where(takes_part, residuals**2, 0.0)
    level_squared = np.broadcast_to(np.maximum(state.level, 0.0)[:, None, :] ** 2, squared.shape)
    # An element that scatters by itself is left to its own factor; it must not widen the whole class.
    ordinary = np.where(state.kappa <= 2.0, 1.0, 0.0)
    expected = degrees * ordinary
    for column in (0, 1):
        of_class = state.in_class[:, column]
        if of_class.any():
            state.spread_squared[:, column] = raise_spread(
                (squared * ordinary[:, None, :])[..., of_class],
                counting[..., of_class],
                level_squared[..., of_class],
                expected[:, of_class].sum(axis=1),
                state.spread_squared[:, column],
            )
    variance = counting + state.spread_variance()[:, None, :]
    standardised = squared / variance
    share = np.where(takes_part, counting / variance, 0.0)
    _update_counting_factor(state, standardised, share, expected, number)
    state.kappa = element_inflation(np.sum(standardised, axis=1), degrees)


def _update_counting_factor(
    state: OverlapFit, standardised: FloatArray, share: FloatArray, expected: FloatArray, number: IntArray
) -> None:
    """Raise the counting variance of a class whose elements ruled by counting scatter beyond it.

    A relative spread cannot explain excess scatter of elements the host hardly contains, and it is those that
    see a contaminant. Only a factor beyond two standard deviations of its chance value counts.
    """
    scatter = np.sum(standardised * share, axis=1) * (expected > 0) @ state.in_class
    degrees = np.sum(share, axis=1) * expected / np.maximum(number, 1) @ state.in_class
    ratio = np.where(degrees > 1, scatter / np.maximum(degrees, 1.0), 1.0)
    factor = state.counting_factor * ratio
    state.counting_factor = np.where(factor > 1 + 2 * np.sqrt(2 / np.maximum(degrees, 1.0)), factor, 1.0)
