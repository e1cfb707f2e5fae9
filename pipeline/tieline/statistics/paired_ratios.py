"""Ratios of two means that rest on the same units, such as two quantities measured in the same places.

Public: `common_correlation`, `paired_ratio`.
"""

from __future__ import annotations

import numpy as np

from tieline.statistics.groups import FloatArray, IntArray, divide, group_count, group_mean, group_sum
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import ratio_dof


def common_correlation(
    first: FloatArray, second: FloatArray, group: IntArray, n_groups: int
) -> tuple[FloatArray, IntArray]:
    """Correlation of two quantities over the units that have both, and the number of these, (n_groups,) each.

    first, second, group: (units,). 0 for fewer than two units or where one of the quantities does not vary.
    """
    deviations = [values - group_mean(values, group, n_groups)[group] for values in (first, second)]
    squares = [group_sum(one**2, group, n_groups) for one in deviations]
    product = group_sum(deviations[0] * deviations[1], group, n_groups)
    return divide(product, np.sqrt(squares[0] * squares[1]), otherwise=0.0), group_count(group, n_groups)


def paired_ratio(
    first: MeanEstimate, second: MeanEstimate, correlation: FloatArray, n_common: IntArray
) -> MeanEstimate:
    """first / second of K pairs of means as an estimate of its own, to first order.

    With relative standard errors a and b the relative variance is a² + b² - 2 r a b n/sqrt(n_a n_b), r being the correlation
    over the n units common to both. Where all units have both and count alike this is exactly the variance of the units'
    own ratios to first order, s²/n on n - 1 degrees of freedom; the degrees of freedom are therefore the smaller ones of the
    two means, or, where fewer than two units are common, those of independent means (`ratio_dof`). The counting parts are
    independent. Good while `second` is far from zero, b below some 20 %.
    """
    value = divide(first.mean, second.mean)
    a, b = (divide(np.sqrt(one.variance), np.abs(one.mean)) for one in (first, second))
    overlap = divide(n_common.astype(np.float64), np.sqrt(first.n * second.n), otherwise=0.0)
    joint = np.sign(value) * correlation * np.minimum(overlap, 1.0) * a * b
    relative = np.maximum(a**2 + b**2 - 2.0 * joint, 0.0)
    counting = divide(first.counting_variance, first.mean**2) + divide(
        second.counting_variance, second.mean**2
    )
    zero = np.zeros_like(value)
    apart = ratio_dof(first, second, zero, zero)
    together = np.minimum(first.dof, second.dof)
    return MeanEstimate(
        value,
        value**2 * relative,
        value**2 * counting,
        np.where(n_common >= 2, together, apart),
        np.minimum(first.n, second.n),
    )
