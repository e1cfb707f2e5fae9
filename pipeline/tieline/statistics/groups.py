"""Sums, means and medians of many groups at once.

Values of all groups stand in one flat array; `group` holds the code 0..n_groups-1 of each. Sums run in the
order of the rows, so identical input gives identical bytes; another order of rows changes the last bits
only.
"""

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


def group_sum(values: FloatArray, group: IntArray, n_groups: int) -> FloatArray:
    """Sum of each group, shape (n_groups,); an empty group has the sum 0."""
    return np.bincount(group, weights=values, minlength=n_groups).astype(np.float64, copy=False)


def group_count(group: IntArray, n_groups: int) -> IntArray:
    """Number of values of each group, shape (n_groups,)."""
    return np.bincount(group, minlength=n_groups).astype(np.int64, copy=False)


def divide(
    numerator: FloatArray, denominator: FloatArray | IntArray, otherwise: float = np.nan
) -> FloatArray:
    """numerator / denominator where the denominator is not zero, `otherwise` elsewhere; never warns."""
    numerator, denominator = np.broadcast_arrays(numerator, denominator)
    out = np.full(numerator.shape, otherwise, dtype=np.float64)
    np.divide(numerator, denominator, out=out, where=denominator != 0)
    return out


def group_mean(values: FloatArray, group: IntArray, n_groups: int) -> FloatArray:
    """Arithmetic mean of each group, shape (n_groups,); NaN for an empty group."""
    return divide(group_sum(values, group, n_groups), group_count(group, n_groups))


def group_extreme(values: FloatArray, group: IntArray, n_groups: int, *, largest: bool) -> FloatArray:
    """Largest or smallest value of each group, shape (n_groups,); NaN for an empty group."""
    out = np.full(n_groups, -np.inf if largest else np.inf)
    (np.maximum if largest else np.minimum).at(out, group, values)
    out[~np.isfinite(out)] = np.nan
    return out


def group_median(values: FloatArray, group: IntArray, n_groups: int) -> FloatArray:
    """Median of each group, shape (n_groups,); NaN for an empty group."""
    count = group_count(group, n_groups)
    ordered = values[np.lexsort((values, group))]
    start = np.cumsum(count) - count
    out = np.full(n_groups, np.nan)
    filled = count > 0
    lower = start[filled] + (count[filled] - 1) // 2
    upper = start[filled] + count[filled] // 2
    out[filled] = 0.5 * (ordered[lower] + ordered[upper])
    return out
