"""Where the clean spots of a group lie along the mixing line, though most may be contaminated."""

from functools import cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr

from tieline.statistics.groups import BoolArray, FloatArray

_LARGEST_FRACTION = 0.5
_SCALE_STEP = 3.0
_MOST_SCALES = 14
_TABLE_LOW, _TABLE_HIGH, _TABLE_STEP = -3.2, 18.0, 0.02  # of arsinh((t − t0)/sd): −12 … 3e7
_GRID = np.arange(-6.0, 6.01, 0.25)  # in sd of one spot about the most probable level


class CleanLevel(NamedTuple):
    """Posterior mean and variance of the clean level: of the group (G,), or without each spot in turn (G, n)."""

    mean: FloatArray
    variance: FloatArray


@cache
def _log_density_table() -> FloatArray:
    """log density of (t − t0)/sd for a spot that may be contaminated, one row per number of slab scales.

    Half clean: normal, with a 2 % tail three times as wide. Half contaminated: an equal mixture of half-
    normals of scales 1, 3, 9, ... sd convolved with the noise, hence of a fraction whose order of magnitude
    is unknown.
    """
    u = np.sinh(np.arange(_TABLE_LOW, _TABLE_HIGH + _TABLE_STEP, _TABLE_STEP))
    scale = _SCALE_STEP ** np.arange(_MOST_SCALES)[:, None]
    width = np.hypot(scale, 1.0)
    halves = 2.0 * np.exp(-0.5 * (u / width) ** 2) / (np.sqrt(2 * np.pi) * width) * ndtr(u * scale / width)
    slab = np.cumsum(halves, axis=0) / np.arange(1, _MOST_SCALES + 1)[:, None]
    density: FloatArray = np.log(0.5 * _clean_density(u) + 0.5 * slab + 1e-300)
    return density


def _clean_density(u: FloatArray) -> FloatArray:
    normal = np.exp(-0.5 * u * u)
    tail = np.exp(-0.5 * (u / 3.0) ** 2) / 3.0
    density: FloatArray = (0.98 * normal + 0.02 * tail) / np.sqrt(2 * np.pi)
    return density


def _log_density(u: FloatArray, row: npt.NDArray[np.intp]) -> FloatArray:
    """Linear interpolation in the table.

    Beyond its ends the end value holds: no single spot far below the others can outvote them.
    """
    table = _log_density_table()
    place = np.clip((np.arcsinh(u) - _TABLE_LOW) / _TABLE_STEP, 0.0, table.shape[1] - 1.001)
    left = place.astype(np.intp)
    part = place - left
    flat = table.ravel()
    index = row * table.shape[1] + left
    density: FloatArray = flat[index] * (1.0 - part) + flat[index + 1] * part
    return density


def clean_level(coordinate: FloatArray, variance: FloatArray, usable: BoolArray) -> CleanLevel:
    """Posterior of the clean level t0 from the coordinates of all spots, any number of them contaminated.

    p(t0) ∝ Π_s [½ clean(t_s − t0) + ½ contaminated(t_s − t0)], flat in t0. Contamination only raises t, over an
    unknown order of magnitude; with less than that assumed, a level below which nothing lies is not identified.
    Own method.

    Parameters: coordinate and its variance (G, n); usable (G, n) marks spots that take part. Returns NaN for
    groups without a usable spot. Evaluated on a grid of ± 6 sd about the best of the spots' own coordinates.
    """
    grid, by_spot = _log_likelihood(coordinate, variance, usable)
    mean, spread = _moments(grid, by_spot.sum(axis=2))
    empty = ~usable.any(axis=1)
    return CleanLevel(np.where(empty, np.nan, mean), np.where(empty, np.nan, spread))


def clean_level_without(coordinate: FloatArray, variance: FloatArray, usable: BoolArray) -> CleanLevel:
    """The same (G, n) from all usable spots but one; NaN where no other usable spot is left."""
    grid, by_spot = _log_likelihood(coordinate, variance, usable)
    without = np.swapaxes(by_spot.sum(axis=2, keepdims=True) - by_spot, 1, 2)
    mean, spread = _moments(grid[:, None, :], without)
    lonely = usable.sum(axis=1, keepdims=True) - usable == 0
    return CleanLevel(np.where(lonely, np.nan, mean), np.where(lonely, np.nan, spread))


def _log_likelihood(
    coordinate: FloatArray, variance: FloatArray, usable: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Grid of levels (G, k), and every spot's log density there (G, k, n), 0 for a spot that is not usable."""
    t = np.where(usable, coordinate, 0.0)
    sd = np.where(usable, np.sqrt(np.where(usable, variance, 1.0)), 1.0)
    count = usable.sum(axis=1)
    typical = np.where(count > 0, np.sum(sd, axis=1, where=usable) / np.maximum(count, 1), 1.0)
    scales = np.floor(np.log(_LARGEST_FRACTION / typical) / np.log(_SCALE_STEP)).astype(np.intp)
    row = np.clip(scales, 0, _MOST_SCALES - 1)[:, None, None]

    def of_levels(levels: FloatArray) -> FloatArray:
        density = _log_density((t[:, None, :] - levels[:, :, None]) / sd[:, None, :], row)
        return np.where(usable[:, None, :], density, 0.0)

    merit = np.where(usable, of_levels(t).sum(axis=2), -np.inf)
    best = np.take_along_axis(t, np.argmax(merit, axis=1)[:, None], axis=1)
    grid = best + _GRID * typical[:, None]
    return grid, of_levels(grid)


def _moments(grid: FloatArray, log_weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    weight = np.exp(log_weight - log_weight.max(axis=-1, keepdims=True))
    norm = weight.sum(axis=-1)
    mean = np.sum(weight * grid, axis=-1) / norm
    return mean, np.sum(weight * (grid - mean[..., None]) ** 2, axis=-1) / norm
