"""Ratios of means of the same units: the units' own ratios, partial overlap, and independent means."""

import numpy as np
import pytest

from tieline.statistics.means import MeanEstimate, phase_means
from tieline.statistics.paired_ratios import common_correlation, paired_ratio


def estimate(values: np.ndarray) -> MeanEstimate:
    """The means of the rows of (groups, n)."""
    groups, n = values.shape
    code = np.repeat(np.arange(groups), n)
    return phase_means(values.ravel(), np.full(values.size, 1e-6), code, groups).estimate(np.arange(groups))


def drawn(correlation: float, groups: int = 3, n: int = 8):
    rng = np.random.default_rng(4)
    noise = rng.multivariate_normal(np.zeros(2), [[1, correlation], [correlation, 1]], (groups, n))
    return 10 + 0.2 * noise[..., 0], 5 + 0.1 * noise[..., 1]


@pytest.mark.parametrize("correlation", [-0.9, 0.0, 0.9])
def test_where_all_units_have_both_it_is_the_variance_of_their_ratios(correlation):
    first, second = drawn(correlation)
    code = np.repeat(np.arange(3), 8)
    r, n = common_correlation(first.ravel(), second.ravel(), code, 3)
    np.testing.assert_allclose(r, [np.corrcoef(a, b)[0, 1] for a, b in zip(first, second, strict=True)])
    found = paired_ratio(estimate(first), estimate(second), r, n)
    mean = first.mean(axis=1, keepdims=True) / second.mean(axis=1, keepdims=True)
    linear = first / first.mean(axis=1, keepdims=True) - second / second.mean(axis=1, keepdims=True)
    np.testing.assert_allclose(found.mean, mean[:, 0])
    np.testing.assert_allclose(found.variance, mean[:, 0] ** 2 * linear.var(axis=1, ddof=1) / 8, rtol=1e-6)
    np.testing.assert_allclose(found.dof, 7)
    np.testing.assert_allclose(
        found.counting_variance,
        mean[:, 0] ** 2 * 1e-12 / 8 * (1 / first.mean(axis=1) ** 2 + 1 / second.mean(axis=1) ** 2),
    )


def test_independent_means_add_up_and_have_more_degrees_of_freedom():
    first, second = (estimate(values) for values in drawn(0.0))
    found = paired_ratio(first, second, np.zeros(3), np.zeros(3, dtype=np.int64))
    relative = first.variance / first.mean**2 + second.variance / second.mean**2
    np.testing.assert_allclose(found.variance, found.mean**2 * relative)
    assert np.all(found.dof > 7)


def test_only_common_units_carry_the_correlation():
    first, second = (estimate(values) for values in drawn(0.9))
    all_, half = (
        paired_ratio(first, second, np.full(3, 0.9), np.full(3, n, dtype=np.int64)).variance for n in (8, 4)
    )
    none = paired_ratio(first, second, np.full(3, 0.9), np.zeros(3, dtype=np.int64)).variance
    np.testing.assert_allclose(half, (all_ + none) / 2)


def test_too_few_units_or_none_that_vary_have_no_correlation():
    r, n = common_correlation(np.array([1.0, 3.0, 3.0]), np.array([2.0, 1.0, 2.0]), np.array([0, 1, 1]), 3)
    assert r.tolist() == [0, 0, 0]
    assert n.tolist() == [1, 2, 0]
