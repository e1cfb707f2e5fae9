"""Published values for intervals of ratios and of censored means."""

import numpy as np
import pytest
from GTC import ureal
from scipy import optimize, special, stats

from tieline.statistics.censored import censored_limits
from tieline.statistics.gum_s1 import ScaledT, ratio_draws_interval
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import fieller_set, ratio_dof


@pytest.mark.parametrize(
    ("confidence", "low", "high"), [(0.90, 1.54, 2.64), (0.95, 1.46, 2.83), (0.99, 1.27, 3.36)]
)
def test_fieller_example(confidence, low, high):
    """Means 14 and 7, sd 3 and 2, n = 6 each, pooled 10 degrees of freedom: published calculator output."""
    a, b, variance_a, variance_b = (np.array([x]) for x in (14.0, 7.0, 9 / 6, 4 / 6))
    quantile = np.array([special.stdtrit(10, 0.5 + confidence / 2)])
    found = fieller_set(a, b, variance_a, variance_b, quantile)
    assert found.low[0] == pytest.approx(low, abs=0.006)
    assert found.high[0] == pytest.approx(high, abs=0.006)
    if confidence == 0.95:
        assert quantile[0] ** 2 * variance_b[0] / b[0] ** 2 == pytest.approx(0.0675, abs=5e-5)


def test_fieller_refuses_a_denominator_at_zero():
    """g = t² Vb / b² >= 1: no bounded set (Fieller 1954)."""
    a, b, variance = np.array([14.0]), np.array([1.0]), np.array([1.0])
    found = fieller_set(a, b, variance, variance, np.array([2.228]))
    assert found.high[0] == np.inf


@pytest.mark.parametrize(("relative_a", "relative_b"), [(0.0025, 0.0057), (0.02, 0.02), (0.3, 0.01)])
def test_degrees_of_freedom_against_another_library(relative_a, relative_b):
    """JCGM 100:2008 G.4 (Welch-Satterthwaite) as GTC computes it; the program's exponent is 2 for equal dof."""
    ratio = ureal(4.0, 4.0 * relative_a, 5) / ureal(2.0, 2.0 * relative_b, 5)
    alpha, beta = (
        MeanEstimate(*(np.array([x]) for x in (mean, (mean * relative) ** 2, 0.0, 5.0)), np.array([6]))
        for mean, relative in ((4.0, relative_a), (2.0, relative_b))
    )
    assert ratio_dof(alpha, beta, np.zeros(1), np.zeros(1))[0] == pytest.approx(ratio.df, rel=1e-9)


@pytest.mark.parametrize("n", [4, 6, 10])
def test_scaled_t_of_repeated_indications(n):
    """JCGM 101:2008, 6.4.9: mean + s/sqrt(n) t with n - 1 degrees of freedom, here from raw indications."""
    values = np.random.default_rng(n).normal(100, 1, n)
    standard_error = values.std(ddof=1) / np.sqrt(n)
    alpha = ScaledT(np.array([values.mean()]), np.array([standard_error]), np.array([n - 1.0]), np.zeros(1))
    exact = ScaledT(np.ones(1), np.zeros(1), np.array([1.0]), np.zeros(1))
    low, high = ratio_draws_interval(alpha, exact, 0.95)
    expected = stats.t.interval(0.95, n - 1, values.mean(), standard_error)
    np.testing.assert_allclose([low[0], high[0]], expected, atol=0.02 * standard_error)


# Dissolved arsenic in ground water of Oahu, µg/L (Helsel 2005, Nondetects and Data Analysis, ch. 6): 13 of
# 24 censored.
OAHU_VALUES = np.array([3.2, 2.8, 1.7, 1.5, 0.9, 0.7, 0.7, 0.6, 0.5, 0.5, 0.5])
OAHU_LIMITS = np.array([2.0] * 8 + [1.0] * 4 + [0.9])


def test_censored_maximum_likelihood_of_oahu_arsenic():
    """Logarithms, shifted so that the lognormal fit is a normal one with a mean above zero.

    Lognormal maximum likelihood: mean -0.252829, sd 0.626948 of the logarithms (scipy.stats.CensoredData
    and R's survreg). With counting sigmas next to nothing, the relative spread is all the scatter there is.
    """
    shift = 2.0
    values = np.concatenate([np.log(OAHU_VALUES) + shift, np.full(13, np.nan)])
    limits = np.concatenate([np.full(11, np.nan), np.log(OAHU_LIMITS) + shift])
    below = np.isnan(values)
    found = censored_limits(values, np.full(24, 1e-3), limits, below, np.zeros(24, dtype=np.int64), 1)
    data = stats.CensoredData(uncensored=values[~below], left=limits[below])
    location, scale = stats.norm.fit(data)
    assert (location - shift, scale) == pytest.approx((-0.252829, 0.626948), abs=2e-4)
    assert found.mean[0] == pytest.approx(location, abs=0.03)
    low, high = profile_limits(data, location, scale)
    np.testing.assert_allclose([found.low[0], found.high[0]], [low, high], atol=0.06)


def profile_limits(data, location, scale):
    """Limits of a normal mean by profile likelihood, cut at n ln(1 + t²/(n-1)), with scipy's own likelihood."""

    def log_likelihood(mu, sd):
        terms = stats.norm.logpdf(data._uncensored, mu, sd).sum()
        return terms + stats.norm.logcdf(data._left, mu, sd).sum()

    def profile(mu):
        best = optimize.minimize_scalar(
            lambda log_sd: -log_likelihood(mu, np.exp(log_sd)), bounds=(-3, 2), method="bounded"
        )
        return -best.fun

    n = len(data)
    cut = log_likelihood(location, scale) - 0.5 * n * np.log1p(stats.t.ppf(0.975, n - 1) ** 2 / (n - 1))
    return [
        optimize.brentq(lambda mu: profile(mu) - cut, *bracket)
        for bracket in ((location - 2, location), (location, location + 2))
    ]


def test_without_censoring_the_cut_is_the_t_interval():
    """n ln(1 + t²/(n-1)) turns the profile likelihood of a normal mean with unknown sd into Student's interval."""
    values = np.array([9.1, 10.3, 9.8, 10.9, 10.2, 9.5])
    low, high = profile_limits(stats.CensoredData(uncensored=values), values.mean(), values.std())
    expected = stats.t.interval(0.95, 5, values.mean(), values.std(ddof=1) / np.sqrt(6))
    np.testing.assert_allclose([low, high], expected, atol=1e-4)
