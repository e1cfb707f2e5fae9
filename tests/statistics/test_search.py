"""Zeros and maxima of many functions at once."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.statistics.search import root, summit

places = st.lists(st.floats(0.01, 0.99), min_size=1, max_size=6)


@given(places, st.floats(0.0, 30.0))
def test_simple_roots_are_found_to_the_tolerance(zeros, steepness):
    zero = np.array(zeros)

    def function(x, which):
        return (x - zero[which]) * np.exp(-steepness * x)

    a, b = np.zeros(len(zero)), np.ones(len(zero))
    every = np.arange(len(zero))
    found = root(function, a, b, function(a, every), function(b, every), 1e-10)
    np.testing.assert_allclose(found, zero, rtol=1e-9)


def test_without_a_change_of_sign_the_end_nearer_zero():
    def function(x, which):
        return np.array([2.0 - x, -1.0 - x])[which, which]

    ends = np.zeros(2), np.ones(2)
    heights = np.array([2.0, -1.0]), np.array([1.0, -2.0])
    np.testing.assert_array_equal(root(function, *ends, *heights, 1e-9), [1.0, 0.0])


def test_settled_functions_are_not_asked_again():
    zero, asked = np.array([0.5, 0.3]), []

    def function(x, which):
        asked.append(len(which))
        return np.where(which == 0, x - 0.5, np.exp(x) - np.exp(0.3))

    every = np.arange(2)
    found = root(
        function, np.zeros(2), np.ones(2), function(np.zeros(2), every), function(np.ones(2), every), 1e-9
    )
    np.testing.assert_allclose(found, zero, rtol=1e-9)
    assert asked[-1] == 1


@given(places, st.floats(0.0, 2.0))
def test_summits_inside(tops, skew):
    top = np.array(tops)

    def function(x, which):
        return -((x - top[which]) ** 2) * (1.0 + skew * x)

    place, height = summit(function, np.zeros(len(top)), np.ones(len(top)))
    np.testing.assert_allclose(place, top, atol=1e-4)
    np.testing.assert_allclose(height, 0.0, atol=1e-7)


@given(places)
def test_a_summit_with_a_bend(tops):
    top = np.array(tops)
    place, _ = summit(lambda x, which: -np.abs(x - top[which]), np.zeros(len(top)), np.ones(len(top)))
    np.testing.assert_allclose(place, top, atol=1e-4)


@pytest.mark.parametrize("slope", [-1.0, 1.0])
def test_a_summit_at_an_end(slope):
    place, height = summit(lambda x, which: slope * x, np.zeros(1), np.ones(1))
    assert place[0] == pytest.approx(max(slope, 0.0), abs=1e-4)
    assert height[0] == pytest.approx(max(slope, 0.0), abs=1e-4)


def test_the_higher_of_two_summits():
    def function(x, which):
        return np.exp(-200 * (x - 0.25) ** 2) + 1.1 * np.exp(-200 * (x - 0.75) ** 2)

    place, _ = summit(function, np.zeros(1), np.ones(1))
    assert place[0] == pytest.approx(0.75, abs=1e-3)
