"""Means of estimates with uncertain weights, from the estimates' own intervals.

Public: `weighted_means`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class WeightedMeans:
    """E weighted means, shape (E,) each: value, standard deviation and ends of the interval."""

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray


def weighted_means(
    weights: FloatArray,
    weights_covariance: FloatArray,
    values: FloatArray,
    sd: FloatArray,
    low: FloatArray,
    high: FloatArray,
    correlation: FloatArray,
    quantile: float,
) -> WeightedMeans:
    """sum w v / sum w of E sets of k estimates with common weights, weights and values being independent.

    weights (k,), not negative, with covariance (k, k); values, sd and the ends low, high of their intervals: (E, k);
    correlation of their errors: (E, k, k). The interval joins the distances d of the ends from the values,
    sqrt(sum_ij r_ij s_i s_j d_i d_j) with the shares s (Zou & Donner 2008, Stat. Med. 27:1693, from memory), so that lopsided
    intervals, and those from few values, keep their form; the weights' part, to first order, adds `quantile` standard
    deviations in the same way. Raises ValueError where the weights do not add up to more than zero.
    """
    total = float(np.sum(weights))
    if not total > 0 or np.any(weights < 0):
        raise ValueError("weights must not be negative and must add up to more than zero")
    shares = weights / total
    value = values @ shares
    slope = (values - value[:, None]) / total
    of_weights = np.einsum("ek,kl,el->e", slope, weights_covariance, slope)

    def joined(distance: FloatArray) -> FloatArray:
        part = shares * distance
        return np.asarray(np.maximum(np.einsum("ek,ekl,el->e", part, correlation, part), 0.0))

    reach = quantile**2 * np.maximum(of_weights, 0.0)
    return WeightedMeans(
        value,
        np.sqrt(joined(sd) + np.maximum(of_weights, 0.0)),
        value - np.sqrt(joined(values - low) + reach),
        value + np.sqrt(joined(high - values) + reach),
    )
