"""Phase means: definitions at the edges, invariants, and estimators on samples of known truth."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.statistics.means import ESTIMATORS, paule_mandel, phase_means, pooled_sigmas

VALUES = st.floats(0.01, 1e4, allow_nan=False)
GROUPS = st.lists(
    st.lists(st.tuples(VALUES, st.floats(0.01, 100.0)), min_size=1, max_size=8), min_size=1, max_size=5
)


def flat(groups):
    values = np.array([value for group in groups for value, _ in group])
    sigmas = np.array([sigma for group in groups for _, sigma in group])
    return values, sigmas, np.repeat(np.arange(len(groups)), [len(group) for group in groups]), len(groups)


def one_group(values, sigmas, **options):
    values = np.asarray(values, dtype=float)
    sigmas = np.broadcast_to(np.asarray(sigmas, dtype=float), values.shape)
    return phase_means(values, sigmas, np.zeros(len(values), dtype=np.int64), 1, **options)


def scatter_statistic(values, sigmas, between):
    weight = 1 / (sigmas**2 + between)
    mean = np.sum(weight * values) / weight.sum()
    return np.sum(weight * (values - mean) ** 2)


def test_equal_sigmas_give_the_standard_error_of_the_mean():
    values = np.array([9.0, 10.5, 11.0, 12.5])
    means = one_group(values, 0.3)
    assert means.mean[0] == pytest.approx(values.mean(), rel=1e-14)
    assert means.variance[0] == pytest.approx(values.var(ddof=1) / 4, rel=1e-12)
    assert means.counting_variance[0] == pytest.approx(0.3**2 / 4, rel=1e-12)
    assert means.spread_sd[0] ** 2 == pytest.approx(values.var(ddof=1) - 0.09, rel=1e-10)
    assert means.mswd[0] == pytest.approx(values.var(ddof=1) / 0.09, rel=1e-12)
    assert (means.dof[0], means.n[0], means.n_values[0]) == (3, 4, 4)


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_edges_are_defined_without_a_warning(estimator):
    values = np.array([5.0, 7.0, 3.0, 4.0, 2.0, 2.0, 2.0, 1.0, 1.0, 1.0])
    sigmas = np.array([0.5, np.nan, 0.1, 0.1, 0.0, 0.0, 0.0, 0.2, 0.2, 0.2])
    group = np.array([0, 1, 2, 2, 3, 3, 3, 4, 4, 4])
    means = phase_means(values, sigmas, group, 6, estimator=estimator)
    np.testing.assert_array_equal(means.n, [1, 1, 2, 3, 3, 0])
    np.testing.assert_array_equal(means.dof[[0, 1, 2, 5]], [0, 0, 1, 0])
    np.testing.assert_allclose(means.mean, [5, 7, 3.5, 2, 1, np.nan])
    np.testing.assert_allclose(means.variance[[0, 1, 2, 3, 5]], [0.25, np.nan, 0.25, 0, np.nan])
    # Equal values: their scatter is unknown, not absent, and counting alone is known.
    assert means.variance[4] == means.counting_variance[4] > 0
    assert means.counting_variance[3] == 0
    assert np.isnan(means.counting_variance[1])
    np.testing.assert_array_equal(np.isnan(means.mswd), [True, True, False, True, False, True])


def test_unknown_sigmas_take_the_known_ones_of_the_group():
    values = np.array([1.0, 2.0, 4.0])
    part = one_group(values, [0.3, np.nan, 0.5])
    assert part.counting_variance[0] > 0
    none = one_group(values, np.nan)
    assert np.isnan(none.counting_variance[0])
    assert np.isnan(none.mswd[0])
    assert none.variance[0] == pytest.approx(values.var(ddof=1) / 3, rel=1e-12)


def test_wrong_arguments_are_named():
    with pytest.raises(ValueError, match="mode"):
        one_group([1.0, 2.0], 0.1, estimator="mode")
    with pytest.raises(ValueError, match="same length"):
        phase_means(np.ones(3), np.ones(2), np.zeros(3, dtype=np.int64), 1)


@given(GROUPS)
def test_the_spread_solves_its_equation(groups):
    values, sigmas, group, n_groups = flat(groups)
    between = paule_mandel(values, sigmas**2, group, n_groups)
    for code in range(n_groups):
        x, s = values[group == code], sigmas[group == code]
        if len(x) < 2 or between[code] == 0:
            assert len(x) < 2 or scatter_statistic(x, s, 1e-9 * s.min() ** 2) <= (len(x) - 1) * (1 + 1e-6)
        else:
            assert scatter_statistic(x, s, between[code]) == pytest.approx(len(x) - 1, rel=1e-6)


@given(GROUPS, st.floats(1e-6, 1e6), st.sampled_from(ESTIMATORS))
def test_a_change_of_unit_scales_everything(groups, factor, estimator):
    values, sigmas, group, n_groups = flat(groups)
    here = phase_means(values, sigmas, group, n_groups, estimator=estimator)
    there = phase_means(values * factor, sigmas * factor, group, n_groups, estimator=estimator)
    scale = np.abs(values).max() ** 2
    np.testing.assert_allclose(there.mean, here.mean * factor, rtol=1e-9)
    np.testing.assert_allclose(
        there.variance / factor**2, here.variance, rtol=1e-6, atol=1e-12 * scale, equal_nan=True
    )
    np.testing.assert_allclose(there.counting_variance, here.counting_variance * factor**2, rtol=1e-6)


@given(GROUPS, st.sampled_from(ESTIMATORS), st.randoms(use_true_random=False))
def test_the_order_of_rows_does_not_matter(groups, estimator, random):
    values, sigmas, group, n_groups = flat(groups)
    order = list(range(len(values)))
    random.shuffle(order)
    here = phase_means(values, sigmas, group, n_groups, estimator=estimator)
    there = phase_means(values[order], sigmas[order], group[order], n_groups, estimator=estimator)
    np.testing.assert_allclose(there.mean, here.mean, rtol=1e-9)
    np.testing.assert_allclose(
        there.variance, here.variance, rtol=1e-6, atol=1e-12 * np.abs(values).max() ** 2
    )


@given(
    st.lists(st.tuples(VALUES, st.floats(0.01, 100.0)), min_size=2, max_size=8), st.sampled_from(ESTIMATORS)
)
def test_groups_do_not_see_each_other(group, estimator):
    values, sigmas, _, _ = flat([group])
    alone = one_group(values, sigmas, estimator=estimator)
    other = np.arange(1.0, 6.0)
    both = phase_means(
        np.concatenate([other, values]),
        np.concatenate([0.1 * other, sigmas]),
        np.concatenate([np.zeros(5, dtype=np.int64), np.ones(len(values), dtype=np.int64)]),
        2,
        estimator=estimator,
    )
    np.testing.assert_allclose(both.mean[1], alone.mean[0], rtol=1e-12)
    np.testing.assert_allclose(both.variance[1], alone.variance[0], rtol=1e-9)


@given(st.lists(VALUES, min_size=2, max_size=8), st.floats(0.01, 10.0))
def test_a_spot_equal_to_the_mean_never_widens_the_counting_part(values, sigma):
    before = one_group(values, sigma)
    after = one_group([*values, before.mean[0]], sigma)
    assert after.mean[0] == pytest.approx(before.mean[0], rel=1e-9)
    assert after.counting_variance[0] < before.counting_variance[0]


def test_identical_input_gives_identical_bytes():
    rng = np.random.default_rng(3)
    values, sigmas, group = rng.normal(5, 1, 60), rng.uniform(0.1, 1, 60), np.repeat(np.arange(12), 5)
    first, second = (phase_means(values, sigmas, group, 12) for _ in range(2))
    for name in first.__dataclass_fields__:
        assert getattr(first, name).tobytes() == getattr(second, name).tobytes()


def test_one_precise_spot_does_not_rule_the_mean():
    means = one_group([10.0, 10.4, 9.7, 10.2, 9.9], [0.3, 0.3, 0.3, 0.3, 1e-4])
    assert means.counting_variance[0] > 0.3**2 / 25


def test_grains_count_as_the_independent_units():
    values = np.array([1.0, 1.1, 0.9, 2.0, 2.1, 3.0])
    grain = np.array([7, 7, 7, 2, 2, 9])
    means = one_group(values, 0.001, subgroup=grain)
    grain_means = np.array([1.0, 2.05, 3.0])
    assert (means.n[0], means.dof[0], means.n_values[0]) == (3, 2, 6)
    assert means.mean[0] == pytest.approx(grain_means.mean(), rel=0.01)
    assert means.variance[0] == pytest.approx(grain_means.var(ddof=1) / 3, rel=0.02)
    single = one_group(values[:3], 0.1, subgroup=grain[:3])
    assert (single.n[0], single.dof[0]) == (1, 0)
    assert single.variance[0] == pytest.approx(0.1**2 / 3)


def test_grain_codes_may_repeat_between_groups():
    values = np.array([1.0, 1.2, 3.0, 3.4])
    means = phase_means(values, np.full(4, 0.1), np.array([0, 0, 1, 1]), 2, subgroup=np.array([0, 1, 0, 1]))
    np.testing.assert_allclose(means.mean, [1.1, 3.2])
    np.testing.assert_array_equal(means.n, [2, 2])


def poisson_groups(counts, n, replicates, seed):
    counted = np.random.default_rng(seed).poisson(counts, replicates * n)
    sigma = np.sqrt(np.maximum(counted, 1)) / counts
    return counted / counts, sigma, np.repeat(np.arange(replicates), n)


def test_pooling_frees_the_mean_of_few_counts_from_bias():
    values, sigma, group = poisson_groups(10.0, 12, 4000, 11)
    pooled = pooled_sigmas(values, sigma, group, 4000)
    own_bias = phase_means(values, sigma, group, 4000).mean.mean() - 1
    bias = phase_means(values, pooled, group, 4000).mean.mean() - 1
    assert own_bias < -0.02
    assert abs(bias) < 0.005


def test_pooling_keeps_the_ratio_of_different_counting_times():
    """Poisson variances x/time, times 1 and 4: at the common mean the sigmas differ by the factor 2 exactly."""
    time = np.array([1.0, 4.0, 1.0, 4.0, 1.0, 4.0])
    values = np.array([8.0, 8.0, 10.0, 10.0, 12.0, 12.0])
    pooled = pooled_sigmas(values, np.sqrt(values / time), np.zeros(6, dtype=np.int64), 1)
    np.testing.assert_allclose(pooled[::2] / pooled[1::2], 2.0, rtol=1e-12)
    np.testing.assert_allclose(pooled**2, 10.0 / time, rtol=1e-12)


def test_pooling_leaves_falling_and_unknown_sigmas_alone():
    values = np.array([10.0, 10.2, 9.9, 10.1, 9.8])
    sigmas = np.array([np.nan, 0.1, 0.4, 0.1, 0.4])
    group = np.zeros(5, dtype=np.int64)
    np.testing.assert_allclose(pooled_sigmas(values, sigmas, group, 1), sigmas, rtol=1e-12)
    zeros = np.zeros(5)
    np.testing.assert_array_equal(pooled_sigmas(zeros, zeros, group, 1), zeros)


def test_pooled_sigma_is_the_fitted_line_at_the_mean():
    values = np.array([4.0, 9.0, 16.0, 7.0])
    sigmas = np.sqrt(0.5 + 0.2 * values)
    pooled = pooled_sigmas(values, sigmas, np.zeros(4, dtype=np.int64), 1)
    np.testing.assert_allclose(pooled**2, 0.5 + 0.2 * values.mean(), rtol=1e-12)
