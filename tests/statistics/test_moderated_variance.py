"""Moderated variances: nearer the truth than raw ones, harmless where nothing is to be gained."""

import numpy as np
import pytest
from scipy.special import polygamma

from tieline.statistics.moderated_variance import _inverse_trigamma, moderated_variance


@pytest.mark.parametrize("spread", [0.0, 0.5, 1.5])
def test_closer_to_the_truth_than_raw_variances(spread):
    rng = np.random.default_rng(2)
    raw_miss, moderated_miss = [], []
    for _ in range(200):
        truth = np.exp(spread * rng.standard_normal(12))
        raw = truth * rng.chisquare(4, 12) / 4
        raw_miss.append(np.mean(np.log(raw / truth) ** 2))
        moderated_miss.append(np.mean(np.log(moderated_variance(raw, np.full(12, 4.0)) / truth) ** 2))
    assert np.mean(moderated_miss) < 0.95 * np.mean(raw_miss)


def test_equal_truth_gives_one_common_variance():
    raw = np.random.default_rng(0).chisquare(4, 12) / 4
    moderated = moderated_variance(raw, np.full(12, 4.0))
    assert np.ptp(moderated) < 0.5 * np.ptp(raw)
    assert moderated.mean() == pytest.approx(1.0, abs=0.5)


def test_order_is_kept_and_the_scale_does_not_matter():
    rng = np.random.default_rng(1)
    raw = np.exp(2 * rng.standard_normal(10)) * rng.chisquare(3, 10) / 3
    moderated = moderated_variance(raw, np.full(10, 3.0))
    assert np.all(np.diff(moderated[np.argsort(raw)]) >= 0)
    np.testing.assert_allclose(moderated_variance(100 * raw, np.full(10, 3.0)), 100 * moderated)


def test_known_variances_and_few_estimates_stay():
    raw = np.array([1.0, 2.0, 3.0])
    np.testing.assert_array_equal(moderated_variance(raw, np.full(3, np.inf)), raw)
    np.testing.assert_array_equal(moderated_variance(raw[:2], np.full(2, 3.0)), raw[:2])
    mixed = moderated_variance(np.array([1.0, 2.0, 3.0, 100.0]), np.array([3.0, 3.0, 3.0, np.inf]))
    assert mixed[3] == 100.0


@pytest.mark.parametrize("x", [0.05, 0.7, 3.0, 400.0])
def test_inverse_trigamma(x):
    assert _inverse_trigamma(float(polygamma(1, x))) == pytest.approx(x, rel=1e-8)
