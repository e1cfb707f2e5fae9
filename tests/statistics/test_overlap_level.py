"""The clean level against brute-force integration, and where most spots are contaminated."""

import numpy as np
import pytest
from scipy.stats import norm

from tieline.statistics.overlap_level import clean_level, clean_levels


def brute_force(t, sd, grid):
    """Posterior on a fine grid, every density written out."""
    scales = sd.mean() * 3.0 ** np.arange(1 + int(np.floor(np.log(0.5 / sd.mean()) / np.log(3))))
    total = np.zeros_like(grid)
    for value, error in zip(t, sd, strict=True):
        y = value - grid
        clean = 0.98 * norm.pdf(y, scale=error) + 0.02 * norm.pdf(y, scale=3 * error)
        slab = 0.0
        for scale in scales:
            # half-normal of the scale times the spot's own error over the mean error, convolved with the noise
            own = scale * error / sd.mean()
            width = np.hypot(own, error)
            slab = slab + 2 * norm.pdf(y, scale=width) * norm.cdf(y * own / (width * error)) / len(scales)
        total += np.log(0.5 * clean + 0.5 * slab)
    weight = np.exp(total - total.max())
    mean = np.sum(weight * grid) / np.sum(weight)
    return mean, np.sum(weight * (grid - mean) ** 2) / np.sum(weight)


@pytest.mark.parametrize("contaminated", [0, 3, 7])
def test_posterior_equals_brute_force_integration(contaminated):
    rng = np.random.default_rng([3, contaminated])
    sd = 1e-4 * rng.uniform(0.9, 1.1, 10)
    t = sd * rng.standard_normal(10)
    t[:contaminated] += 10 ** rng.uniform(-3, -1, contaminated)
    usable = np.ones((1, 10), dtype=bool)
    level = clean_level(t[None], sd[None] ** 2, usable)
    grid = np.linspace(t.min() - 8e-4, np.sort(t)[3] + 8e-4, 20_001)
    mean, variance = brute_force(t, sd, grid)
    assert level.mean[0] == pytest.approx(mean, abs=2e-3 * sd.mean())
    assert level.variance[0] == pytest.approx(variance, rel=0.02)


def test_leaving_a_spot_out_equals_the_level_of_the_others():
    rng = np.random.default_rng(6)
    t, sd = rng.standard_normal((4, 6)), np.full((4, 6), 1.0)
    t[:, 0] += 30.0
    t, sd = 1e-3 * t, 1e-3 * sd
    usable = np.ones(t.shape, dtype=bool)
    level, without = clean_levels(t, sd**2, usable)
    assert level.mean.tolist() == clean_level(t, sd**2, usable).mean.tolist()
    for s in range(6):
        others = usable.copy()
        others[:, s] = False
        alone = clean_level(t, sd**2, others)
        np.testing.assert_allclose(without.mean[:, s], alone.mean, atol=0.02e-3)


def test_level_follows_a_shift_and_a_scale_within_the_slab():
    rng = np.random.default_rng(9)
    t = 1e-4 * rng.standard_normal((5, 8))
    usable = np.ones(t.shape, dtype=bool)
    base = clean_level(t, np.full(t.shape, 1e-8), usable)
    moved = clean_level(t + 0.02, np.full(t.shape, 1e-8), usable)
    np.testing.assert_allclose(moved.mean, base.mean + 0.02, atol=1e-9)
    np.testing.assert_allclose(moved.variance, base.variance, rtol=1e-6)


def test_eight_of_ten_contaminated_leave_the_level_at_the_clean_two():
    rng = np.random.default_rng(10)
    t = 1e-4 * rng.standard_normal((400, 10))
    t[:, :8] += 10 ** rng.uniform(-3, -1, (400, 8))
    level = clean_level(t, np.full(t.shape, 1e-8), np.ones(t.shape, dtype=bool))
    error = level.mean / 1e-4
    assert abs(error.mean()) < 0.5
    assert np.quantile(np.abs(error), 0.95) < 3
    assert np.median(t, axis=1).mean() / 1e-4 > 50  # where the median ends up


def test_one_spot_far_below_does_not_pull_the_level_down():
    t = 1e-4 * np.array([[0.3, -0.5, 0.1, 0.8, -0.2, -40.0]])
    level = clean_level(t, np.full(t.shape, 1e-8), np.ones(t.shape, dtype=bool))
    assert abs(level.mean[0]) < 1e-4


def test_groups_without_spots_have_no_level():
    t, variance = np.array([[0.1, np.nan], [np.nan, np.nan]]), np.full((2, 2), 1e-4)
    usable = np.isfinite(t)
    level, (same, without) = clean_level(t, variance, usable), clean_levels(t, variance, usable)
    np.testing.assert_array_equal(same.mean, level.mean)
    assert level.mean[0] == pytest.approx(0.1, abs=0.02)
    assert np.isnan(level.mean[1])
    assert np.isnan(without.mean[0, 0])
