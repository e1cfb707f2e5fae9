"""How much of a neighbouring phase every spot contains: a matched filter along the mixing line.

A spot with mass fraction f of the contaminant g in the host c measures x = c + f·(g − c). The direction is known, so
the weighted projection on it is the most powerful test there is (Neyman & Pearson 1933). What is not known is the
level of the clean spots, the real spread, and harmless common factors; `overlap_scores` estimates them together.

    scores = overlap_scores(values, sigmas, contaminant_mean, contaminant_variance, is_trace,
                            nuisance="yield-and-growth", z_limit=3.0, p_limit=0.001)

values, sigmas           (G, n, p) NaN = not measured; groups padded to n spots; sigma = counting, one standard deviation
contaminant_mean         (G, p)    NaN = not known: the element is then not used
contaminant_variance     (G, p)    of one local composition of the contaminant: real spread plus error of the mean
is_trace                 (p,)      bool; majors and traces get separate spreads, nuisance directions act on traces
"""

from dataclasses import dataclass, fields

import numpy as np
import numpy.typing as npt

from .overlap_covariance import (
    VarianceFunction,
    element_inflation,
    fit_directions,
    fit_variance_function,
    leverages,
    nuisance_directions,
    raise_spread,
)
from .overlap_level import clean_level

Array = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

ORACLE_FACTOR = 4.735
"""Standard deviations between 95 % recall and one false alarm in 1,000: 1.645 + 3.090."""

_ROUNDS = 6
_FEWEST_SPOTS = 3
_CELLS_AT_ONCE = 150_000


@dataclass(frozen=True)
class OverlapScores:
    """What the matched filter says of every spot and group; NaN (or False) where a group could not be scored.

    Per spot (G, n): fraction of the contaminant and its standard deviation; z, the excess over the clean level found
    without this spot; residual_chi2, residual_dof, residual_p of what mixing does not explain; overlapped (z above the
    limit), foreign (residual p below the limit: something else than this contaminant), clean (scored, neither).
    Per group and element (G, p): used; level, the clean composition; level_variance, its independent part (the full
    covariance: `clean_covariance`); contrast g − c; spot_variance, the diagonal part of one clean spot's covariance;
    weight_share, the element's part of the information on the fraction.
    Per group (G,): level_fraction_variance, the posterior variance of the clean level in units of fraction;
    detectable_fraction, found in 95 % of cases at one false alarm in 1,000; overdispersion_chi2, _dof and _p of all
    coordinates about their mean (small p: spots contain varying, possibly all some, contaminant); n_scored, n_clean.
    Per group and class (G, 2), majors then traces: spread, relative; mswd, scatter left by the directions over the
    stated sigma (far above 1: real spread or sigma understated; far below: overstated), with mswd_dof.
    nuisance (G, p, 2) and nuisance_amplitude (G, n, 2): the harmless directions and every spot's part of them.
    """

    fraction: Array
    sd_fraction: Array
    z: Array
    residual_chi2: Array
    residual_dof: Array
    residual_p: Array
    overlapped: Mask
    foreign: Mask
    clean: Mask
    used: Mask
    level: Array
    level_variance: Array
    contrast: Array
    spot_variance: Array
    weight_share: Array
    level_fraction_variance: Array
    detectable_fraction: Array
    overdispersion_chi2: Array
    overdispersion_dof: Array
    overdispersion_p: Array
    n_scored: npt.NDArray[np.int64]
    n_clean: npt.NDArray[np.int64]
    spread: Array
    mswd: Array
    mswd_dof: Array
    nuisance: Array
    nuisance_amplitude: Array


