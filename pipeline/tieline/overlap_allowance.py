"""How far undetected overlap of beta in alpha could still affect the D's of one pair."""

from __future__ import annotations

import numpy as np
from scipy import special

from tieline.arrays import FloatArray, IntArray
from tieline.statistics.overlap_bound import overlap_bound
from tieline.statistics.ratios import RatioInterval


def overlap_allowance(
    pair: IntArray, D: FloatArray, interval: RatioInterval, confidence: float
) -> tuple[FloatArray, FloatArray]:
    """Lower end of every D with overlap allowed for, and the largest fraction its pair allows, shape (K,) each.

    pair: a number per pair of phases, shape (K,); the D's of a pair stand together.
    An upper limit on D bounds the overlap as well: it enters as zero with the standard uncertainty that
    puts the limit at the configured confidence.
    """
    quantile = float(special.ndtri(0.5 + 0.5 * confidence))
    is_limit = interval.kind == "upper-limit"
    apparent = np.where(is_limit, 0.0, D)
    se = np.where(is_limit, interval.high / quantile, interval.sd)
    dof = np.where(is_limit | ~(np.nan_to_num(interval.dof) > 0), 1e9, interval.dof)
    place = _place_within(pair)
    pair = np.cumsum(place == 0) - 1
    shape = (int((place == 0).sum()), int(place.max(initial=-1)) + 1)

    def rectangle(flat: FloatArray, fill: float) -> FloatArray:
        out = np.full(shape, fill)
        out[pair, place] = flat
        return out

    bound = overlap_bound(rectangle(apparent, np.nan), rectangle(se, np.nan), rectangle(dof, 1e9), confidence)
    # Never above the interval itself, which may reach further down than its standard uncertainty tells.
    lowest = np.where(is_limit, 0.0, np.fmin(bound.lowest[pair, place], interval.low))
    return lowest, bound.fraction[pair] if len(pair) else np.zeros(0)


def _place_within(code: IntArray) -> IntArray:
    """0, 1, 2, ... within each code; equal codes stand together."""
    new = np.ones(len(code), dtype=np.bool_)
    new[1:] = code[1:] != code[:-1]
    start = np.flatnonzero(new)
    return np.arange(len(code)) - start[np.cumsum(new) - 1] if len(code) else np.zeros(0, dtype=np.int64)
