"""Zoning scores against an independent regression; overlap is not zoning; grains; power."""

import numpy as np
import pytest
from scipy.stats import binomtest
from scipy.stats import t as student

from simulate_spots import growth_factor, phase, simulate
from tieline.statistics.overlap import overlap_scores
from tieline.statistics.zoning import _regress, zoning_scores

POSITION = np.tile(np.arange(4) / 3, 3)
GRAIN = np.repeat(np.arange(3), 4)


def zoning_of(spots, distance, grain):
    scores = overlap_scores(
        spots.values, spots.sigmas, spots.glass_mean, spots.glass_variance, spots.phase.is_trace
    )
    shape = spots.values.shape[:2]
    return zoning_scores(
        spots.values,
        scores.level,
        spots.glass_mean,
        scores.spot_variance,
        spots.phase.is_trace,
        np.broadcast_to(distance, shape),
        np.broadcast_to(grain, shape),
        ~scores.foreign,
    )


def test_regression_agrees_with_least_squares_on_written_out_dummies():
    rng = np.random.default_rng(3)
    score, distance = rng.standard_normal((5, 14)), rng.uniform(0, 100, (5, 14))
    grain = rng.integers(0, 3, (5, 14)) * 1000
    takes_part = rng.uniform(size=(5, 14)) > 0.15
    result = _regress(score, distance, grain, takes_part, 0.01)
    for g in range(5):
        here = takes_part[g]
        names = np.unique(grain[g, here])
        y = score[g, here]
        design = np.column_stack([distance[g, here], *(grain[g, here] == name for name in names)]).astype(
            float
        )
        slope = np.linalg.lstsq(design, y, rcond=None)[0]
        degrees = len(y) - design.shape[1]
        variance = np.sum((y - design @ slope) ** 2) / degrees
        error = np.sqrt(variance * np.linalg.inv(design.T @ design)[0, 0])
        span = np.ptp(distance[g, here])
        assert result.change[g] == pytest.approx(slope[0] * span)
        assert result.change_error[g] == pytest.approx(error * span)
        assert result.p_value[g] == pytest.approx(2 * student.sf(abs(slope[0]) / error, degrees))
        assert result.degrees_of_freedom[g] == degrees
        assert result.grains[g] == len(names)


def test_the_zoning_put_in_comes_out():
    rng = np.random.default_rng(12)
    growth = np.broadcast_to(0.3 * POSITION, (200, 12))
    for host in ("clinopyroxene", "plagioclase"):
        spots = simulate(rng, np.zeros((200, 12)), host=host, technique="laser", spread=0.03, growth=growth)
        result = zoning_of(spots, POSITION, GRAIN)
        # The score is relative to the mean composition, at half of the zoning.
        assert result.change.mean() == pytest.approx(0.3 / 1.15, rel=0.1)
        assert result.zoned.mean() > 0.98


def test_a_contaminated_rim_is_not_zoning_and_clean_groups_are_not_zoned():
    rng = np.random.default_rng(13)
    fraction = np.where(POSITION < 0.2, 10 ** rng.uniform(-4, -2, (300, 12)), 0.0)
    for f in (fraction, np.zeros_like(fraction)):
        zoned = zoning_of(simulate(rng, f, technique="laser", spread=0.05), POSITION, GRAIN).zoned
        assert binomtest(int(zoned.sum()), 300, 0.02, alternative="greater").pvalue > 1e-3


def test_grains_that_differ_as_a_whole_are_not_zoning():
    rng = np.random.default_rng(14)
    growth = 0.2 * rng.standard_normal((300, 3))[:, GRAIN]
    spots = simulate(rng, np.zeros((300, 12)), technique="laser", spread=0.03, growth=growth)
    distance = 0.3 * POSITION + GRAIN
    with_grains = zoning_of(spots, distance, GRAIN)
    assert binomtest(int(with_grains.zoned.sum()), 300, 0.02, alternative="greater").pvalue > 1e-3
    assert with_grains.within_share.max() < 0.1
    assert zoning_of(spots, distance, np.full(12, -1)).zoned.mean() > 0.2  # what it is without them


def test_rim_and_core_labels_work_as_distances():
    rng = np.random.default_rng(15)
    label = np.tile([0.0, 1.0], 6)
    growth = np.broadcast_to(0.5 * label, (100, 12))
    spots = simulate(rng, np.zeros((100, 12)), technique="laser", spread=0.03, growth=growth)
    assert zoning_of(spots, label, GRAIN).zoned.mean() > 0.98


def test_what_cannot_be_tested_is_not_called_anything():
    rng = np.random.default_rng(16)
    spots = simulate(rng, np.zeros((2, 6)), technique="laser")
    alike = zoning_of(spots, np.ones(6), np.zeros(6, dtype=int))
    assert np.all(np.isnan(alike.p_value))
    assert not alike.zoned.any()
    each_its_own_grain = zoning_of(spots, np.arange(6.0), np.arange(6))
    assert np.all(np.isnan(each_its_own_grain.smallest_change))
    unknown = zoning_of(spots, np.full(6, np.nan), np.zeros(6, dtype=int))
    assert np.all(unknown.number == 0)
    assert np.all(np.isnan(unknown.p_value))


def test_power_is_the_rate_of_detection():
    rng = np.random.default_rng(17)
    growth = np.broadcast_to(0.2 * POSITION, (600, 12))
    spots = simulate(
        rng, np.zeros((600, 12)), host="clinopyroxene", technique="laser", spread=0.06, growth=growth
    )
    result = zoning_of(spots, POSITION, GRAIN)
    # Averaging over the estimated errors makes the expected power differ a little from the rate.
    assert result.power(0.2 / 1.1).mean() == pytest.approx(result.zoned.mean(), abs=0.08)
    strong = result.power(0.2 / 1.1) > 0
    assert strong.all()
    assert np.all(result.power(10.0) > result.power(0.1))


def test_direction_of_growth_in_the_simulator_is_that_of_the_score():
    coefficients = phase("olivine", "laser").coefficients
    assert growth_factor(coefficients).min() == -1.5
    assert growth_factor(coefficients).max() == pytest.approx(1.0, abs=1e-3)
