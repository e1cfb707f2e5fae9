"""Properties of the outlier tests: many groups at once, missing values, degenerate groups, joint test."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import betabinom, binomtest

from tieline.statistics.outliers import (
    _beta_binomial_tail,
    generalized_esd,
    grubbs,
    grubbs_critical,
    holm,
    joint_outliers,
    modified_z,
)


@given(st.integers(3, 12), st.integers(0, 2**31), st.floats(0.01, 1e6), st.floats(-1e3, 1e3))
@settings(max_examples=40, deadline=None)
def test_shift_scale_and_order_change_nothing(n, seed, scale, shift):
    rng = np.random.default_rng(seed)
    values = rng.standard_normal(n)
    order = rng.permutation(n)
    other = scale * (values + shift)[order]
    assert grubbs(other).p_value == pytest.approx(grubbs(values).p_value, rel=1e-5, abs=1e-9)
    assert order[grubbs(other).place] == grubbs(values).place
    np.testing.assert_allclose(modified_z(other), modified_z(values)[order], rtol=1e-5, atol=1e-6)
    np.testing.assert_array_equal(generalized_esd(other, 2).number, generalized_esd(values, 2).number)


def test_a_batch_gives_what_each_group_gives_and_missing_values_do_not_count():
    rng = np.random.default_rng(1)
    values = rng.standard_normal((30, 12))
    values[rng.uniform(size=values.shape) < 0.3] = np.nan
    batch, esd, score = grubbs(values), generalized_esd(values, 3), modified_z(values)
    for i, row in enumerate(values):
        present = row[np.isfinite(row)]
        alone = grubbs(present)
        assert batch.p_value[i] == pytest.approx(alone.p_value)
        assert row[batch.place[i]] == present[alone.place]
        assert esd.number[i] == generalized_esd(present, 3).number
        np.testing.assert_allclose(score[i][np.isfinite(row)], modified_z(present))
        assert np.all(np.isnan(score[i][np.isnan(row)]))


def test_too_few_and_equal_values_have_no_outlier():
    few = grubbs(np.array([[1.0, 2.0, np.nan], [np.nan, np.nan, np.nan]]))
    assert np.all(np.isnan(few.statistic))
    assert np.all(few.place == -1)
    equal = grubbs(np.full((1, 6), 0.1))
    assert equal.statistic == 0
    assert equal.p_value == 1
    assert generalized_esd(np.full((1, 6), 0.1), 3).number == 0
    assert np.all(modified_z(np.full(6, 0.1)) == 0)
    assert np.isnan(grubbs_critical(2))


def test_one_sided_grubbs_looks_upward_only():
    low = np.array([-9.0, 0.1, 0.2, 0.3, 0.4, 0.5])
    assert grubbs(low).place == 0
    assert grubbs(low, two_sided=False).place == 5
    assert grubbs(low, two_sided=False).p_value > 0.5


def test_modified_z_with_more_than_half_equal_uses_the_mean_deviation():
    values = np.array([5.0, 5.0, 5.0, 5.0, 9.0])
    expected = 4.0 / (1.253314 * 4.0 / 5)
    np.testing.assert_allclose(modified_z(values), [0, 0, 0, 0, expected])


def test_grubbs_rejects_at_its_nominal_rate():
    p_value = grubbs(np.random.default_rng(7).standard_normal((20_000, 8))).p_value
    assert binomtest(int(np.sum(p_value < 0.05)), 20_000, 0.05).pvalue > 1e-4


def test_holm_is_monotone_keeps_missing_and_never_lowers_a_p_value():
    p_values = np.array([[0.01, 0.04, 0.03, np.nan, 0.005]])
    np.testing.assert_allclose(holm(p_values), [[0.03, 0.06, 0.06, np.nan, 0.02]])
    many = np.random.default_rng(3).uniform(size=(50, 9))
    assert np.all(holm(many) >= many)


def test_beta_binomial_tail_against_scipy():
    trials, mean, rho = np.array([30, 12]), np.array([0.01, 0.00625]), np.array([0.04, 0.11])
    tail = _beta_binomial_tail(trials, mean, rho, 30)
    for i in range(2):
        a, b = mean[i] * (1 - rho[i]) / rho[i], (1 - mean[i]) * (1 - rho[i]) / rho[i]
        expected = betabinom.sf(np.arange(32) - 1, trials[i], a, b)
        np.testing.assert_allclose(tail[i], expected, rtol=1e-8, atol=1e-12)


@pytest.mark.parametrize(("correlation", "spots"), [(0.0, 5), (0.5, 5), (0.5, 8)])
def test_joint_test_marks_few_clean_groups(correlation, spots):
    rng = np.random.default_rng([17, int(10 * correlation), spots])
    common = rng.standard_normal((1000, spots, 1))
    values = np.sqrt(correlation) * common + np.sqrt(1 - correlation) * rng.standard_normal((1000, spots, 30))
    marked = int(np.sum(joint_outliers(values).outlier.any(axis=1)))
    assert binomtest(marked, 1000, 0.02, alternative="greater").pvalue > 1e-3


def test_joint_test_needs_six_of_thirty_and_finds_an_inclusion():
    values = np.random.default_rng(23).standard_normal((500, 8, 30))
    values[:, 3, :8] += 8
    result = joint_outliers(values)
    assert np.median(result.needed) == 6
    assert result.outlier[:, 3].mean() >= 0.98
    assert np.delete(result.outlier, 3, axis=1).mean() < 0.005


def test_joint_test_ignores_missing_spots_and_tells_when_it_cannot_test():
    values = np.random.default_rng(2).standard_normal((2, 6, 10))
    values[0, 4:] = np.nan
    values[1, 3:] = np.nan
    result = joint_outliers(values)
    assert np.all(np.isfinite(result.p_value[0, :4]))
    assert np.all(np.isnan(result.p_value[0, 4:]))
    assert np.all(np.isnan(result.p_value[1]))
    assert not result.outlier[1].any()
