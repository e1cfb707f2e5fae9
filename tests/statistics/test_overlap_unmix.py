"""Unmixing: exact mixtures, bias against the plain mean, and what it says of its limits."""

import numpy as np
import pytest

from simulate_spots import phase, simulate
from tieline.statistics.overlap import overlap_scores
from tieline.statistics.overlap_unmix import unmix


def unmixed(spots):
    scores = overlap_scores(
        spots.values, spots.sigmas, spots.glass_mean, spots.glass_variance, spots.phase.is_trace
    )
    return scores, unmix(spots.values, spots.sigmas, spots.glass_variance, scores)


def test_nearly_exact_mixtures_give_the_host_back():
    rng = np.random.default_rng(1)
    host, glass = 10 ** rng.uniform(0, 3, 12), 10 ** rng.uniform(0, 3, 12)
    fraction = np.array([0.0, 0.0, 0.0, 0.05, 0.1, 0.2])
    exact = (1 - fraction[:, None]) * host + fraction[:, None] * glass
    sigma = 1e-6 * exact
    values = (exact + sigma * rng.standard_normal(exact.shape))[None]
    scores = overlap_scores(values, sigma[None], glass[None], np.zeros((1, 12)), np.ones(12, dtype=bool))
    result = unmix(values, sigma[None], np.zeros((1, 12)), scores)
    np.testing.assert_allclose(result.mean[0], host, rtol=1e-5)
    assert not result.needs_bound[0]
    np.testing.assert_array_equal(result.degrees_of_freedom[0], 5.0)


@pytest.mark.parametrize("host", ["olivine", "plagioclase"])
def test_eight_of_ten_contaminated_are_unmixed_without_bias(host):
    rng = np.random.default_rng(2)
    fraction = np.zeros((300, 10))
    fraction[:, :8] = 10 ** rng.uniform(-3, -1, (300, 8))
    spots = simulate(rng, fraction, host=host, technique="laser", spread=0.03)
    scores, result = unmixed(spots)
    truth = phase(host, "laser").host_ppm
    measurable = phase(host, "laser").sensitivity * truth > 20
    ratio = np.nanmean(result.mean, axis=0) / truth
    np.testing.assert_allclose(ratio[measurable], 1.0, atol=0.05)
    assert np.median(spots.values.mean(axis=1)[:, measurable] / truth[measurable]) > 1.01
    np.testing.assert_array_equal(result.needs_bound, scores.n_clean < 3)
    assert result.needs_bound.mean() > 0.9


def test_foreign_spots_are_never_unmixed():
    rng = np.random.default_rng(3)
    spots = simulate(rng, np.zeros((50, 8)), technique="laser", spread=0.03)
    spots.values[:, 0, 2:6] *= 4
    scores, result = unmixed(spots)
    assert scores.foreign[:, 0].all()
    truth = phase("olivine", "laser").host_ppm
    assert result.mean[:, 2].mean() == pytest.approx(truth[2], rel=0.05)


def test_widening_has_the_sign_of_the_contrast():
    _, result = unmixed(simulate(np.random.default_rng(4), np.zeros((3, 6)), technique="laser"))
    contrast = phase("olivine", "laser").glass_ppm - phase("olivine", "laser").host_ppm
    np.testing.assert_array_equal(np.sign(result.widening), np.sign(contrast) * np.ones((3, 1)))


def test_groups_without_scores_have_no_mean():
    spots = simulate(np.random.default_rng(5), np.zeros((2, 4)), technique="laser")
    spots.values[0, 2:] = np.nan
    _, result = unmixed(spots)
    assert np.all(np.isnan(result.mean[0]))
    assert np.all(np.isnan(result.widening[0]))
    assert result.needs_bound[0]
    assert np.all(np.isfinite(result.mean[1]))
