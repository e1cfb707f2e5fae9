"""The screening study in small: its goals, with binomial tolerance, on seeds of its own."""

import numpy as np
import pytest
from scipy.stats import binomtest

from benchmarks.screening import _bound, partition_coefficients, score
from simulate_spots import oracle_sd_fraction, phase, simulate
from tieline.statistics.overlap import ORACLE_FACTOR

HOSTS = ("olivine", "clinopyroxene", "plagioclase")


def at_least(successes, goal):
    """True unless the share of successes is below the goal beyond chance (one in 1,000)."""
    return binomtest(int(np.sum(successes)), successes.size, goal, alternative="less").pvalue > 1e-3


def at_most(events, goal):
    return binomtest(int(np.sum(events)), events.size, goal, alternative="greater").pvalue > 1e-3


@pytest.mark.parametrize("host", HOSTS)
@pytest.mark.parametrize("technique", ["probe", "laser"])
@pytest.mark.parametrize(("spots", "times_oracle"), [(4, 1.4), (8, 1.3)])
def test_detectable_fraction(host, technique, spots, times_oracle):
    rng = np.random.default_rng([101, spots])
    fraction = np.zeros((150, spots))
    fraction[:, 0] = times_oracle * ORACLE_FACTOR * oracle_sd_fraction(phase(host, technique))
    assert at_least(score(simulate(rng, fraction, host=host, technique=technique)).overlapped[:, 0], 0.95)


@pytest.mark.parametrize("host", HOSTS)
@pytest.mark.parametrize(
    ("spots", "spread", "zoned", "goal"), [(4, 0.15, 0, 0.008), (8, 0.15, 0, 0.004), (8, 0.05, 0.5, 0.01)]
)
def test_false_alarms(host, spots, spread, zoned, goal):
    rng = np.random.default_rng([102, spots, int(100 * zoned)])
    growth = zoned * (np.arange(spots) / (spots - 1) - 0.5)[None, :]
    made = simulate(rng, np.zeros((200, spots)), host=host, technique="laser", spread=spread, growth=growth)
    assert at_most(score(made).overlapped, goal)


@pytest.mark.parametrize("host", HOSTS)
@pytest.mark.parametrize("contaminated", [0, 8])
def test_lowest_coefficients_after_rejection(host, contaminated):
    rng = np.random.default_rng([103, contaminated])
    of = phase(host, "laser")
    unit = ORACLE_FACTOR * oracle_sd_fraction(of, 0.05)
    fraction = np.zeros((150, 10))
    fraction[:, :contaminated] = unit * (0.1 / unit) ** rng.uniform(0, 1, (150, contaminated))
    spots = simulate(rng, fraction, host=host, technique="laser", spread=0.05)
    scores = score(spots)
    value, low, high = partition_coefficients(spots, ~(scores.overlapped | scores.foreign))
    lowest = np.argsort(of.coefficients)[:3]
    truth, known = of.coefficients[lowest], np.isfinite(low[:, lowest])
    covered = (low[:, lowest] <= truth) & (truth <= high[:, lowest])
    assert at_least(covered[known], 0.93)
    ratio = value[:, lowest] / truth
    error = np.nanstd(ratio, axis=0) / np.sqrt(150)
    assert np.all(np.abs(np.nanmean(ratio, axis=0) - 1) < 0.05 + 3 * error)


@pytest.mark.parametrize("host", HOSTS)
def test_bound_when_all_spots_are_contaminated_alike(host):
    spots = simulate(
        np.random.default_rng(104), np.full((200, 8), 0.002), host=host, technique="laser", spread=0.05
    )
    assert at_least(_bound(spots).fraction >= 0.002, 0.99)
