"""Intervals by propagated scaled-t distributions against t itself and against plain Monte Carlo."""

import numpy as np
import pytest
from scipy import stats

from tieline.statistics.gum_s1 import ScaledT, ratio_draws_interval, share_above


def scaled(mean, standard_error, dof, calibration=0.0):
    return ScaledT(*(np.array([float(part)]) for part in (mean, standard_error, dof, calibration)))


@pytest.mark.parametrize("dof", [1, 2, 4, 9])
def test_an_exact_denominator_leaves_the_t_interval(dof):
    low, high = ratio_draws_interval(scaled(1e4, 0.1, dof), scaled(2, 0, 4), 0.95)
    reach = stats.t.ppf(0.975, dof) * 0.1
    np.testing.assert_allclose([low[0], high[0]], [(1e4 - reach) / 2, (1e4 + reach) / 2], atol=0.02 * reach)


@pytest.mark.parametrize(("dof_a", "dof_b", "relative_a", "relative_b", "calibration"), [
    (1, 1, 0.02, 0.02, 0.0), (1, 4, 0.1, 0.05, 0.03), (4, 1, 0.05, 0.1, 0.0), (3, 3, 0.1, 0.1, 0.05),
])  # fmt: skip
def test_agrees_with_plain_monte_carlo(dof_a, dof_b, relative_a, relative_b, calibration):
    rng = np.random.default_rng(17)
    a = (1 + relative_a * rng.standard_t(dof_a, 400_000)) * (1 + calibration * rng.standard_normal(400_000))
    b = (1 + relative_b * rng.standard_t(dof_b, 400_000)) * (1 + calibration * rng.standard_normal(400_000))
    ratios = (a / b)[(a > 0) & (b > 0)]
    alpha, beta = scaled(1, relative_a, dof_a, calibration), scaled(1, relative_b, dof_b, calibration)
    low, high = ratio_draws_interval(alpha, beta, 0.95)
    expected = np.quantile(ratios, [0.025, 0.975])
    np.testing.assert_allclose([low[0], high[0]], expected, atol=0.03 * np.ptp(expected))
    share = share_above(alpha, beta, np.array([0.9, 1.1]))[0]
    np.testing.assert_allclose(share, [(ratios > 0.9).mean(), (ratios > 1.1).mean()], atol=0.01)


def test_a_mean_far_below_zero_has_no_interval():
    low, high = ratio_draws_interval(scaled(-10, 0.01, 5), scaled(1, 0.1, 5), 0.95)
    assert np.isnan(low[0])
    assert np.isnan(high[0])
