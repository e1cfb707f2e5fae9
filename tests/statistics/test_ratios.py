"""Ratios of two means: invariants of Fieller's set, kinds and reasons, classes that follow the interval."""

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

from tieline.statistics.means import MeanEstimate, phase_means
from tieline.statistics.ratios import (
    BOTH_AT_ZERO,
    DENOMINATOR_AT_ZERO,
    DENOMINATOR_NEGATIVE,
    NO_SCATTER,
    NO_VALUES,
    NUMERATOR_AT_ZERO,
    NUMERATOR_NEGATIVE,
    ONE_VALUE,
    TWO_VALUES,
    probability_above,
    ratio_dof,
    ratio_interval,
)


def estimate(mean, variance, counting=0.0, n=5):
    mean, variance, counting, n = np.broadcast_arrays(
        np.atleast_1d(np.asarray(mean, dtype=float)), variance, counting, n
    )
    return MeanEstimate(mean, variance * 1.0, counting * 1.0, np.maximum(n - 1.0, 0.0), n)


SIDE = st.tuples(st.floats(0.1, 1e3), st.floats(0.001, 0.4), st.floats(0.0, 2.0), st.integers(3, 20))


def side(mean, relative, counting_share, n):
    variance = (mean * relative) ** 2
    return estimate(mean, variance, counting_share * variance, n)


@given(SIDE, SIDE, st.floats(0, 0.1), st.floats(0, 0.1))
def test_swapping_the_means_reverses_the_interval(a, b, u_a, u_b):
    alpha, beta = side(*a), side(*b)
    here = ratio_interval(alpha, beta, u_alpha=u_a, u_beta=u_b)
    there = ratio_interval(beta, alpha, u_alpha=u_b, u_beta=u_a)
    swapped = {"upper-limit": "lower-limit", "lower-limit": "upper-limit"}
    assert there.kind[0] == swapped.get(here.kind[0], here.kind[0])
    assert there.dof[0] == pytest.approx(here.dof[0], rel=1e-12)
    if here.kind[0] == "value":
        assert there.value[0] == pytest.approx(1 / here.value[0], rel=1e-12)
        assert there.low[0] == pytest.approx(1 / here.high[0], rel=1e-6)
        assert there.high[0] == pytest.approx(1 / here.low[0], rel=1e-6)
        assert there.sd[0] / there.value[0] == pytest.approx(here.sd[0] / here.value[0], rel=1e-12)


@given(SIDE, SIDE, st.floats(1e-3, 1e3), st.floats(1e-3, 1e3))
def test_units_scale_the_ratio(a, b, factor_a, factor_b):
    here = ratio_interval(side(*a), side(*b))
    there = ratio_interval(side(a[0] * factor_a, *a[1:]), side(b[0] * factor_b, *b[1:]))
    assume(here.kind[0] == there.kind[0] == "value")
    factor = factor_a / factor_b
    np.testing.assert_allclose([there.low, there.high], [here.low * factor, here.high * factor], rtol=1e-6)


@given(SIDE, SIDE, st.floats(0, 0.1), st.floats(0.5, 0.99))
def test_ends_solve_fiellers_equation(a, b, u, confidence):
    alpha, beta = side(*a[:2], 0.0, a[3]), side(*b[:2], 0.0, b[3])
    result = ratio_interval(alpha, beta, u_alpha=u, confidence=confidence)
    assume(result.kind[0] == "value")
    quantile = stats.t.ppf(0.5 + confidence / 2, result.dof[0])
    normal = stats.norm.ppf(0.5 + confidence / 2)
    for end in (result.low[0], result.high[0]):
        gap = (alpha.mean - end * beta.mean)[0] ** 2
        calibration = (u * alpha.mean[0]) ** 2
        whole = quantile**2 * (alpha.variance[0] + calibration + end**2 * beta.variance[0])
        assert gap == pytest.approx(max(whole, normal**2 * calibration), rel=1e-6)
    assert result.low[0] <= result.value[0] <= result.high[0]


@given(SIDE, SIDE, st.floats(0.5, 0.98))
def test_more_confidence_is_never_narrower(a, b, confidence):
    narrow = ratio_interval(side(*a), side(*b), confidence=confidence)
    wide = ratio_interval(side(*a), side(*b), confidence=confidence + 0.01)
    assume(narrow.kind[0] == wide.kind[0] == "value")
    assert wide.low[0] <= narrow.low[0]
    assert wide.high[0] >= narrow.high[0]


def test_counting_is_the_floor_of_the_width():
    result = ratio_interval(estimate(10.0, 1e-8, 1.0, 3), estimate(10.0, 1e-8, 0.0, 20))
    assert result.high[0] - result.low[0] == pytest.approx(2 * 1.96 * 0.1, rel=1e-3)


