"""Means with values below their limits: truth recovered, scaling, edges; ratios from limits."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, special, stats

from tieline.statistics.censored import _log_probability, censored_limits
from tieline.statistics.limits import (
    BELOW_BOTH,
    BELOW_DENOMINATOR,
    BELOW_NUMERATOR,
    PARTLY_BELOW,
    MeanLimits,
    limits_ratio,
    mean_limits,
)
from tieline.statistics.means import phase_means


def one_group(values, sigmas, limits, censored, **options):
    n = len(values)
    arrays = (np.broadcast_to(np.asarray(x, dtype=float), n) for x in (values, sigmas, limits))
    return censored_limits(
        *arrays, np.asarray(censored, dtype=bool), np.zeros(n, dtype=np.int64), 1, **options
    )


def limits_of(mean, low, high, n=5, n_censored=0):
    return MeanLimits(*(np.array([x]) for x in (mean, low, high, n, n_censored)))


def test_a_single_value_below_its_limit_solves_the_published_form():
    """The root of Phi((L - U)/sd) = 0.025 with blank sd L/3, variance growing by half to L, relative spread 0.3."""
    high = one_group([np.nan], np.nan, 1.0, [True]).high[0]

    def tail(level):
        return stats.norm.cdf((1 - level) / np.sqrt((1 + 0.5 * level) / 9 + 0.09 * level**2)) - 0.025

    assert high == pytest.approx(optimize.brentq(tail, 1, 10), rel=1e-9)


def test_more_values_below_the_limit_tighten_it():
    highs = [one_group([np.nan] * n, np.nan, 1.0, [True] * n).high[0] for n in range(1, 15)]
    assert (np.diff(highs) < 0).all()
    loose = one_group([np.nan] * 3, np.nan, [1.0, 1.0, 50.0], [True] * 3).high[0]
    two = one_group([np.nan] * 2, np.nan, 1.0, [True] * 2).high[0]
    assert loose == pytest.approx(two, rel=0.01)


def test_all_below_at_an_upper_limit_holds_in_repetition():
    """At a true level equal to the limit's upper end, all values fall below with the stated probability."""
    rng = np.random.default_rng(2)
    high = one_group([np.nan] * 4, np.nan, 1.0, [True] * 4).high[0]
    for spread in (0.0, 0.3):
        sd = np.sqrt((1 + 0.5 * high) / 9 + (spread * high) ** 2)
        all_below = ((high + sd * rng.standard_normal((40_000, 4))) < 1).all(axis=1).mean()
        assert all_below <= 0.025 + 4 * np.sqrt(0.025 / 40_000)


def test_partly_censored_limits_hold_in_repetition():
    rng = np.random.default_rng(4)
    replicates, n, truth = 1500, 6, 1.2
    values = truth + np.sqrt((1 + 0.5 * truth) / 9) * rng.standard_normal((replicates, n))
    below = values < 1
    sigma = np.sqrt((1 + 0.5 * np.maximum(values, 0)) / 9)
    group = np.repeat(np.arange(replicates), n)
    found = censored_limits(
        values.ravel(),
        np.where(below, np.nan, sigma).ravel(),
        np.ones(values.size),
        below.ravel(),
        group,
        replicates,
    )
    some = found.n_censored > 0
    covered = (found.low[some] <= truth) & (truth <= found.high[some])
    assert covered.mean() >= 0.93
    assert np.isnan(found.mean[~some]).all()
    assert np.mean(found.mean[some]) == pytest.approx(truth, rel=0.1)
    assert (found.low[some] <= found.mean[some]).all()
    assert (found.mean[some] <= found.high[some]).all()


@given(st.floats(1e-4, 1e4), st.lists(st.floats(1.0, 3.0), min_size=1, max_size=4), st.integers(1, 4))
@settings(max_examples=30)
def test_units_scale_the_limits(factor, measured, n_below):
    values = np.array([*measured, *[np.nan] * n_below])
    below = np.isnan(values)
    sigmas = np.where(below, np.nan, 0.4)
    here = one_group(values, sigmas, 1.0, below)
    there = one_group(values * factor, sigmas * factor, factor, below)
    np.testing.assert_allclose(
        [there.mean, there.low, there.high],
        [here.mean * factor, here.low * factor, here.high * factor],
        rtol=1e-6,
        atol=1e-9 * factor,
    )


