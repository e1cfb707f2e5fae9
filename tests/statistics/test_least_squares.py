"""Least squares side by side: known minima and limits, bounds, independence of the problems, what cannot be told apart."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.statistics.least_squares import (
    ProfileSearch,
    covariance,
    covariances,
    minimise,
    profile_limits,
)

X = np.linspace(0.0, 2.0, 7)
FREE = np.ones(2, dtype=bool)
LOWER, UPPER = np.array([-10.0, -10.0]), np.array([10.0, 10.0])


def straight(y):
    """Residuals of the straight line theta0 + theta1 x through y (problems, 7), with unit errors."""

    def residuals(theta):
        jacobian = np.broadcast_to(np.stack([np.ones(7), X], axis=1), (len(theta), 7, 2))
        return (jacobian @ theta[:, :, None])[:, :, 0] - y, jacobian

    return residuals


def decay(y):
    """Residuals of theta0 exp(-theta1 x)."""

    def residuals(theta):
        shape = np.exp(-theta[:, [1]] * X)
        jacobian = np.stack([shape, -theta[:, [0]] * X * shape], axis=2)
        return theta[:, [0]] * shape - y, jacobian

    return residuals


def test_a_straight_line_and_its_limits_are_those_of_the_normal_equations():
    y = 1.0 + 2.0 * X + np.array([0.3, -0.2, 0.1, 0.0, -0.4, 0.2, 0.1])
    design = np.stack([np.ones(7), X], axis=1)
    found = minimise(straight(y[None]), np.zeros((1, 2)), FREE[None], LOWER, UPPER)
    np.testing.assert_allclose(found.theta[0], np.linalg.lstsq(design, y, rcond=None)[0], rtol=1e-8)
    assert found.converged.all()
    spread = covariance(design, FREE)
    np.testing.assert_allclose(spread, np.linalg.inv(design.T @ design))
    limits = profile_limits(
        straight(y[None]), found.theta[0], found.sum_of_squares[0], spread, 1.96**2, FREE, LOWER, UPPER
    )
    half = 1.96 * np.sqrt(np.diag(spread))
    expected = np.stack([found.theta[0] - half, found.theta[0] + half], axis=1)
    np.testing.assert_allclose(limits.limits, expected, rtol=2e-3)
    assert limits.better is None


@given(st.integers(0, 10_000))
@settings(max_examples=25, deadline=None)
def test_no_problem_depends_on_its_neighbours(seed):
    rng = np.random.default_rng(seed)
    y = 3.0 * np.exp(-rng.uniform(0.2, 3.0, (8, 1)) * X) + 0.05 * rng.standard_normal((8, 7))
    start, free = np.tile([1.0, 1.0], (8, 1)), np.ones((8, 2), dtype=bool)
    subset = lambda rows: decay(y[rows])  # noqa: E731 - the shape of the argument
    many = minimise(decay(y), start, free, LOWER, UPPER, subset=subset)
    spread = covariances(decay(y)(many.theta)[1], free)
    rows = np.repeat(np.arange(8), 2)
    search = ProfileSearch(
        decay(y[rows]), many.theta[rows], many.sum_of_squares[rows], spread[rows], np.full(16, 0.01),
        np.zeros(16, dtype=int), np.tile([-1.0, 1.0], 8), free[rows], LOWER, UPPER,
        subset=lambda some: decay(y[rows[some]]),
    ).run()  # fmt: skip
    for row in range(8):
        one = minimise(decay(y[[row]]), start[[row]], free[[row]], LOWER, UPPER)
        np.testing.assert_allclose(many.theta[row], one.theta[0], rtol=1e-6)
        alone = profile_limits(
            decay(y[[row]]), one.theta[0], one.sum_of_squares[0], spread[row], 0.01, FREE, LOWER, UPPER
        )
        np.testing.assert_allclose(search[2 * row : 2 * row + 2], alone.limits[0], rtol=1e-6)


def test_bounds_and_held_parameters_are_kept():
    y = 1.0 + 2.0 * X
    found = minimise(straight(y[None]), np.zeros((1, 2)), FREE[None], LOWER, np.array([10.0, 1.5]))
    assert found.theta[0, 1] == 1.5
    held = minimise(straight(y[None]), np.array([[0.0, 3.0]]), np.array([[True, False]]), LOWER, UPPER)
    assert held.theta[0] == pytest.approx([0.0, 3.0], abs=1e-8)


def test_a_profile_that_stays_below_the_cut_is_open():
    y = 1.0 + 2.0 * X
    spread = covariance(np.stack([np.ones(7), X], axis=1), FREE)
    tight = profile_limits(
        straight(y[None]), np.array([1.0, 2.0]), 0.0, spread, 1.0, FREE, LOWER, np.array([10.0, 2.1])
    )
    assert tight.limits[1, 1] == np.inf
    assert np.isfinite(tight.limits[1, 0])


def test_a_deeper_minimum_met_on_the_way_is_handed_back():
    # (theta² - 1)² + 0.1 (theta - 1)²: minima near -1 and at 1
    def residuals(theta):
        return (
            np.concatenate([theta**2 - 1, np.sqrt(0.1) * (theta - 1)], axis=1),
            np.stack([2 * theta, np.full_like(theta, np.sqrt(0.1))], axis=1),
        )

    one = np.ones(1, dtype=bool)
    shallow = minimise(residuals, np.array([[-1.2]]), one[None], np.array([-5.0]), np.array([5.0]))
    assert shallow.theta[0, 0] < -0.9
    found = profile_limits(
        residuals, shallow.theta[0], shallow.sum_of_squares[0], np.array([[0.5]]), 9.0, one,
        np.array([-5.0]), np.array([5.0]),
    )  # fmt: skip
    assert found.better is not None
    assert found.better[0] > 0


@pytest.mark.parametrize(
    "design",
    [
        np.stack([np.ones(7), np.zeros(7)], axis=1),
        np.stack([X, 2.0 * X], axis=1),
        np.stack([np.ones(1), np.ones(1)], axis=1),
        np.stack([X, np.full(7, np.nan)], axis=1),
    ],
)
def test_parameters_that_cannot_be_told_apart_have_no_covariance(design):
    assert covariance(design, FREE) is None
    only = covariance(np.nan_to_num(design), np.array([True, False]))
    assert only is not None
    assert only[1, 1] == 0.0
