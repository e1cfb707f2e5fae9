"""The bound: exact cases, and coverage when every spot holds the same contaminant."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binomtest, norm

from tieline.statistics.overlap_bound import overlap_bound


def test_without_error_the_bound_is_the_smallest_coefficient():
    apparent = np.array([0.004, 0.3, 2.0])
    bound = overlap_bound(apparent, np.zeros(3))
    assert bound.fraction == pytest.approx(0.004)
    np.testing.assert_allclose(bound.lowest, [0.0, (0.3 - 0.004) / 0.996, 2.0])
    np.testing.assert_allclose(bound.highest, [0.004, 0.3, (2.0 - 0.004) / 0.996])
    np.testing.assert_array_equal(bound.only_upper_limit, [True, False, False])


def test_bonferroni_over_the_measured_elements_only():
    apparent, error = np.array([0.01, np.nan, 0.5]), np.array([0.002, np.nan, 0.01])
    bound = overlap_bound(apparent, error)
    assert bound.fraction == pytest.approx(0.01 + norm.ppf(1 - 0.05 / 2) * 0.002)
    assert np.isnan(bound.lowest[1])
    assert not bound.only_upper_limit[1]
    assert np.isnan(overlap_bound(np.full(2, np.nan), np.full(2, np.nan)).fraction)


def test_negative_coefficients_cannot_make_the_bound_negative():
    bound = overlap_bound(np.array([-0.01, 0.2]), np.array([0.001, 0.01]))
    assert bound.fraction == 0
    assert bound.lowest[0] == 0


def test_a_bound_of_one_leaves_nothing_below():
    bound = overlap_bound(np.array([1.5, 3.0]), np.array([0.1, 0.1]))
    assert bound.fraction == 1
    np.testing.assert_array_equal(bound.lowest, 0)
    np.testing.assert_array_equal(bound.highest, np.inf)


@given(st.floats(0, 0.5), st.lists(st.floats(0, 20), min_size=1, max_size=8))
def test_exact_mixtures_always_lie_inside(fraction, coefficients):
    truth = np.array(coefficients)
    bound = overlap_bound((1 - fraction) * truth + fraction, np.full(truth.shape, 1e-9))
    assert bound.fraction >= fraction - 1e-12
    assert np.all(bound.lowest <= truth + 1e-6)
    assert np.all(bound.highest >= truth - 1e-6 * (1 + truth))


@pytest.mark.parametrize("spots", [3, 8])
def test_covers_when_all_spots_hold_the_same_fraction(spots):
    """Twelve of fifteen elements sit at the fraction, the worst case; few spots need Student's t."""
    rng = np.random.default_rng([2, spots])
    truth = np.concatenate([np.full(12, 1e-4), [0.05, 0.5, 3.0]])
    fraction = 0.002
    true_apparent = (1 - fraction) * truth + fraction
    x = true_apparent * (1 + 0.2 * rng.standard_normal((3000, spots, len(truth))))
    error = x.std(axis=1, ddof=1) / np.sqrt(spots)
    bound = overlap_bound(x.mean(axis=1), error, np.full(error.shape, spots - 1.0))
    covered = int(np.sum(bound.fraction >= fraction))
    assert binomtest(covered, 3000, 0.95, alternative="less").pvalue > 1e-3
    normal = overlap_bound(x.mean(axis=1), error)
    assert np.sum(normal.fraction >= fraction) < covered
    inside = (bound.lowest <= truth) & (truth <= bound.highest)
    assert inside.mean() > 0.95