def test_kinds_and_reasons():
    one, sure = estimate(1.0, 0.01, 0.01, 1), estimate(10.0, 0.01)
    faint, negative = estimate(0.1, 0.01), estimate(-1.0, 0.01)
    cases = [
        (estimate(np.nan, np.nan, np.nan, 0), sure, "undetermined", NO_VALUES),
        (one, sure, "undetermined", ONE_VALUE),
        (sure, one, "undetermined", ONE_VALUE),
        (estimate(1.0, 0.0, np.nan), sure, "undetermined", NO_SCATTER),
        (sure, sure, "value", ""),
        (estimate(10.0, 0.01, n=2), sure, "value", TWO_VALUES),
        (faint, sure, "upper-limit", NUMERATOR_AT_ZERO),
        (sure, faint, "lower-limit", DENOMINATOR_AT_ZERO),
        (faint, faint, "undetermined", BOTH_AT_ZERO),
        (negative, sure, "undetermined", NUMERATOR_NEGATIVE),
        (sure, negative, "undetermined", DENOMINATOR_NEGATIVE),
    ]
    for alpha, beta, kind, reason in cases:
        result = ratio_interval(alpha, beta)
        assert (result.kind[0], result.reason[0]) == (kind, reason)
        assert np.isnan(result.low[0]) == (kind == "undetermined")
        assert np.isnan(result.value[0]) == (reason not in ("", ONE_VALUE, TWO_VALUES, NO_SCATTER))
    upper, lower = ratio_interval(faint, sure), ratio_interval(sure, faint)
    assert upper.low[0] == 0
    assert upper.high[0] > 0.01
    assert lower.high[0] == np.inf
    assert lower.low[0] == pytest.approx(1 / upper.high[0], rel=1e-9)


def test_wrong_arguments_are_named():
    mean = estimate(1.0, 0.01)
    with pytest.raises(ValueError, match="bootstrap"):
        ratio_interval(mean, mean, method="bootstrap")
    with pytest.raises(ValueError, match="95"):
        ratio_interval(mean, mean, confidence=95)


@given(st.lists(st.tuples(SIDE, SIDE), min_size=2, max_size=6), st.sampled_from(["fieller", "gum-s1"]))
def test_a_ratio_does_not_depend_on_its_neighbours(pairs, method):
    def joined(which):
        parts = [side(*pair[which]) for pair in pairs]
        return MeanEstimate(
            *(np.concatenate([getattr(p, f) for p in parts]) for f in parts[0].__dataclass_fields__)
        )

    together = ratio_interval(joined(0), joined(1), u_alpha=0.02, method=method)
    for position, (a, b) in enumerate(pairs):
        alone = ratio_interval(side(*a), side(*b), u_alpha=0.02, method=method)
        assert alone.low.tobytes() == together.low[position].tobytes()
        assert alone.high.tobytes() == together.high[position].tobytes()
        assert alone.kind[0] == together.kind[position]


@given(SIDE, SIDE, st.floats(0, 0.05), st.sampled_from(["fieller", "gum-s1"]))
def test_probability_at_an_end_is_the_tail(a, b, u, method):
    alpha, beta = side(*a[:2], 0.0, a[3]), side(*b[:2], 0.0, b[3])
    result = ratio_interval(alpha, beta, u_beta=u, method=method)
    assume(result.kind[0] == "value")
    ends = np.array([result.low[0], result.high[0]])
    above = probability_above(alpha, beta, ends, u_beta=u, method=method)[0]
    np.testing.assert_allclose(above, [0.975, 0.025], atol=1e-6 if method == "fieller" else 1e-3)


def test_probability_falls_as_the_boundary_rises():
    above = probability_above(side(1, 0.1, 0.5, 3), side(1, 0.2, 0.5, 8), np.linspace(0.1, 3, 30))[0]
    assert (np.diff(above) <= 0).all()
    assert np.isnan(probability_above(estimate(1.0, 0.1, n=1), side(1, 0.1, 0.5, 4), np.array([1.0]))).all()


@given(SIDE, SIDE)
def test_equal_dof_without_calibration_are_welch_satterthwaite(a, b):
    alpha, beta = side(*a[:3], 6), side(*b[:3], 6)
    relative = np.array([a[1] ** 2, b[1] ** 2])
    expected = relative.sum() ** 2 / (relative**2 / 5).sum()
    zero = np.zeros(1)
    assert ratio_dof(alpha, beta, zero, zero)[0] == pytest.approx(expected, rel=1e-9)


def test_product_of_ratios_along_a_chain():
    rng = np.random.default_rng(5)
    group = np.repeat(np.arange(3), 6)
    means = phase_means(rng.normal(10, 1, 18), np.full(18, 0.3), group, 3)
    a_b, b_c, a_c = (
        ratio_interval(means.estimate(np.array([i])), means.estimate(np.array([j]))).value[0]
        for i, j in ((0, 1), (1, 2), (0, 2))
    )
    assert a_b * b_c == pytest.approx(a_c, rel=1e-14)


def test_linear_sd_agrees_with_monte_carlo():
    rng = np.random.default_rng(8)
    alpha, beta = estimate(4.0, 0.0016), estimate(2.0, 0.0009)
    factors = 1 + 0.01 * rng.standard_normal((2, 400_000))
    drawn = (4 + 0.04 * rng.standard_normal(400_000)) * factors[0]
    drawn /= (2 + 0.03 * rng.standard_normal(400_000)) * factors[1]
    sd = ratio_interval(alpha, beta, u_alpha=0.01, u_beta=0.01).sd[0]
    assert sd == pytest.approx(np.std(drawn), rel=0.01)
