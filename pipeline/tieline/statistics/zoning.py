"""Growth zoning told apart from overlap: a score of every spot, regressed on distance within grains."""

from typing import NamedTuple

import numpy as np
from scipy.special import nctdtr, stdtr, stdtrit

from tieline.statistics.groups import BoolArray, FloatArray, IntArray
from tieline.statistics.overlap_covariance import fit_directions, growth_factor

_DETECTION_PROBABILITY = 0.95


class ZoningScores(NamedTuple):
    """Zoning of every group, all (G,) but the score (G, n); NaN (zoned False) where it cannot be tested.

    score: relative change of elements of low partition coefficient in that spot, to first order; change: its regression
    over the range of distances, with its standard error; p_value two-sided; zoned: p below alpha.
    smallest_change: what this group would have shown in 95 % of cases: nothing smaller can be called
    unzoned. grains, degrees_of_freedom; within_share: share of the variance of distance that lies within
    grains (near 0: grain and distance confounded).
    """

    score: FloatArray
    change: FloatArray
    change_error: FloatArray
    p_value: FloatArray
    zoned: BoolArray
    smallest_change: FloatArray
    number: IntArray
    grains: IntArray
    degrees_of_freedom: FloatArray
    within_share: FloatArray

    def power(self, change: float, alpha: float = 0.01) -> FloatArray:
        """Probability (G,) of finding a given relative change over the range of distances."""
        degrees = np.where(self.degrees_of_freedom >= 1, self.degrees_of_freedom, np.nan)
        critical = stdtrit(degrees, 1 - alpha / 2)
        shift = np.abs(change) / self.change_error
        # scipy returns NaN for the opposite tail where it vanishes.
        opposite = np.nan_to_num(nctdtr(degrees, shift, -critical))
        return np.asarray(1 - nctdtr(degrees, shift, critical) + opposite)


def zoning_scores(
    values: FloatArray,
    level: FloatArray,
    contaminant: FloatArray,
    spot_variance: FloatArray,
    is_trace: BoolArray,
    distance: FloatArray,
    grain: IntArray,
    usable: BoolArray,
    alpha: float = 0.01,
) -> ZoningScores:
    """Fit every spot's deviation by [g − c, c·(1 − c/g)] and regress the second amplitude on distance.

    Overlap adds f/D, different for every element; growth zoning multiplies all elements of low partition
    coefficient alike: generalized least squares separates them. Grains enter as dummies, so that grains
    which differ as a whole are not taken for zoning. Own method; the regression is ordinary least squares
    within grains.

    Parameters: values (G, n, p); level, contaminant, spot_variance (G, p) as from `overlap_scores` (NaN:
    element not used); is_trace (p,): the elements that zone, all where a group has no trace; distance (G,
    n), in any unit, or 0 and 1 for two zones; grain (G, n), codes >= 0, negative for unknown, which all
    count as one grain; usable (G, n). Power is low for few spots: with n < 8 the answer is rarely
    "unzoned"; see smallest_change.
    """
    used = np.isfinite(level) & np.isfinite(contaminant) & (spot_variance > 0)
    safe_level = np.where(used, level, 0.0)
    traced = used & is_trace
    zoning_elements = np.where(traced.any(axis=1, keepdims=True), traced, used)
    growth = np.where(
        zoning_elements, np.maximum(safe_level, 0.0) * growth_factor(safe_level, contaminant), 0.0
    )
    contrast = np.where(used, contaminant, 0.0) - safe_level
    measured = np.isfinite(values) & used[:, None, :]
    inverse = np.where(measured, 1.0 / np.where(used, spot_variance, 1.0)[:, None, :], 0.0)
    deviations = np.where(measured, np.where(measured, values, 0.0) - safe_level[:, None, :], 0.0)
    directions = np.stack([contrast, growth], axis=-1)
    fit = fit_directions(deviations, inverse, directions, np.array([np.inf, np.inf]))
    score = np.where(measured.sum(axis=2) >= 3, fit.amplitudes[..., 1], np.nan)
    return _regress(score, distance, grain, usable & np.isfinite(score) & np.isfinite(distance), alpha)


def _regress(
    score: FloatArray, distance: FloatArray, grain: IntArray, takes_part: BoolArray, alpha: float
) -> ZoningScores:
    y = np.where(takes_part, score, 0.0)
    x = np.where(takes_part, distance, 0.0)
    codes, grains = _grain_codes(grain, takes_part)
    x_within = np.where(takes_part, x - _grain_mean(x, codes, takes_part), 0.0)
    y_within = np.where(takes_part, y - _grain_mean(y, codes, takes_part), 0.0)
    number = takes_part.sum(axis=1)
    safe_number = np.maximum(number, 1)
    x_all = np.where(takes_part, x - (x.sum(axis=1) / safe_number)[:, None], 0.0)
    within = np.sum(x_within**2, axis=1)
    overall = np.sum(x_all**2, axis=1)
    degrees = number - grains - 1.0
    testable = (degrees >= 1) & (within > 1e-12 * np.maximum(overall, np.finfo(float).tiny))
    safe_within = np.where(testable, within, 1.0)
    safe_degrees = np.where(testable, degrees, 1.0)
    slope = np.sum(x_within * y_within, axis=1) / safe_within
    residual = np.sum((y_within - slope[:, None] * x_within) ** 2, axis=1)
    error = np.sqrt(residual / safe_degrees / safe_within)
    span = np.max(np.where(takes_part, x, -np.inf), axis=1, initial=-np.inf)
    span = np.where(number > 0, span - np.min(np.where(takes_part, x, np.inf), axis=1, initial=np.inf), 0.0)
    t = np.where(error > 0, slope / np.where(error > 0, error, 1.0), 0.0)
    p_value = np.where(testable, 2 * stdtr(safe_degrees, -np.abs(t)), np.nan)
    needed = stdtrit(safe_degrees, 1 - alpha / 2) + stdtrit(safe_degrees, _DETECTION_PROBABILITY)
    return ZoningScores(
        score=score,
        change=np.where(testable, slope * span, np.nan),
        change_error=np.where(testable, error * span, np.nan),
        p_value=p_value,
        zoned=np.nan_to_num(p_value, nan=1.0) < alpha,
        smallest_change=np.where(testable, needed * error * span, np.nan),
        number=number,
        grains=grains,
        degrees_of_freedom=np.where(testable, degrees, np.nan),
        within_share=np.where(overall > 0, within / np.where(overall > 0, overall, 1.0), np.nan),
    )


def _grain_codes(grain: IntArray, takes_part: BoolArray) -> tuple[IntArray, IntArray]:
    """One code per group and grain over the whole array, and the number of grains present in every group."""
    groups = grain.shape[0]
    names, name = np.unique(np.maximum(grain, -1), return_inverse=True)
    rows = np.broadcast_to(np.arange(groups)[:, None], grain.shape)
    unique, codes = np.unique(rows * len(names) + name.reshape(grain.shape), return_inverse=True)
    codes = codes.reshape(grain.shape)
    present = np.bincount(codes[takes_part], minlength=len(unique)) > 0
    return codes, np.bincount(unique[present] // max(len(names), 1), minlength=groups)


def _grain_mean(values: FloatArray, codes: IntArray, takes_part: BoolArray) -> FloatArray:
    size = int(codes.max(initial=0)) + 1
    count = np.bincount(codes[takes_part], minlength=size)
    total = np.bincount(codes[takes_part], weights=values[takes_part], minlength=size)
    return np.asarray((total / np.maximum(count, 1))[codes])
