"""Median and Huber means: edges, and standard errors that hold on normal samples."""

import numpy as np
import pytest
from scipy import stats

from tieline.statistics.means import phase_means
from tieline.statistics.robust import huber_proposal2, median_and_madn


@pytest.mark.parametrize("estimator", ["median", "huber"])
@pytest.mark.parametrize("n", [3, 4, 6, 9, 25])
def test_limits_cover_normal_samples(estimator, n):
    replicates = 8000
    values = np.random.default_rng(100 + n).standard_normal(replicates * n)
    means = phase_means(
        values,
        np.full(values.size, np.nan),
        np.repeat(np.arange(replicates), n),
        replicates,
        estimator=estimator,
    )
    covered = np.abs(means.mean) <= stats.t.ppf(0.975, means.dof) * np.sqrt(means.variance)
    assert covered.mean() == pytest.approx(0.95, abs=4 * np.sqrt(0.95 * 0.05 / replicates))
    assert means.variance.mean() == pytest.approx(np.var(means.mean), rel=0.1)


def test_a_stray_value_moves_neither_much():
    clean, stray = np.array([9.8, 10.0, 10.1, 10.2, 9.9]), np.array([9.8, 10.0, 10.1, 10.2, 99.0])
    group = np.zeros(5, dtype=np.int64)
    for estimator in ("median", "huber"):
        before = phase_means(clean, np.full(5, np.nan), group, 1, estimator=estimator)
        after = phase_means(stray, np.full(5, np.nan), group, 1, estimator=estimator)
        assert after.mean[0] == pytest.approx(before.mean[0], abs=0.25)


def test_equal_values_and_a_zero_median_deviation_are_defined():
    values = np.array([5.0, 5.0, 5.0, 5.0, 5.0, 5.0, 9.0])
    group = np.array([0, 0, 0, 1, 1, 1, 1])
    location, scale = huber_proposal2(values, group, 3)
    assert location[0] == 5
    assert scale[0] == 0
    assert 5 <= location[1] <= 6
    assert np.isnan(location[2])
    median, madn = median_and_madn(values, group, 3)
    np.testing.assert_array_equal(median[:2], [5, 5])
    np.testing.assert_array_equal(madn[:2], [0, 0])
