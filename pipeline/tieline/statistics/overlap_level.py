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
    """Posterior of the clean level: mean and variance (G,), and without each spot in turn (G, n)."""

    mean: FloatArray
    variance: FloatArray
    mean_without: FloatArray
    variance_without: FloatArray
    probability_clean: FloatArray


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

    p(t0) ∝ Π_s [½ clean(t_s − t0) + ½ contaminated(t_s − t0)], flat in t0. Contamination only raises t,
    over an unknown order of magnitude; with less than that assumed, a level below which nothing lies is not
    identified. Own method.

    Parameters: coordinate and its variance (G, n); usable (G, n) marks spots that take part. Returns NaN
    for groups without a usable spot; "without" results are NaN where no other usable spot is left.
    Evaluated on a grid of ± 6 sd about the best of the spots' own coordinates.
    """
    usable = usable & np.isfinite(coordinate) & (variance > 0)
    t = np.where(usable, coordinate, 0.0)
    sd = np.where(usable, np.sqrt(np.where(usable, variance, 1.0)), 1.0)
    count = usable.sum(axis=1)
    typical = np.where(count > 0, np.sum(np.where(usable, sd, 0.0), axis=1) / np.maximum(count, 1), 1.0)
    scales = np.floor(np.log(_LARGEST_FRACTION / typical) / np.log(_SCALE_STEP)).astype(np.intp)
    row = np.clip(scales, 0, _MOST_SCALES - 1)[:, None, None]

    at_spots = np.where(
        usable[:, None, :], _log_density((t[:, None, :] - t[:, :, None]) / sd[:, None, :], row), 0.0
    )
    merit = np.where(usable, at_spots.sum(axis=2), -np.inf)
    best = np.take_along_axis(t, np.argmax(merit, axis=1)[:, None], axis=1)
    grid = best + _GRID * typical[:, None]
    by_spot = np.where(
        usable[:, None, :], _log_density((t[:, None, :] - grid[:, :, None]) / sd[:, None, :], row), 0.0
    )
    total = by_spot.sum(axis=2)
    mean, spread = _moments(grid, total)
    without = np.swapaxes(total[:, :, None] - by_spot, 1, 2)
    mean_without, spread_without = _moments(grid[:, None, :], without)
    u = (t - mean[:, None]) / sd
    probability = 0.5 * _clean_density(u) / np.exp(_log_density(u, row[:, :, 0]))
    empty = count == 0
    lonely = (count[:, None] - usable) == 0
    return CleanLevel(
        np.where(empty, np.nan, mean),
        np.where(empty, np.nan, spread),
        np.where(lonely, np.nan, mean_without),
        np.where(lonely, np.nan, spread_without),
        np.where(usable, np.clip(probability, 0.0, 1.0), np.nan),
    )


def _moments(grid: FloatArray, log_weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    weight = np.exp(log_weight - log_weight.max(axis=-1, keepdims=True))
    norm = weight.sum(axis=-1)
    mean = np.sum(weight * grid, axis=-1) / norm
    return mean, np.sum(weight * (grid - mean[..., None]) ** 2, axis=-1) / norm
