"""Propagation to D: package and arrays agree; shared factors cancel; against Monte Carlo and worked examples."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.propagation import Budget, Side, by_arrays, by_package, unshared

SHARES = ("counting", "spread", "calibration", "internal_standard")
relative = st.floats(0.0, 0.3)


@st.composite
def sides(draw: st.DrawFn) -> tuple[Side, Side]:
    n = draw(st.integers(1, 5))

    def numbers(strategy: st.SearchStrategy[float]) -> np.ndarray:
        return np.array(draw(st.lists(strategy, min_size=n, max_size=n)))

    def keys() -> np.ndarray:
        return np.array(draw(st.lists(st.integers(0, 2), min_size=n, max_size=n)))

    def side() -> Side:
        mean = numbers(st.floats(1e-4, 1e5))
        return Side(
            mean,
            numbers(relative),
            numbers(relative),
            np.zeros(n),
            keys(),
            numbers(relative),
            np.zeros(n),
            keys(),
            np.zeros(n),
            keys(),
        )

    alpha, beta = side(), side()
    # One variable has one uncertainty, whatever the side that uses it.
    table = np.array([0.01, 0.05, 0.2])

    def complete(one: Side) -> Side:
        return Side(
            one.mean,
            one.counting,
            one.spread,
            table[one.calibration_key],
            one.calibration_key,
            one.matrix,
            table[one.internal_standard_key] / 2,
            one.internal_standard_key,
            table[one.standard_calibration_key] / 3,
            one.standard_calibration_key,
        )

    return complete(alpha), complete(beta)


@given(sides())
@settings(max_examples=100, deadline=None)
def test_arrays_equal_the_package(pair: tuple[Side, Side]):
    arrays, package = by_arrays(*pair), by_package(*pair)
    np.testing.assert_allclose(arrays.D, package.D, rtol=1e-12)
    # The package leaves a rounding error where a shared factor cancels; arrays leave nothing.
    assert np.all(np.abs(arrays.D_sd - package.D_sd) <= 1e-12 * arrays.D_sd + 1e-15 * arrays.D)
    uncertain = arrays.D_sd > 1e-9 * arrays.D
    for name in SHARES:
        np.testing.assert_allclose(
            getattr(arrays, name)[uncertain], getattr(package, name)[uncertain], rtol=1e-9, atol=1e-12
        )


@given(sides())
@settings(max_examples=50, deadline=None)
def test_shares_sum_to_one(pair: tuple[Side, Side]):
    budget = by_arrays(*pair)
    total = sum(getattr(budget, name) for name in SHARES)
    assert np.all(np.isnan(total) | (np.abs(total - 1) < 1e-12))
    assert np.all(np.isnan(total) == (budget.D_sd == 0))


def one(
    mean: float,
    *,
    counting=0.0,
    spread=0.0,
    calibration=0.0,
    batch=0,
    matrix=0.0,
    standard=0.0,
    key=-1,
    standard_calibration=0.0,
    standard_batch=-1,
) -> Side:
    def of(x: float) -> np.ndarray:
        return np.array([x], dtype=float)

    return Side(
        of(mean),
        of(counting),
        of(spread),
        of(calibration),
        np.array([batch]),
        of(matrix),
        of(standard),
        np.array([key]),
        of(standard_calibration),
        np.array([standard_batch]),
    )


def monte_carlo_sd(alpha: Side, beta: Side, n: int = 400_000) -> tuple[float, dict[str, float]]:
    """sd of D and the shares of its variance when each source varies alone, small uncertainties."""
    random = np.random.default_rng(20261)

    def draw(only: str | None) -> np.ndarray:
        def factor(kind: str, sd: float) -> np.ndarray:
            return 1 + sd * random.standard_normal(n) if only in (None, kind) else np.ones(n)

        shared = {}

        def variable(kind: str, key: int, sd: float) -> np.ndarray:
            return shared.setdefault((kind, key), factor(kind, sd))

        def concentration(side: Side) -> np.ndarray:
            return (
                side.mean[0]
                * factor("counting", side.counting[0])
                * factor("spread", side.spread[0])
                * variable("calibration", side.calibration_key[0], side.calibration[0])
                * factor("calibration", side.matrix[0])
                * variable("internal_standard", side.internal_standard_key[0], side.internal_standard[0])
                * variable(
                    "calibration",
                    ("standard", side.standard_calibration_key[0]),
                    side.standard_calibration[0],
                )
            )

        return concentration(alpha) / concentration(beta)

    sd = float(np.std(draw(None)))
    alone = {kind: float(np.var(draw(kind))) for kind in SHARES}
    total = sum(alone.values())
    return sd, {kind: part / total for kind, part in alone.items()}


@pytest.mark.parametrize("batches", [(0, 0), (0, 1)])
def test_budget_against_monte_carlo(batches: tuple[int, int]):
    alpha = one(
        2.0,
        counting=0.02,
        spread=0.03,
        calibration=0.03,
        batch=batches[0],
        matrix=0.01,
        standard=0.015,
        key=4,
        standard_calibration=0.02,
        standard_batch=8,
    )
    beta = one(
        40.0,
        counting=0.01,
        spread=0.015,
        calibration=0.03,
        batch=batches[1],
        standard=0.02,
        key=5,
        standard_calibration=0.02,
        standard_batch=9,
    )
    budget = by_package(alpha, beta)
    sd, shares = monte_carlo_sd(alpha, beta)
    assert budget.D_sd[0] == pytest.approx(sd, rel=0.02)
    for kind in SHARES:
        assert getattr(budget, kind)[0] == pytest.approx(shares[kind], abs=0.02)


def test_shared_calibration_cancels_exactly():
    same = by_package(one(1.0, counting=0.01, calibration=0.5), one(10.0, counting=0.01, calibration=0.5))
    without = by_package(one(1.0, counting=0.01), one(10.0, counting=0.01))
    assert same.D_sd[0] == without.D_sd[0]
    assert unshared(one(1.0, calibration=0.5), one(1.0, calibration=0.5))[0][0] == 0
    apart = unshared(one(1.0, calibration=0.3, matrix=0.4), one(1.0, calibration=0.3, batch=1))
    assert apart[0][0] == pytest.approx(0.5)
    assert apart[1][0] == pytest.approx(0.3)


def test_undefined_ratio_is_not_a_number():
    for propagate in (by_arrays, by_package):
        budget: Budget = propagate(one(1.0, counting=0.1), one(0.0, counting=0.1))
        assert np.isnan(budget.D[0])


def test_welch_satterthwaite_example_of_the_gum():
    # JCGM 100:2008, G.4.2: 0.25, 0.57 and 0.82 % with 10, 5 and 15 readings give 1.03 % and 19.0 (inputs from memory).
    from tieline.statistics.means import MeanEstimate
    from tieline.statistics.ratios import ratio_dof

    combined = np.sqrt(0.25**2 + 0.57**2 + 0.82**2)
    assert combined == pytest.approx(1.03, abs=0.005)
    dof = combined**4 / (0.25**4 / 9 + 0.57**4 / 4 + 0.82**4 / 14)
    assert dof == pytest.approx(19.0, abs=0.05)
    # The program's degrees of freedom for equal numbers of values are Welch-Satterthwaite's.
    alpha, beta = (
        MeanEstimate(np.array([1.0]), np.array([u**2]), np.array([0.0]), np.array([9.0]), np.array([10]))
        for u in (0.0025, 0.0057)
    )
    expected = (0.25**2 + 0.57**2) ** 2 / (0.25**4 / 9 + 0.57**4 / 9)
    assert ratio_dof(alpha, beta, np.zeros(1), np.zeros(1))[0] == pytest.approx(expected, rel=1e-9)