def test_the_order_of_rows_does_not_matter():
    values = np.array([1.4, np.nan, 1.1, np.nan, np.nan, 2.0])
    limits = np.array([1.0, 1.2, 1.0, 0.8, 1.0, 1.0])
    below = np.isnan(values)
    group = np.array([0, 0, 1, 1, 2, 0])
    order = np.array([5, 3, 1, 4, 0, 2])
    sigmas = np.where(below, np.nan, 0.4)
    here = censored_limits(values, sigmas, limits, below, group, 3)
    there = censored_limits(values[order], sigmas[order], limits[order], below[order], group[order], 3)
    for name in ("mean", "low", "high"):
        np.testing.assert_allclose(getattr(there, name), getattr(here, name), rtol=1e-9)


def test_a_censored_value_needs_a_limit():
    with pytest.raises(ValueError, match="limit above zero"):
        one_group([np.nan, 1.0], np.nan, np.nan, [True, False])


def test_limits_of_a_mean_without_censored_values():
    values = np.array([9.0, 10.0, 11.0, 1.0])
    means = phase_means(values, np.full(4, 0.1), np.array([0, 0, 0, 1]), 2)
    limits = mean_limits(means.estimate(np.arange(2)))
    reach = stats.t.ppf(0.975, 2) / np.sqrt(3)
    np.testing.assert_allclose([limits.low[0], limits.high[0]], [10 - reach, 10 + reach], rtol=1e-9)
    assert np.isnan(limits.low[1])


def test_kinds_of_ratios_from_limits():
    sure, partly = limits_of(10.0, 9.0, 11.0), limits_of(1.0, 0.5, 1.6, n_censored=2)
    open_below, below = limits_of(1.0, 0.0, 1.6, n_censored=2), limits_of(0.0, 0.0, 1.3, n_censored=5)
    cases = [
        (partly, sure, "value", PARTLY_BELOW),
        (open_below, sure, "upper-limit", PARTLY_BELOW),
        (below, sure, "upper-limit", BELOW_NUMERATOR),
        (sure, below, "lower-limit", BELOW_DENOMINATOR),
        (sure, open_below, "lower-limit", PARTLY_BELOW),
        (below, below, "undetermined", BELOW_BOTH),
    ]
    for alpha, beta, kind, reason in cases:
        result = limits_ratio(alpha, beta)
        assert (result.kind[0], result.reason[0]) == (kind, reason)
    upper = limits_ratio(below, sure)
    assert upper.high[0] == pytest.approx(1.3 / np.sqrt(9.0 * (20.0 - 9.0)), rel=1e-12)
    lower = limits_ratio(sure, below)
    assert lower.low[0] == pytest.approx(1 / upper.high[0], rel=1e-12)
    assert limits_ratio(below, sure, u_relative=0.05).high[0] > upper.high[0]
    value = limits_ratio(partly, sure)
    wider = limits_ratio(partly, sure, u_relative=0.05)
    assert wider.low[0] < value.low[0] < value.value[0] < value.high[0] < wider.high[0]


@given(
    st.floats(0.1, 10),
    st.floats(0.01, 0.9),
    st.floats(1.1, 3),
    st.floats(0.1, 10),
    st.floats(0.01, 0.9),
    st.floats(1.1, 1.9),
)
def test_limits_agree_with_the_published_expression(a, a_low, a_high, b, b_low, b_high):
    """Donner & Zou 2012, Stat. Methods Med. Res. 21:347, as printed (from memory), with the subtraction."""
    l_a, u_a, l_b, u_b = a * a_low, a * a_high, b * b_low, b * b_high
    result = limits_ratio(limits_of(a, l_a, u_a), limits_of(b, l_b, u_b))
    low = a * b - np.sqrt((a * b) ** 2 - l_a * u_b * (2 * a - l_a) * (2 * b - u_b))
    high = a * b + np.sqrt((a * b) ** 2 - u_a * l_b * (2 * a - u_a) * (2 * b - l_b))
    assert result.low[0] == pytest.approx(low / (u_b * (2 * b - u_b)), rel=1e-5)
    assert result.high[0] == pytest.approx(high / (l_b * (2 * b - l_b)), rel=1e-5)


def test_log_probability_is_that_of_the_normal_distribution_down_to_the_far_tail():
    x = np.concatenate([np.linspace(-60.0, 10.0, 20_001), [-1e4, -20.0, np.nextafter(-20.0, -21.0), 40.0]])
    np.testing.assert_allclose(_log_probability(x), special.log_ndtr(x), rtol=1e-13, atol=1e-15)
