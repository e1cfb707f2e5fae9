"""What a finished fit says of every spot, element and group."""

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc

from tieline.statistics.groups import BoolArray, FloatArray
from tieline.statistics.overlap_covariance import (
    MixingFit,
    amplitudes_along,
    fit_directions,
    leverages,
    over_spots,
)
from tieline.statistics.overlap_fit import OverlapFit, counting_variance
from tieline.statistics.overlap_level import CleanLevel, clean_levels

ORACLE_FACTOR = 4.735
"""Standard deviations between 95 % recall and one false alarm in 1,000: 1.645 + 3.090."""

PER_SPOT = frozenset(
    (
        "fraction",
        "sd_fraction",
        "z",
        "residual_chi2",
        "residual_dof",
        "residual_p",
        "overlapped",
        "foreign",
        "clean",
        "nuisance_amplitude",
    )
)
"""The results that have one value per spot."""

Results = dict[str, npt.NDArray[np.generic]]


def findings(
    state: OverlapFit, directions: FloatArray, prior: FloatArray, z_limit: float, p_limit: float
) -> Results:
    """All fields of `OverlapScores` for one block of groups."""
    spot_variance = state.spot_variance()
    deviations = state.deviations()
    inverse = state.weight * (1.0 / spot_variance)[:, None, :]
    amplitudes, variances, _ = amplitudes_along(deviations, inverse, directions, prior)
    coordinate = np.where(state.scored, amplitudes[..., 0], np.nan)
    variance = np.where(state.scored, variances[..., 0], np.nan)
    takes_part = state.scored & ~state.odd & np.isfinite(coordinate)
    located, without = clean_levels(coordinate, variance, takes_part)
    fraction = coordinate - without.mean

    likely = np.clip(np.nan_to_num(fraction), 0.0, 1.0)
    counting = counting_variance(state, likely, directions[..., 0])
    inverse = state.weight / ((counting + state.spread_variance()[:, None, :]) * state.kappa[:, None, :])
    residual = fit_directions(deviations, inverse, directions, prior)
    spots = _spot_findings(state, fraction, np.sqrt(variance + without.variance), residual, z_limit, p_limit)

    part = takes_part * 1.0
    deviations -= np.nan_to_num(amplitudes) @ np.swapaxes(directions, 1, 2)
    squared = state.weight * deviations**2
    # Scatter against the stated sigma: without the factor found for it.
    ratio = over_spots(squared / counting, part) * state.counting_scale()
    taken = leverages(np.where(state.used, 1.0 / spot_variance, 0.0), directions, prior)
    expected = np.maximum(over_spots(state.weight, part) - 1.0, 0.0) * (1.0 - taken) * state.used
    return (
        spots
        | _element_results(state, directions, over_spots(inverse, part), located)
        | _overdispersion(coordinate, variance, takes_part)
        | _scatter(ratio @ state.in_class, expected @ state.in_class)
        | {
            "nuisance_amplitude": np.where(state.scored[..., None], amplitudes[..., 1:], np.nan),
            "detectable_fraction": _detectable(spots),
        }
    )


def _spot_findings(
    state: OverlapFit,
    fraction: FloatArray,
    sd_fraction: FloatArray,
    residual: MixingFit,
    z_limit: float,
    p_limit: float,
) -> Results:
    z = fraction / sd_fraction
    degrees = np.maximum(residual.degrees_of_freedom, 0.0)
    testable = state.scored & (degrees > 0)
    residual_p = np.where(testable, chdtrc(np.maximum(degrees, 1.0), residual.residual_chi2), np.nan)
    overlapped = state.scored & (np.nan_to_num(z) > z_limit)
    foreign = testable & (np.nan_to_num(residual_p, nan=1.0) < p_limit)
    clean = state.scored & ~overlapped & ~foreign & np.isfinite(z)
    return {
        "fraction": fraction,
        "sd_fraction": sd_fraction,
        "z": z,
        "residual_chi2": np.where(testable, residual.residual_chi2, np.nan),
        "residual_dof": np.where(testable, degrees, np.nan),
        "residual_p": residual_p,
        "overlapped": overlapped,
        "foreign": foreign,
        "clean": clean,
        "n_scored": state.scored.sum(axis=1),
        "n_clean": clean.sum(axis=1),
    }


def _element_results(
    state: OverlapFit, directions: FloatArray, weight: FloatArray, located: CleanLevel
) -> Results:
    used, contrast, spot_variance = state.used, directions[..., 0], state.spot_variance()
    group_scored = state.scored.any(axis=1)
    information = np.where(used, contrast**2 / spot_variance, 0.0)
    whole = information.sum(axis=1, keepdims=True)
    seen = used & (weight > 0)
    share = information / np.where(whole > 0, whole, 1.0)
    return {
        "used": used & group_scored[:, None],
        "contrast": np.where(used, contrast, np.nan),
        "spot_variance": np.where(used, spot_variance, np.nan),
        "level": np.where(used, state.level, np.nan),
        "level_variance": np.where(seen, 1.0 / np.where(seen, weight, 1.0), np.nan),
        "level_fraction_variance": np.where(group_scored, located.variance, np.nan),
        "weight_share": np.where(used & (whole > 0), share, np.nan),
        "nuisance": directions[..., 1:],
        "spread": np.sqrt(state.spread_squared),
    }


def _overdispersion(coordinate: FloatArray, variance: FloatArray, takes_part: BoolArray) -> Results:
    """Chi-square of all coordinates about their mean: all spots may contain some contaminant."""
    weight = np.where(takes_part, 1.0 / variance, 0.0)
    total = weight.sum(axis=1)
    t = np.where(takes_part, coordinate, 0.0)
    mean = np.sum(weight * t, axis=1) / np.where(total > 0, total, 1.0)
    chi2 = np.sum(weight * (t - mean[:, None]) ** 2, axis=1)
    degrees = np.maximum(takes_part.sum(axis=1) - 1.0, 0.0)
    testable = degrees > 0
    return {
        "overdispersion_chi2": np.where(testable, chi2, np.nan),
        "overdispersion_dof": np.where(testable, degrees, np.nan),
        "overdispersion_p": np.where(testable, chdtrc(np.maximum(degrees, 1.0), chi2), np.nan),
    }


def _scatter(ratio: FloatArray, expected: FloatArray) -> Results:
    mswd = np.where(expected > 0, ratio / np.where(expected > 0, expected, 1.0), np.nan)
    return {"mswd": mswd, "mswd_dof": expected}


def _detectable(spots: Results) -> FloatArray:
    """ORACLE_FACTOR times the median error of the clean spots, of all scored ones where none is clean."""
    clean, sd_fraction = spots["clean"], spots["sd_fraction"]
    counted = (clean | ~np.any(clean, axis=1, keepdims=True)) & np.isfinite(sd_fraction)
    ordered = np.sort(np.where(counted, sd_fraction, np.inf), axis=1)
    place = np.maximum(counted.sum(axis=1) - 1, 0) // 2
    typical = np.take_along_axis(ordered, place[:, None], axis=1)[:, 0]
    return np.where(np.isfinite(typical), ORACLE_FACTOR * typical, np.nan)