def overlap_scores(
    values: Array,
    sigmas: Array,
    contaminant_mean: Array,
    contaminant_variance: Array,
    is_trace: Mask,
    *,
    nuisance: str = "yield-and-growth",
    z_limit: float = 3.0,
    p_limit: float = 0.001,
) -> OverlapScores:
    """Score every spot for a known contaminant; shapes and results in the module and class descriptions.

    An element takes part in a group when its contaminant is known and at least three spots and half of the group have
    it; a spot when it has two such elements; a group when it has three such spots. A value reported only as below its
    limit L is best passed as L/2 with sigma L/2: left out, it would make the clean level that of the spots that show
    the element because they are contaminated. For crystal in glass pass the crystal as contaminant and
    nuisance="yield", once per candidate.

    Raises ValueError for shapes that do not fit. Own method on classical parts (Neyman & Pearson 1933; Paule & Mandel
    1982; Henderson 1975). Holds for up to about 80 % contaminated spots of differing fraction; when all are
    contaminated no test finds the clean level, and `overlap_bound` is what remains.
    """
    groups, spots, elements = values.shape
    expected = {"sigmas": (groups, spots, elements), "is_trace": (elements,)}
    expected |= {"contaminant_mean": (groups, elements), "contaminant_variance": (groups, elements)}
    given = {"sigmas": sigmas, "is_trace": is_trace}
    given |= {"contaminant_mean": contaminant_mean, "contaminant_variance": contaminant_variance}
    for name, shape in expected.items():
        if given[name].shape != shape:
            raise ValueError(f"{name} has shape {given[name].shape}; expected {shape}")
    if nuisance not in ("yield-and-growth", "yield"):
        raise ValueError(f"nuisance is {nuisance!r}; expected 'yield-and-growth' or 'yield'")

    result = _empty_scores(groups, spots, elements)
    measured = np.isfinite(values)
    occupied = measured.any(axis=2)
    last = np.where(occupied.any(axis=1), spots - np.argmax(occupied[:, ::-1], axis=1), 0)
    order = np.argsort(last, kind="stable")
    step = max(1, _CELLS_AT_ONCE // max(1, spots * elements))
    for start in range(0, groups, step):
        rows = order[start : start + step]
        width = int(last[rows].max(initial=0))
        if width < _FEWEST_SPOTS:
            continue
        part = _score_block(
            values[rows, :width],
            sigmas[rows, :width],
            contaminant_mean[rows],
            np.nan_to_num(contaminant_variance[rows]),
            is_trace,
            (nuisance, z_limit, p_limit),
        )
        for name, value in part.items():
            target = getattr(result, name)
            if value.ndim >= 2 and name in _PER_SPOT:
                target[rows, :width] = value
            else:
                target[rows] = value
    return result


_PER_SPOT = frozenset(
    "fraction sd_fraction z residual_chi2 residual_dof residual_p overlapped foreign clean nuisance_amplitude".split()
)


def clean_covariance(scores: OverlapScores) -> Array:
    """Covariance (G, p, p) of the clean level: independent errors, its place on the mixing line, common factors.

    The common factors enter with the variance of their observed amplitudes divided by the number of clean spots.
    """
    independent = scores.level_variance[:, :, None] * np.eye(scores.level.shape[1])
    along = (
        scores.level_fraction_variance[:, None, None]
        * scores.contrast[:, :, None]
        * scores.contrast[:, None, :]
    )
    weight = scores.clean[..., None] * 1.0
    count = np.maximum(weight.sum(axis=1), 2.0)
    amplitude = np.where(scores.clean[..., None], np.nan_to_num(scores.nuisance_amplitude), 0.0)
    mean = amplitude.sum(axis=1) / count
    variance = np.sum(weight * (amplitude - mean[:, None, :]) ** 2, axis=1) / ((count - 1.0) * count)
    common = np.einsum("gpi,gi,gqi->gpq", scores.nuisance, variance, scores.nuisance)
    return np.asarray(independent + along + common)


def _empty_scores(groups: int, spots: int, elements: int) -> OverlapScores:
    per_class = "spread mswd mswd_dof".split()
    per_element = "used level level_variance contrast spot_variance weight_share".split()
    shapes: dict[str, tuple[int, ...]] = dict.fromkeys((f.name for f in fields(OverlapScores)), (groups,))
    shapes |= dict.fromkeys(_PER_SPOT, (groups, spots))
    shapes |= dict.fromkeys(per_class, (groups, 2))
    shapes |= dict.fromkeys(per_element, (groups, elements))
    shapes |= {"nuisance": (groups, elements, 2), "nuisance_amplitude": (groups, spots, 2)}
    masks = ("overlapped", "foreign", "clean", "used")
    made = {name: np.full(shape, False if name in masks else np.nan) for name, shape in shapes.items()}
    made |= {name: np.zeros(groups, dtype=np.int64) for name in ("n_scored", "n_clean")}
    return OverlapScores(**made)


class _Fit:
    """The state of one block of groups while level, covariance and coordinates are found in turn."""

    def __init__(
        self, values: Array, sigmas: Array, contaminant: Array, contaminant_variance: Array, is_trace: Mask
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
        self.kappa = np.ones_like(self.level)
        self.odd = np.zeros(self.scored.shape, dtype=bool)

    def spread_variance(self) -> Array:
        """h²c² (G, p)."""
        return (self.spread_squared @ self.in_class.T) * np.maximum(self.level, 0.0) ** 2

    def spot_variance(self) -> Array:
        """Diagonal part (G, p) of the covariance of one clean spot."""
        return (self.function.at(self.level) + self.spread_variance()) * self.kappa


def _low_end(x: Array, measured: Mask, contaminant: Array) -> Array:
    """A first level (G, p): the lower fifth of the spots, seen in the direction of the contaminant."""
    count = np.maximum(measured.sum(axis=1), 1)
    middle = np.sum(x, axis=1) / count
    sign = np.where(contaminant >= middle, 1.0, -1.0)
    ordered = np.sort(np.where(measured, x * sign[:, None, :], np.inf), axis=1)
    place = (count - 1) // 5
    chosen = np.take_along_axis(ordered, place[:, None, :], axis=1)[:, 0, :]
    return np.where(np.isfinite(chosen), chosen * sign, 0.0)


def _score_block(
    values: Array,
    sigmas: Array,
    contaminant: Array,
    contaminant_variance: Array,
    is_trace: Mask,
    options: tuple[str, float, float],
) -> dict[str, npt.NDArray[np.generic]]:
    """Alternate coordinates, clean level and covariance a fixed number of rounds; then score."""
    nuisance, z_limit, p_limit = options
    state = _Fit(values, sigmas, contaminant, contaminant_variance, is_trace)
    for _ in range(_ROUNDS):
        directions, prior = _directions(state, is_trace, nuisance)
        _update(state, directions, prior)
    directions, prior = _directions(state, is_trace, nuisance)
    return _final_scores(state, directions, prior, z_limit, p_limit)


def _directions(state: _Fit, is_trace: Mask, nuisance: str) -> tuple[Array, Array]:
    harmless, allowed = nuisance_directions(state.level, state.g, is_trace, nuisance)
    contrast = np.where(state.used, state.g - state.level, 0.0)
    prior = np.array([np.inf, allowed**2, allowed**2])
    return np.concatenate([contrast[..., None], harmless], axis=-1), prior


def _own_variances(state: _Fit, fraction: Array, contrast: Array) -> tuple[Array, Array]:
    """Counting variance at every spot's own mixture, with the contaminant's variance; and c² h² (G, n, p), (G, p)."""
    mixture = state.level[:, None, :] + fraction[..., None] * contrast[:, None, :]
    counting = state.function.at(mixture) + (fraction**2)[..., None] * state.g_variance[:, None, :]
    return counting, state.spread_variance()


def _update(state: _Fit, directions: Array, prior: Array) -> None:
    spot_variance = state.spot_variance()
    inverse = np.where(state.measured, 1.0 / spot_variance[:, None, :], 0.0)
    deviations = np.where(state.measured, state.x - state.level[:, None, :], 0.0)
    fit = fit_directions(deviations, inverse, directions, prior)
    coordinate = np.where(state.scored, fit.amplitudes[..., 0], np.nan)
    located = clean_level(coordinate, fit.variances[..., 0], state.scored & ~state.odd)
    fraction = np.nan_to_num(coordinate - located.mean[:, None])
    contrast = directions[..., 0]

    counting, spread_variance = _own_variances(state, np.clip(fraction, 0.0, 1.0), contrast)
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


def _odd_spots(residuals: Array, own: Array, state: _Fit) -> Mask:
    """Spots whose residual is above three times the group's median and improbable: they must not shape the level."""
    from scipy.special import chdtrc

    chi2 = np.sum(residuals**2 / own, axis=2)
    degrees = np.maximum(state.measured.sum(axis=2) - 1.0, 1.0)
    reduced = np.where(state.scored, chi2 / degrees, np.inf)
    place = np.maximum(state.scored.sum(axis=1) - 1, 0) // 2
    median = np.take_along_axis(np.sort(reduced, axis=1), place[:, None], axis=1)
    return np.asarray(state.scored & (reduced > 3.0 * median) & (chdtrc(degrees, chi2) < 0.001))


def _update_spread(state: _Fit, residuals: Array, counting: Array, takes_part: Mask, taken: Array) -> None:
    number = takes_part.sum(axis=1)
    degrees = np.where(number > 1, (number - 1.0) * (1.0 - taken), 0.0)
    squared = np.where(takes_part, residuals**2, 0.0)
    level_squared = np.maximum(state.level, 0.0) ** 2
    scaled = squared / state.kappa[:, None, :]
    spread = state.spread_squared.copy()
    for column in (0, 1):
        chosen = state.in_class[:, column]
        if chosen.any():
            part = np.broadcast_to(level_squared[:, None, chosen], scaled[..., chosen].shape)
            expected = degrees[:, chosen].sum(axis=1)
            spread[:, column] = raise_spread(
                scaled[..., chosen], counting[..., chosen], part, expected, spread[:, column]
            )
    state.spread_squared = spread
    variance = counting + state.spread_variance()[:, None, :]
    state.kappa = element_inflation(np.sum(squared / variance, axis=1), degrees)


def _final_scores(
    state: _Fit, directions: Array, prior: Array, z_limit: float, p_limit: float
) -> dict[str, npt.NDArray[np.generic]]:
    from scipy.special import chdtrc

    spot_variance = state.spot_variance()
    inverse = np.where(state.measured, 1.0 / spot_variance[:, None, :], 0.0)
    deviations = np.where(state.measured, state.x - state.level[:, None, :], 0.0)
    fit = fit_directions(deviations, inverse, directions, prior)
    coordinate = np.where(state.scored, fit.amplitudes[..., 0], np.nan)
    variance = np.where(state.scored, fit.variances[..., 0], np.nan)
    takes_part = state.scored & ~state.odd
    located = clean_level(coordinate, variance, takes_part)
    fraction = coordinate - located.mean_without
    sd_fraction = np.sqrt(variance + located.variance_without)
    z = fraction / sd_fraction

    contrast = directions[..., 0]
    counting, spread_variance = _own_variances(state, np.clip(np.nan_to_num(fraction), 0.0, 1.0), contrast)
    own = (counting + spread_variance[:, None, :]) * state.kappa[:, None, :]
    residual = fit_directions(deviations, np.where(state.measured, 1.0 / own, 0.0), directions, prior)
    degrees = np.maximum(residual.degrees_of_freedom, 0.0)
    testable = state.scored & (degrees > 0)
    residual_p = np.where(testable, chdtrc(np.maximum(degrees, 1.0), residual.residual_chi2), np.nan)

    overlapped = state.scored & (np.nan_to_num(z) > z_limit)
    foreign = testable & (np.nan_to_num(residual_p, nan=1.0) < p_limit)
    clean = state.scored & ~overlapped & ~foreign & np.isfinite(z)
    group_scored = state.scored.any(axis=1)
    result: dict[str, npt.NDArray[np.generic]] = {
        "fraction": fraction,
        "sd_fraction": sd_fraction,
        "z": z,
        "residual_chi2": np.where(testable, residual.residual_chi2, np.nan),
        "residual_dof": np.where(testable, degrees, np.nan),
        "residual_p": residual_p,
        "overlapped": overlapped,
        "foreign": foreign,
        "clean": clean,
        "used": state.used & group_scored[:, None],
        "contrast": np.where(state.used, contrast, np.nan),
        "spot_variance": np.where(state.used, spot_variance, np.nan),
        "level": np.where(state.used, state.level, np.nan),
        "level_fraction_variance": np.where(group_scored, located.variance, np.nan),
        "n_scored": state.scored.sum(axis=1),
        "n_clean": clean.sum(axis=1),
        "nuisance": directions[..., 1:],
        "nuisance_amplitude": np.where(state.scored[..., None], fit.amplitudes[..., 1:], np.nan),
        "spread": np.sqrt(state.spread_squared),
    }
    weight = np.where(state.measured & takes_part[..., None], 1.0 / own, 0.0).sum(axis=1)
    result["level_variance"] = np.where(
        state.used & (weight > 0), 1.0 / np.where(weight > 0, weight, 1.0), np.nan
    )
    information = np.where(state.used, contrast**2 / spot_variance, 0.0)
    whole = information.sum(axis=1, keepdims=True)
    result["weight_share"] = np.where(
        state.used & (whole > 0), information / np.where(whole > 0, whole, 1.0), np.nan
    )
    residuals = np.where(
        state.measured, deviations - np.nan_to_num(fit.amplitudes) @ np.swapaxes(directions, 1, 2), 0.0
    )
    taken = leverages(np.where(state.used, 1.0 / spot_variance, 0.0), directions, prior)
    return result | _group_remarks(
        state, coordinate, variance, sd_fraction, clean, (residuals, counting, taken)
    )


def _group_remarks(
    state: _Fit,
    coordinate: Array,
    variance: Array,
    sd_fraction: Array,
    clean: Mask,
    scatter: tuple[Array, Array, Array],
) -> dict[str, npt.NDArray[np.generic]]:
    """What could be seen, whether all spots scatter along the mixing line, and scatter against the stated sigma."""
    from scipy.special import chdtrc

    takes_part = state.scored & ~state.odd & np.isfinite(coordinate)
    weight = np.where(takes_part, 1.0 / variance, 0.0)
    total = np.maximum(weight.sum(axis=1), np.finfo(float).tiny)
    mean = np.sum(weight * np.nan_to_num(coordinate), axis=1) / total
    chi2 = np.sum(weight * (np.nan_to_num(coordinate) - mean[:, None]) ** 2, axis=1)
    degrees = np.maximum(takes_part.sum(axis=1) - 1.0, 0.0)
    testable = degrees > 0
    seen = np.where(clean | (~clean.any(axis=1, keepdims=True) & state.scored), sd_fraction, np.inf)
    seen = np.sort(np.where(np.isfinite(seen), seen, np.inf), axis=1)
    place = np.maximum(np.isfinite(seen).sum(axis=1) - 1, 0) // 2
    typical = np.take_along_axis(seen, place[:, None], axis=1)[:, 0]

    residuals, counting, taken = scatter
    part = state.measured & takes_part[..., None]
    ratio = np.where(part, residuals**2 / counting, 0.0).sum(axis=1) @ state.in_class
    number = part.sum(axis=1)
    expected = (np.maximum(number - 1.0, 0.0) * (1.0 - taken) * state.used) @ state.in_class
    return {
        "overdispersion_chi2": np.where(testable, chi2, np.nan),
        "overdispersion_dof": np.where(testable, degrees, np.nan),
        "overdispersion_p": np.where(testable, chdtrc(np.maximum(degrees, 1.0), chi2), np.nan),
        "detectable_fraction": np.where(np.isfinite(typical), ORACLE_FACTOR * typical, np.nan),
        "mswd": np.where(expected > 0, ratio / np.where(expected > 0, expected, 1.0), np.nan),
        "mswd_dof": expected,
    }
