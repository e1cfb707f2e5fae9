"""Weighted means of estimates: against simulation, with correlated values and uncertain weights."""

import numpy as np
import pytest

from tieline.statistics.weighted_means import weighted_means

WEIGHTS = np.array([0.3, 0.1])
WEIGHTS_COVARIANCE = np.array([[4e-4, -1e-4], [-1e-4, 2e-4]])
VALUES = np.array([0.02, 0.5])
SD = np.array([0.002, 0.02])


@pytest.mark.parametrize("r", [-0.4, 0.0, 0.8])
def test_against_simulation(r):
    rng = np.random.default_rng(6)
    correlation = np.array([[1, r], [r, 1]])
    n = 20_000
    w = rng.multivariate_normal(WEIGHTS, WEIGHTS_COVARIANCE, n)
    v = rng.multivariate_normal(VALUES, np.outer(SD, SD) * correlation, n)
    drawn = np.sum(w * v, axis=1) / w.sum(axis=1)
    one = weighted_means(
        WEIGHTS, WEIGHTS_COVARIANCE, VALUES[None], SD[None], VALUES[None] - 1.96 * SD, VALUES[None] + 1.96 * SD,
        correlation[None], 1.96,
    )  # fmt: skip
    assert one.value[0] == pytest.approx((0.3 * 0.02 + 0.1 * 0.5) / 0.4)
    assert one.sd[0] == pytest.approx(drawn.std(), rel=0.03)
    assert (one.low[0], one.high[0]) == pytest.approx(
        (one.value[0] - 1.96 * one.sd[0], one.value[0] + 1.96 * one.sd[0])
    )


def test_a_lopsided_interval_stays_lopsided():
    one = weighted_means(
        np.array([1.0, 0.0]), np.zeros((2, 2)), np.array([[1.0, 9.0]]), np.array([[0.1, 1.0]]),
        np.array([[0.7, 0.0]]), np.array([[3.0, 99.0]]), np.eye(2)[None], 1.96,
    )  # fmt: skip
    assert (one.value[0], one.low[0], one.high[0]) == pytest.approx((1.0, 0.7, 3.0))


def test_few_values_cover():
    """Each estimate with Student's interval of three degrees of freedom, one error common to both."""
    rng = np.random.default_rng(2)
    n, t = 4000, 3.1824463
    truth = np.array([1.0, 2.0])
    own = rng.standard_normal((n, 2)) * 0.1
    values = truth + own
    sd = 0.1 * np.sqrt(rng.chisquare(3, (n, 2)) / 3)
    correlation = np.broadcast_to(np.eye(2), (n, 2, 2))
    one = weighted_means(
        np.array([0.5, 0.25]),
        np.zeros((2, 2)),
        values,
        sd,
        values - t * sd,
        values + t * sd,
        correlation,
        1.96,
    )
    true = (0.5 * 1.0 + 0.25 * 2.0) / 0.75
    assert np.mean((one.low <= true) & (true <= one.high)) == pytest.approx(0.96, abs=0.02)


@pytest.mark.parametrize("weights", [[0.0, 0.0], [-0.1, 0.5]])
def test_weights_that_make_no_mean_are_refused(weights):
    two = np.ones((1, 2))
    with pytest.raises(ValueError, match="weights"):
        weighted_means(np.array(weights), np.zeros((2, 2)), two, two, two, two, np.eye(2)[None], 1.96)
