"""Means that withstand a few stray values: the median and Huber's proposal 2, for many groups at once.

- `median_means(values, group, n_groups) -> mean, variance, dof, efficiency_factor`
- `huber_means(values, group, n_groups) -> mean, variance, dof, efficiency_factor`
- `huber_proposal2(values, group, n_groups, k=1.5) -> location, scale`
- `median_and_madn(values, group, n_groups) -> median, scaled median absolute deviation`

Each shape (n_groups,). `efficiency_factor` is n var(mean)/sigma² on normal data: what the estimator costs
beside s²/n.
"""

import numpy as np

from tieline.statistics.groups import (
    FloatArray,
    IntArray,
    divide,
    group_count,
    group_mean,
    group_median,
    group_sum,
)

MADN_FACTOR = 1.482602218505602  # 1 / Phi^-1(3/4)
HUBER_K = 1.5  # AMC 1989, Analyst 114:1693

# Rows for n = 3, 4, ... 20 and more than 20 (found at n = 40); columns: n var(location) / sigma², mean of
# the squared scale / sigma², and the degrees of freedom, as a share of n - 1, for which t covers 95 %.
# Found by simulating 200,000 to 400,000 normal samples of each n; checked with other seeds in the tests.
MEDIAN_TABLE = np.array(
    [
        [1.342, 0.763, 0.453],
        [1.192, 0.717, 0.578],
        [1.437, 0.907, 0.430],
        [1.298, 0.866, 0.495],
        [1.465, 0.948, 0.416],
        [1.344, 0.921, 0.462],
        [1.493, 0.965, 0.408],
        [1.383, 0.945, 0.450],
        [1.513, 0.975, 0.409],
        [1.407, 0.961, 0.436],
        [1.515, 0.979, 0.410],
        [1.429, 0.971, 0.427],
        [1.515, 0.986, 0.407],
        [1.440, 0.974, 0.426],
        [1.520, 0.986, 0.403],
        [1.455, 0.978, 0.418],
        [1.542, 0.987, 0.414],
        [1.477, 0.982, 0.425],
        [1.517, 0.991, 0.416],
    ]
)
HUBER_TABLE = np.array(
    [
        [0.999, 1.284, 1.005],
        [1.002, 1.284, 1.004],
        [1.007, 1.253, 0.935],
        [1.022, 1.186, 0.850],
        [1.018, 1.157, 0.822],
        [1.024, 1.131, 0.805],
        [1.024, 1.120, 0.804],
        [1.028, 1.107, 0.790],
        [1.028, 1.098, 0.781],
        [1.034, 1.089, 0.767],
        [1.028, 1.081, 0.774],
        [1.027, 1.078, 0.764],
        [1.030, 1.071, 0.780],
        [1.031, 1.065, 0.745],
        [1.032, 1.062, 0.763],
        [1.034, 1.059, 0.753],
        [1.032, 1.055, 0.777],
        [1.026, 1.052, 0.727],
        [1.031, 1.026, 0.720],
    ]
)


def median_and_madn(values: FloatArray, group: IntArray, n_groups: int) -> tuple[FloatArray, FloatArray]:
    """Median and median absolute deviation × 1.4826, shape (n_groups,); NaN for an empty group."""
    median = group_median(values, group, n_groups)
    spread = group_median(np.abs(values - median[group]), group, n_groups)
    return median, MADN_FACTOR * spread


def huber_proposal2(
    values: FloatArray, group: IntArray, n_groups: int, k: float = HUBER_K
) -> tuple[FloatArray, FloatArray]:
    """Location and scale of Huber's proposal 2, shape (n_groups,); NaN for an empty group.

    Values beyond k scales of the location are drawn in to that distance until mean and scale stand still
    (Huber 1964, Ann. Math. Stat. 35:73; "H15" of AMC 1989, Analyst 114:1693, with the exact consistency
    factor for k instead of its rounded 1.134). Starts from the median and the scaled median absolute
    deviation; where the latter is 0, from the standard deviation. A group of equal values has scale 0.
    """
    n = group_count(group, n_groups)
    freedom = np.maximum(n - 1, 1)
    consistency = _scale_consistency(k)
    location, scale = median_and_madn(values, group, n_groups)
    centre = group_mean(values, group, n_groups)
    deviation_sd = np.sqrt(group_sum((values - centre[group]) ** 2, group, n_groups) / freedom)
    scale = np.where(scale > 0, scale, deviation_sd)
    for _ in range(500):
        reach = k * scale
        drawn_in = np.clip(values, (location - reach)[group], (location + reach)[group])
        new_location = group_mean(drawn_in, group, n_groups)
        squares = group_sum((drawn_in - new_location[group]) ** 2, group, n_groups)
        new_scale = np.where(n > 0, np.sqrt(squares / freedom / consistency), np.nan)
        moved = np.fmax(np.abs(new_location - location), np.abs(new_scale - scale)) > 1e-11 * deviation_sd
        location, scale = new_location, new_scale
        if not moved.any():
            break
    return location, scale


def _scale_consistency(k: float) -> float:
    """Expected squared deviate drawn in to k, for a standard normal deviate."""
    from scipy.special import ndtr

    density = float(np.exp(-0.5 * k**2) / np.sqrt(2 * np.pi))
    inside = 2 * float(ndtr(k)) - 1
    return inside + k**2 * (1 - inside) - 2 * k * density


def median_means(
    values: FloatArray, group: IntArray, n_groups: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Median with its squared standard error and degrees of freedom.

    The scale is the median absolute deviation; its bias and its loss of degrees of freedom in small groups
    are corrected by constants found by simulation of normal data, so that median ± t sqrt(variance) covers
    95 % of them.
    """
    median, madn = median_and_madn(values, group, n_groups)
    return median, *_calibrated(madn**2, values, group, n_groups, MEDIAN_TABLE)


def huber_means(
    values: FloatArray, group: IntArray, n_groups: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Huber's proposal 2 (k = 1.5) with its squared standard error and degrees of freedom.

    The scale is the one of proposal 2, corrected in small groups as for the median.
    """
    location, scale = huber_proposal2(values, group, n_groups)
    return location, *_calibrated(scale**2, values, group, n_groups, HUBER_TABLE)


def _calibrated(
    scale_squared: FloatArray, values: FloatArray, group: IntArray, n_groups: int, table: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Variance, degrees of freedom and efficiency factor from a squared scale and the constants for n."""
    n = group_count(group, n_groups)
    efficiency, bias, freedom_share = table[np.clip(n, 3, len(table) + 2) - 3].T
    variance = divide(scale_squared * efficiency / bias, n)
    dof = np.maximum((n - 1) * freedom_share, 0.0)
    # Two values: both estimators are the mean.
    centre = group_mean(values, group, n_groups)
    pair_variance = group_sum((values - centre[group]) ** 2, group, n_groups) / 2.0
    pair = n == 2
    return (
        np.where(pair, pair_variance, variance),
        np.where(pair, 1.0, dof),
        np.where(n < 3, 1.0, efficiency),
    )
