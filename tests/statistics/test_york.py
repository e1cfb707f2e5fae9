"""The line with errors in both variables: symmetry, known truth, scatter, and cases without an answer."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.statistics.york import line_without_each, predict_line, york_line


def points(seed: int, n: int = 12, correlation: float = 0.0):
    rng = np.random.default_rng(seed)
    true_x = np.linspace(0, 10, n)
    sd_x, sd_y = rng.uniform(0.1, 0.5, n), rng.uniform(0.1, 0.5, n)
    a, b = rng.standard_normal((2, n))
    noise_y = correlation * a + np.sqrt(1 - correlation**2) * b
    return true_x + sd_x * a, 2.0 - 0.7 * true_x + sd_y * noise_y, sd_x, sd_y


def test_standard_errors_are_those_of_repeated_measurement():
    lines = [york_line(*points(seed, correlation=0.6), 0.6) for seed in range(500)]
    slope, intercept = np.array([(line.slope, line.intercept) for line in lines]).T
    # every draw has its own errors: compare each deviation with its own standard error
    assert np.std((slope + 0.7) / [line.slope_se for line in lines]) == pytest.approx(1.0, abs=0.1)
    assert np.std((intercept - 2.0) / [line.intercept_se for line in lines]) == pytest.approx(1.0, abs=0.1)
    assert np.mean([line.mswd for line in lines]) == pytest.approx(1.0, abs=0.05)


def test_prediction_covers():
    hits = 0
    for seed in range(300):
        guess = predict_line(york_line(*points(seed)), np.array([4.0, 15.0]))
        hits += np.sum(
            (guess.low <= 2 - 0.7 * np.array([4.0, 15.0])) & (2 - 0.7 * np.array([4.0, 15.0]) <= guess.high)
        )
    assert hits / 600 == pytest.approx(0.95, abs=0.03)


@given(st.integers(0, 10_000), st.floats(-0.9, 0.9))
@settings(max_examples=40, deadline=None)
def test_swapping_the_axes_gives_the_same_line(seed, correlation):
    x, y, sd_x, sd_y = points(seed)
    line, swapped = york_line(x, y, sd_x, sd_y, correlation), york_line(y, x, sd_y, sd_x, correlation)
    assert 1 / swapped.slope == pytest.approx(line.slope, rel=1e-8)
    assert -swapped.intercept / swapped.slope == pytest.approx(line.intercept, rel=1e-8)
    assert swapped.chi_square == pytest.approx(line.chi_square, rel=1e-8)


@given(st.integers(0, 10_000), st.floats(0.01, 100), st.floats(-50, 50))
@settings(max_examples=40, deadline=None)
def test_units_and_origin_do_not_matter(seed, factor, shift):
    x, y, sd_x, sd_y = points(seed)
    line = york_line(x, y, sd_x, sd_y)
    other = york_line(factor * x + shift, y, factor * sd_x, sd_y)
    assert other.slope * factor == pytest.approx(line.slope, rel=1e-6)
    assert other.mswd == pytest.approx(line.mswd, rel=1e-6)


def test_scatter_beyond_the_errors_widens_the_interval():
    x, y, sd_x, sd_y = points(1)
    honest, claimed = york_line(x, y, sd_x, sd_y), york_line(x, y, sd_x / 5, sd_y / 5)
    assert honest.scale == 1.0
    assert claimed.scale == claimed.mswd > 10
    half = predict_line(claimed, np.array([5.0]))
    assert half.high[0] - half.low[0] > 0.8 * np.ptp(
        [predict_line(honest, np.array([5.0])).low[0], predict_line(honest, np.array([5.0])).high[0]]
    )


def test_without_each_point():
    x, y, sd_x, sd_y = points(2)
    y[3] += 20 * sd_y[3]
    lines = line_without_each(x, y, sd_x, sd_y)
    assert int(np.argmin([line.mswd for line in lines])) == 3
    assert (
        lines[3].slope
        == york_line(np.delete(x, 3), np.delete(y, 3), np.delete(sd_x, 3), np.delete(sd_y, 3)).slope
    )


def test_two_points_are_joined_and_say_nothing_about_scatter():
    line = york_line(np.array([0.0, 1.0]), np.array([1.0, 3.0]), np.full(2, 0.1), np.full(2, 0.1))
    assert (line.slope, line.intercept) == pytest.approx((2.0, 1.0))
    assert line.dof == 0
    assert np.isnan(line.mswd)
    assert np.isnan(line.slope_se_scatter)
    assert line.scale == 1.0


@pytest.mark.parametrize("x", [[1.0], [1.0, 1.0, 1.0], []])
def test_no_line_through_one_x(x):
    line = york_line(np.array(x), np.arange(len(x), dtype=float), np.full(len(x), 0.1), np.full(len(x), 0.1))
    assert line.verdict == "cannot tell"
    assert np.isnan(line.slope)
    assert np.isnan(predict_line(line, np.array([1.0])).value[0])


@pytest.mark.parametrize(
    ("sd_x", "sd_y"),
    [([0.1, 0.1], [0.1, -0.1]), ([0.0, 0.1], [0.0, 0.1]), ([0.1, np.nan], [0.1, 0.1]), ([0.1], [0.1])],
)
def test_impossible_errors_are_refused(sd_x, sd_y):
    with pytest.raises(ValueError, match=r"error|length|finite"):
        york_line(np.array([0.0, 1.0]), np.array([0.0, 1.0]), np.array(sd_x), np.array(sd_y))
