"""The host's mean after taking every spot's own contaminant out of it."""

from typing import NamedTuple

import numpy as np

from tieline.statistics.groups import BoolArray, FloatArray
from tieline.statistics.overlap import OverlapScores

_FEWEST_CLEAN = 3


class Unmixed(NamedTuple):
    """Per group and element (G, p): mean, its variance, degrees of freedom, and widening, in concentration.

    widening is the standard deviation of one spot's fraction times the contrast: when positive, subtract it
    from the lower end of the interval of the mean, when negative, from the upper end (which raises it). Per
    group (G,): needs_bound, fewer than three clean spots, so that the interval must be united with that of
    `overlap_bound`.
    """

    mean: FloatArray
    variance: FloatArray
    degrees_of_freedom: FloatArray
    widening: FloatArray
    needs_bound: BoolArray


def unmix(
    values: FloatArray, sigmas: FloatArray, contaminant_variance: FloatArray, scores: OverlapScores
) -> Unmixed:
    """Weighted mean of x_s − f_s·(g − c) over all but foreign spots, with the error of the clean level.

    Weights are 1/(sigma² of the spot + f²·variance of the contaminant + spread); the variance is the
    weighted scatter of the unmixed values plus that of the clean level times the contrast squared. The
    elements that determine f (see `weight_share`) have no partition coefficient of their own afterwards:
    only that of the clean level assumed.

    Parameters: values, sigmas (G, n, p), contaminant_variance (G, p) as given to `overlap_scores`. Own
    method. In simulations the widened intervals cover 92–100 % while some spots are clean or the fractions
    small, 69–86 % where all spots hold much; elements near their own detection come out up to 9 % low.
    """
    takes_part = (
        np.isfinite(values) & (np.isfinite(scores.z) & ~scores.foreign)[..., None] & scores.used[:, None, :]
    )
    fraction = np.clip(np.nan_to_num(scores.fraction), None, 1.0)[..., None]
    contrast = np.nan_to_num(scores.contrast)[:, None, :]
    unmixed = np.where(takes_part, np.where(takes_part, values, 0.0) - fraction * contrast, 0.0)

    # One spot's clean variance, plus what the contaminant adds to it.
    added = fraction**2 * np.nan_to_num(contaminant_variance)[:, None, :]
    own_sigma = np.nan_to_num(sigmas) ** 2
    clean = np.nan_to_num(scores.spot_variance, nan=1.0)[:, None, :]
    contaminated = np.broadcast_to(scores.overlapped[..., None], takes_part.shape)
    weight = np.where(
        takes_part, 1.0 / np.where(contaminated, np.maximum(clean, own_sigma) + added, clean), 0.0
    )

    number = takes_part.sum(axis=1)
    total = weight.sum(axis=1)
    possible = (number >= 2) & (total > 0)
    safe_total = np.where(total > 0, total, 1.0)
    mean = np.sum(weight * unmixed, axis=1) / safe_total
    scatter = np.sum(weight**2 * (unmixed - mean[:, None, :]) ** 2, axis=1) / safe_total**2
    scatter = scatter / np.clip(1.0 - np.sum(weight**2, axis=1) / safe_total**2, 1e-3, None)
    variance = scatter + np.nan_to_num(scores.level_fraction_variance)[:, None] * contrast[:, 0, :] ** 2
    fitted = np.where(np.isfinite(scores.sd_fraction), scores.sd_fraction, np.inf)
    typical = np.min(fitted, axis=1, initial=np.inf)
    widening = np.where(np.isfinite(typical), typical, np.nan)[:, None] * contrast[:, 0, :]
    return Unmixed(
        np.where(possible, mean, np.nan),
        np.where(possible, variance, np.nan),
        np.where(possible, number - 1.0, np.nan),
        np.where(possible, widening, np.nan),
        scores.n_clean < _FEWEST_CLEAN,
    )
