"""Exchange coefficients: correlation, ferric iron, windows, and pairs that cannot be judged."""

import numpy as np
import pytest

from assess.frames import covariance, partition
from tieline.assess.exchange import compare, exchange_coefficient, exchange_tables, ferrous_factor
from tieline.assess.ferric import FerricShare, kress_carmichael


@pytest.mark.parametrize("correlation", [-0.5, 0.0, 0.9])
def test_interval_against_simulation(correlation):
    rng = np.random.default_rng(3)
    truth, sd = np.array([1.3, 4.2]), np.array([0.04, 0.15])
    matrix = np.outer(sd, sd) * np.array([[1, correlation], [correlation, 1]])
    drawn = rng.multivariate_normal(truth, matrix, 2000)
    found = [exchange_coefficient(a, b, matrix) for a, b in drawn]
    inside = [one.low <= truth[0] / truth[1] <= one.high for one in found]
    assert np.mean(inside) == pytest.approx(0.95, abs=0.02)
    assert np.std(drawn[:, 0] / drawn[:, 1]) == pytest.approx(np.mean([one.sd for one in found]), rel=0.06)


def test_correlated_errors_cancel():
    matrix = np.outer([1.3, 4.2], [1.3, 4.2]) * 0.05**2
    assert exchange_coefficient(1.3, 4.2, matrix).sd == pytest.approx(0.0, abs=1e-9)


def test_few_degrees_of_freedom_widen():
    matrix = np.diag([1e-3, 1e-2])
    few, many = (exchange_coefficient(1.3, 4.2, matrix, dof=dof) for dof in (3, np.inf))
    assert few.high - few.low > 1.4 * (many.high - many.low)


def test_ferric_iron_in_the_melt_raises_the_coefficient():
    factor, relative = ferrous_factor(None, FerricShare(0.15, 0.03, "stated"))
    assert factor == pytest.approx(1 / 0.85)
    plain = exchange_coefficient(1.3, 4.2, np.diag([1e-4, 1e-3]))
    with_ferric = exchange_coefficient(
        1.3, 4.2, np.diag([1e-4, 1e-3]), ferrous_factor=factor, ferrous_factor_relative_sd=relative
    )
    assert with_ferric.value == pytest.approx(plain.value / 0.85)
    assert with_ferric.sd / with_ferric.value == pytest.approx(
        np.hypot(plain.sd / plain.value, 0.03 / 0.85), rel=1e-6
    )


@pytest.mark.parametrize(
    ("first", "second", "variances"),
    [(np.nan, 1.0, [1, 1]), (1.0, 0.1, [0.01, 0.01]), (1.0, -1.0, [0.01, 0.01])],
)
def test_no_coefficient_says_why(first, second, variances):
    found = exchange_coefficient(first, second, np.diag(variances))
    assert np.isnan(found.value)
    assert found.reason


@pytest.mark.parametrize(
    ("low", "high", "verdict"),
    [
        (0.28, 0.31, "consistent"),
        (0.32, 0.36, "consistent"),
        (0.34, 0.36, "differs"),
        (0.1, 0.6, "cannot tell"),
    ],
)
def test_verdicts(low, high, verdict):
    matrix = np.diag([1e-6, 1e-6])
    found = exchange_coefficient(1.0, 3.0, matrix)
    assert compare(type(found)(0.3, 0.01, low, high), 0.27, 0.33) == verdict


def test_table_uses_windows_for_melts_only_and_states_the_ferric_share():
    rows = [{"element": "Fe", "D": 1.25}, {"element": "Mg", "D": 4.2}]
    both = partition([*rows, *[row | {"beta": "orthopyroxene"} for row in rows]])
    ferric = {("A", "glass"): FerricShare(0.10, 0.02, "stated")}
    table = exchange_tables(both, covariance(both), ferric=ferric)[1].set_index("beta")
    assert table.loc["glass", "value"] == pytest.approx(1.25 / 4.2 / 0.9)
    assert table.loc["glass", "verdict"] == "consistent"
    assert (table.loc["glass", "expected_lo"], table.loc["glass", "expected_hi"]) == pytest.approx(
        (0.27, 0.33)
    )
    assert "glass 0.100 ± 0.020 (stated)" in table.loc["glass", "detail"]
    assert "olivine none assumed" in table.loc["glass", "detail"]
    assert table.loc["orthopyroxene", "verdict"] == "cannot tell"
    assert np.isnan(table.loc["orthopyroxene", "expected_lo"])


def test_other_pairs_and_given_windows():
    table = partition([{"element": "Ni", "D": 8.0}, {"element": "Mg", "D": 4.0}, {"element": "Fe", "D": 1.2}])
    coefficients, checks = exchange_tables(
        table,
        covariance(table),
        pairs=(("Ni", "Mg"), ("Mg", "Fe")),
        windows={("olivine", "Ni-Mg"): (2.2, 2.8, "ours")},
    )
    assert coefficients["K_D"].tolist() == checks["value"].tolist()
    assert coefficients["window_source"].tolist() == ["ours", ""]
    found = checks.set_index("subject")
    assert found.loc["K_D(Ni-Mg)", "value"] == pytest.approx(2.0)
    assert "ours" in found.loc["K_D(Ni-Mg)", "detail"]
    assert found.loc["K_D(Mg-Fe)", "value"] == pytest.approx(4.0 / 1.2)


def test_iron_as_the_second_element_takes_the_inverse_factor():
    table = partition([{"element": "Mg", "D": 4.2}, {"element": "Fe", "D": 1.2}])
    ferric = {("A", "glass"): FerricShare(0.20, 0.0, "stated")}
    found = exchange_tables(table, covariance(table), pairs=(("Mg", "Fe"),), ferric=ferric)[1]
    assert found["value"][0] == pytest.approx(4.2 / (1.2 / 0.8))


def test_a_limit_gives_no_coefficient():
    table = partition([{"element": "Fe", "kind": "upper-limit", "D_hi": 0.2}, {"element": "Mg", "D": 4.2}])
    found = exchange_tables(table, covariance(table))[1]
    assert found["verdict"][0] == "cannot tell"
    assert np.isnan(found["value"][0])


def test_ferric_model_refuses_nonsense():
    with pytest.raises(ValueError, match="iron as FeO"):
        kress_carmichael({"SiO2": 50.0, "Fe2O3": 10.0}, 1473.0, 0.0, -8.0, 0.0, 0.0)
    with pytest.raises(ValueError, match="finite"):
        kress_carmichael({"SiO2": 50.0, "FeO": 10.0}, np.nan, 0.0, -8.0, 0.0, 0.0)
    with pytest.raises(ValueError, match="ferric share"):
        FerricShare(1.2, 0.0, "stated")
