"""The published alternative for ratios of means of few values: propagation of scaled-t distributions (JCGM
101:2008).

- `ratio_draws_interval(alpha, beta, ...)` interval of the ratio
- `share_above(alpha, beta, boundaries, ...)` probability that the ratio exceeds each boundary

The state of knowledge of a mean of n values is mean + standard error × t with n - 1 degrees of freedom
(JCGM 101, 6.4.9). Concentrations cannot be negative, so draws with a negative mean are left out (ours;
without it the ratio of means of two values has no useful interval).

The draws are not random numbers of each call but one fixed set of points, spread evenly over the unit cube,
so a ratio's interval depends on nothing but its own numbers: neither on its neighbours nor on their order,
and no seed is needed. With 8192 points the distance of an end from the ratio is good to about 2 %.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy import special

from tieline.statistics.groups import FloatArray, IntArray

DRAWS = 2**13
_CHUNK = 256


@dataclass(frozen=True)
class ScaledT:
    """Mean, standard error and degrees of freedom of K scaled-t quantities, shape (K,) each, dof >= 1."""

    mean: FloatArray
    standard_error: FloatArray
    dof: FloatArray
    relative_calibration: FloatArray


@cache
def _uniforms() -> FloatArray:
    """Points in the four-dimensional unit cube, shape (4, DRAWS): multiples of the powers of 1/g modulo 1.

    g is the root of g^5 = g + 1, the golden ratio of four dimensions: an additive lattice that fills the
    cube far more evenly than random points do (Roberts 2018, from memory).
    """
    g = 1.0
    for _ in range(100):
        g = (1.0 + g) ** 0.2
    steps = g ** -np.arange(1.0, 5.0)
    points: FloatArray = np.mod(0.5 + np.outer(steps, np.arange(1, DRAWS + 1)), 1.0)
    return points


@cache
def _t_deviates(dof: float, coordinate: int) -> FloatArray:
    deviates: FloatArray = special.stdtrit(dof, _uniforms()[coordinate])
    return deviates


@cache
def _normal_deviates(coordinate: int) -> FloatArray:
    deviates: FloatArray = special.ndtri(_uniforms()[coordinate])
    return deviates


def _draws(quantity: ScaledT, rows: IntArray, coordinate: int) -> FloatArray:
    """Draws of quantities of equal dof, shape (k, DRAWS); calibration takes the coordinate two further on."""
    t = _t_deviates(float(quantity.dof[rows[0]]), coordinate)
    out = quantity.mean[rows, None] + quantity.standard_error[rows, None] * t
    calibration = quantity.relative_calibration[rows]
    if calibration.any():
        out *= 1.0 + calibration[:, None] * _normal_deviates(coordinate + 2)
    return out


def _chunks(alpha: ScaledT, beta: ScaledT) -> Iterator[IntArray]:
    """Row numbers of ratios with equal degrees of freedom, a bounded number at a time."""
    _, pair = np.unique(np.stack([alpha.dof, beta.dof], axis=1), axis=0, return_inverse=True)
    pair = pair.reshape(-1)
    order = np.argsort(pair, kind="stable")
    for rows in np.split(order, np.flatnonzero(np.diff(pair[order])) + 1):
        for first in range(0, len(rows), _CHUNK):
            yield rows[first : first + _CHUNK]


def ratio_draws_interval(alpha: ScaledT, beta: ScaledT, confidence: float) -> tuple[FloatArray, FloatArray]:
    """Probabilistically symmetric interval of alpha / beta, two arrays of shape (K,).

    NaN where fewer than 1 in 100 draws has both means positive.
    """
    low, high = np.full(alpha.mean.shape, np.nan), np.full(alpha.mean.shape, np.nan)
    tail = 0.5 * (1.0 - confidence)
    for rows in _chunks(alpha, beta):
        ratios, count = _positive_ratios(alpha, beta, rows)
        ratios.sort(axis=1)
        usable = count >= DRAWS // 100
        at = np.arange(len(count))
        low_rank = np.floor(tail * count).astype(np.int64)
        high_rank = np.maximum(count - 1 - low_rank, 0)
        low[rows] = np.where(usable, ratios[at, low_rank], np.nan)
        high[rows] = np.where(usable, ratios[at, high_rank], np.nan)
    return low, high


def share_above(alpha: ScaledT, beta: ScaledT, boundaries: FloatArray) -> FloatArray:
    """Share of draws in which alpha / beta exceeds each boundary, shape (K, B); NaN as for the interval."""
    out = np.full((len(alpha.mean), len(boundaries)), np.nan)
    for rows in _chunks(alpha, beta):
        ratios, count = _positive_ratios(alpha, beta, rows)
        usable = count >= DRAWS // 100
        for column, boundary in enumerate(boundaries):
            above = np.count_nonzero(np.isfinite(ratios) & (ratios > boundary), axis=1)
            out[rows, column] = np.where(usable, above / np.maximum(count, 1), np.nan)
    return out


def _positive_ratios(alpha: ScaledT, beta: ScaledT, rows: IntArray) -> tuple[FloatArray, IntArray]:
    """Ratios of the draws with both means positive, the others infinite, and how many there are of them."""
    numerator, denominator = _draws(alpha, rows, 0), _draws(beta, rows, 1)
    positive = (numerator > 0) & (denominator > 0)
    ratios = np.full(numerator.shape, np.inf)
    np.divide(numerator, denominator, out=ratios, where=positive)
    return ratios, np.count_nonzero(positive, axis=1)
