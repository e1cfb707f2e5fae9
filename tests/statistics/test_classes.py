"""Classes follow the interval, probabilities sum to one, and nothing is declared without grounds."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.statistics.classes import class_probabilities, declared_class, probability_above_from_limits
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import probability_above, ratio_interval

BOUNDARIES = np.array([0.01, 1.0])


@given(
    st.floats(1e-4, 100), st.floats(0.005, 0.5), st.floats(0.005, 0.5), st.floats(0, 2), st.integers(2, 12)
)
def test_a_class_is_declared_just_when_the_interval_lies_inside_it(ratio, relative_a, relative_b, share, n):
    def mean(level, relative):
        variance = np.array([(level * relative) ** 2])
        return MeanEstimate(np.array([level]), variance, share * variance, np.array([n - 1.0]), np.array([n]))

    alpha, beta = mean(ratio, relative_a), mean(1.0, relative_b)
    result = ratio_interval(alpha, beta)
    number = declared_class(probability_above(alpha, beta, BOUNDARIES), result.kind)[0]
    edges = np.array([0.0, 0.01, 1.0, np.inf])
    low, high = result.low[0], result.high[0]
    near = np.abs(np.array([low, high])[:, None] / BOUNDARIES - 1).min() < 2e-2
    if result.kind[0] == "undetermined":
        assert number == -1
    elif not near:
        inside = [k for k in range(3) if edges[k] <= low and high <= edges[k + 1]]
        assert number == (inside[0] if inside else -1)


def test_probabilities_of_the_classes():
    above = np.array([[0.99, 0.2], [np.nan, np.nan]])
    probabilities = class_probabilities(above)
    np.testing.assert_allclose(probabilities[0], [0.01, 0.79, 0.2])
    assert np.isnan(probabilities[1]).all()
    kind = np.array(["value", "undetermined"], dtype=object)
    np.testing.assert_array_equal(declared_class(above, kind), [-1, -1])
    np.testing.assert_array_equal(declared_class(np.array([[0.99, 0.01]] * 2), kind), [1, -1])


@pytest.mark.parametrize(("kind", "value", "low", "high", "boundary", "expected"), [
    ("upper-limit", np.nan, 0.0, 0.2, 0.2, 0.025),
    ("lower-limit", np.nan, 3.0, np.inf, 3.0, 0.975),
    ("value", 0.5, 0.2, 1.1, 1.1, 0.025),
    ("value", 0.5, 0.2, 1.1, 0.2, 0.975),
    ("value", 0.5, 0.2, 1.1, 0.5, 0.5),
])  # fmt: skip
def test_limits_have_their_tail_at_their_ends(kind, value, low, high, boundary, expected):
    above = probability_above_from_limits(
        *(np.array([x]) for x in (value, low, high)), np.array([kind], dtype=object), np.array([boundary])
    )
    assert above[0, 0] == pytest.approx(expected, abs=1e-12)


def test_undetermined_has_no_probability():
    nan = np.array([np.nan])
    above = probability_above_from_limits(nan, nan, nan, np.array(["undetermined"], dtype=object), BOUNDARIES)
    assert np.isnan(above).all()
