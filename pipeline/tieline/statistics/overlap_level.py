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


@cache
def _log_density_steps() -> tuple[FloatArray, FloatArray]:
    """The table, and what it rises by to the next place, row after row."""
    table = _log_density_table()
    rise = np.diff(table, axis=1, append=table[:, -1:])
    return table.ravel(), rise.ravel()


def _log_density(u: FloatArray, row: npt.NDArray[np.intp]) -> FloatArray:
    """Linear interpolation in the table; u is overwritten.

    Beyond its ends the end value holds: no single spot far below the others can outvote them.
    """
    table, rise = _log_density_steps()
    width = len(table) // _MOST_SCALES
    place = np.arcsinh(u, out=u)
    place -= _TABLE_LOW
    place /= _TABLE_STEP
    np.clip(place, 0.0, width - 1.001, out=place)
    index = place.astype(np.intp)
    place -= index
    index += row * width
    place *= rise[index]
    place += table[index]
    return place


def clean_level(coordinate: FloatArray, variance: FloatArray, usable: BoolArray) -> CleanLevel:
    """Posterior of the clean level t0 from the coordinates of all spots, any number of them contaminated.

    p(t0) ∝ Π_s [½ clean(t_s − t0) + ½ contaminated(t_s − t0)], flat in t0. Contamination only raises t, over an
    unknown order of magnitude; with less than that assumed, a level below which nothing lies is not identified.
    Own method.

    Parameters: coordinate and its variance (G, n); usable (G, n) marks spots that take part. Returns NaN for
    groups without a usable spot. Evaluated on a grid of ± 6 sd about the best of the spots' own coordinates.
    """
    grid, by_spot = _log_likelihood(coordinate, variance, usable)
    return _of_all(grid, _together(by_spot), usable)


def clean_levels(
    coordinate: FloatArray, variance: FloatArray, usable: BoolArray
) -> tuple[CleanLevel, CleanLevel]:
    """The same, and from all usable spots but each in turn (G, n), NaN where no other usable spot is left."""
    grid, by_spot = _log_likelihood(coordinate, variance, usable)
    log_weight = _together(by_spot)
    mean, spread = _moments(grid[:, None, :], log_weight[:, None, :] - by_spot)
    lonely = usable.sum(axis=1, keepdims=True) - usable == 0
    without = CleanLevel(np.where(lonely, np.nan, mean), np.where(lonely, np.nan, spread))
    return _of_all(grid, log_weight, usable), without


def _of_all(grid: FloatArray, log_weight: FloatArray, usable: BoolArray) -> CleanLevel:
    mean, spread = _moments(grid, log_weight)
    empty = ~usable.any(axis=1)
    return CleanLevel(np.where(empty, np.nan, mean), np.where(empty, np.nan, spread))


def _log_likelihood(
    coordinate: FloatArray, variance: FloatArray, usable: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Grid of levels (G, k), and every spot's log density there (G, n, k), 0 for a spot that is not usable."""
    t = np.where(usable, coordinate, 0.0)
    sd = np.where(usable, np.sqrt(np.where(usable, variance, 1.0)), 1.0)
    count = usable.sum(axis=1)
    typical = np.where(count > 0, np.sum(sd, axis=1, where=usable) / np.maximum(count, 1), 1.0)
    scales = np.floor(np.log(_LARGEST_FRACTION / typical) / np.log(_SCALE_STEP)).astype(np.intp)
    row = np.clip(scales, 0, _MOST_SCALES - 1)[:, None, None]

    def of_levels(levels: FloatArray) -> FloatArray:
        density = t[:, :, None] - levels[:, None, :]
        density /= sd[:, :, None]
        density = _log_density(density, row)
        density *= usable[:, :, None]
        return density

    merit = np.where(usable, _together(of_levels(t)), -np.inf)
    best = np.take_along_axis(t, np.argmax(merit, axis=1)[:, None], axis=1)
    grid = best + _GRID * typical[:, None]
    return grid, of_levels(grid)


def _together(by_spot: FloatArray) -> FloatArray:
    """Log likelihood (G, k) of all spots (G, n, k)."""
    together: FloatArray = np.einsum("gnk->gk", by_spot)
    return together


def _moments(grid: FloatArray, log_weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    weight = np.exp(log_weight - log_weight.max(axis=-1, keepdims=True))
    norm = weight.sum(axis=-1)
    mean = np.sum(weight * grid, axis=-1) / norm
    return mean, np.sum(weight * (grid - mean[..., None]) ** 2, axis=-1) / norm
