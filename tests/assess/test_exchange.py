"""Exchange coefficients: correlation, ferric iron, windows, and pairs that cannot be judged."""

import numpy as np
import pandas as pd
import pytest

from assess.frames import covariance, partition
from tieline.assess.exchange import compare, exchange_tables, ferrous_factor
from tieline.assess.exchange_coefficients import exchange_coefficient
from tieline.assess.ferric import FerricShare, kress_carmichael
from tieline.statistics.means import phase_means


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
        (0.4, np.inf, "differs"),
        (0.1, np.inf, "cannot tell"),
        (np.nan, np.nan, "cannot tell"),
    ],
)
def test_verdicts(low, high, verdict):
    assert compare(low, high, 0.27, 0.33) == verdict


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
        windows={("olivine", "Ni-Mg", None): (2.2, 2.8, "ours")},
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


def test_the_ferric_share_counts_in_the_uncertainty_of_the_table():
    table = partition([{"element": "Fe", "D": 1.2}, {"element": "Mg", "D": 4.2}])
    sure, unsure = (
        exchange_tables(table, covariance(table), ferric={("A", "glass"): FerricShare(0.20, sd, "stated")})[
            0
        ].iloc[0]
        for sd in (0.0, 0.08)
    )
    assert sure["K_D"] == unsure["K_D"] == pytest.approx(1.2 / 4.2 / 0.8)
    relative = np.array([one["K_D_sd"] / one["K_D"] for one in (sure, unsure)])
    assert relative[1] == pytest.approx(np.hypot(relative[0], 0.08 / 0.80), rel=1e-6)
    assert unsure["K_D_hi"] - unsure["K_D_lo"] > 1.5 * (sure["K_D_hi"] - sure["K_D_lo"])


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


def simulated(rng, truth, spread, counting, correlation, n=(6, 6), cases=1000, experiments="X"):
    """Partition rows of Fe and Mg, and their spot correlations, of many sessions of one phase over glass.

    truth: (phase, element) means; spread: relative sd between spots of alpha's elements, correlated; counting: relative.
    """
    columns = {"experiment": [f"{experiments}{case}" for case in range(cases)]}
    for place, (side, k) in enumerate(zip(("alpha", "beta"), n, strict=True)):
        sd = np.array(spread[place])
        matrix = np.outer(sd, sd) * np.array([[1, correlation[place]], [correlation[place], 1]])
        real = rng.multivariate_normal(np.zeros(2), matrix, (cases, k))
        spots = truth[place] * (1 + real) * (1 + counting * rng.standard_normal((cases, k, 2)))
        for element, which in enumerate(("Fe", "Mg")):
            group = np.repeat(np.arange(cases), k)
            means = phase_means(
                spots[:, :, element].ravel(),
                np.full(cases * k, counting * truth[place][element]),
                group,
                cases,
            )
            columns |= {
                (f"mean_{side}_ppm", which): means.mean, (f"se_{side}_ppm", which): np.sqrt(means.variance),
                (f"counting_se_{side}_ppm", which): np.sqrt(means.counting_variance), (f"dof_{side}", which): means.dof,
                (f"n_independent_{side}", which): means.n,
            }  # fmt: skip
        off = spots - spots.mean(axis=1, keepdims=True)
        columns[f"r_{side}"] = np.sum(off[..., 0] * off[..., 1], axis=1) / np.sqrt(
            np.prod(np.sum(off**2, axis=1), axis=1)
        )
    rows = [_rows_of(columns, element) for element in ("Fe", "Mg")]
    sides = [
        pd.DataFrame(
            {
                "experiment": columns["experiment"], "phase": phase, "technique": "probe", "batch": "1",
                "element_first": "Fe", "analyte_first": "Fe", "element_second": "Mg", "analyte_second": "Mg",
                "correlation": columns[f"r_{side}"], "n_common": n[place],
            }
        )
        for place, (side, phase) in enumerate((("alpha", "olivine"), ("beta", "glass")))
    ]  # fmt: skip
    return pd.concat(rows, ignore_index=True), pd.concat(sides, ignore_index=True)


def _rows_of(columns, element):
    own = {
        name[0]: values for name, values in columns.items() if isinstance(name, tuple) and name[1] == element
    }
    D = own["mean_alpha_ppm"] / own["mean_beta_ppm"]
    relative = np.hypot(*(own[f"se_{side}_ppm"] / own[f"mean_{side}_ppm"] for side in ("alpha", "beta")))
    table = pd.DataFrame(own).assign(
        experiment=columns["experiment"], alpha="olivine", beta="glass", element=element, kind="value", D=D, D_sd=D * relative,
        shared_sd_alpha=0.0, shared_sd_beta=0.0, dof=10.0,
    )  # fmt: skip
    for side in ("alpha", "beta"):
        table = table.assign(
            **{f"technique_{side}": "probe", f"batch_{side}": "1", f"analyte_{side}": element}
        )
    return table


@pytest.mark.parametrize("correlation", [(0.0, 0.0), (-0.95, 0.0), (0.95, 0.0), (-0.9, 0.9)])
@pytest.mark.parametrize("n", [(5, 5), (10, 6)])
def test_coverage_with_and_without_correlation(correlation, n):
    """1500 sessions each: zoned crystals trade Fe for Mg, totals move both together."""
    rng = np.random.default_rng(17)
    truth = np.array([[8.0, 29.0], [7.0, 6.0]])
    table, correlations = simulated(
        rng, truth, ((0.05, 0.02), (0.01, 0.01)), 0.005, correlation, n, cases=1500
    )
    found = exchange_tables(table, covariance(table.iloc[:0]), correlations)[0]
    true = (8.0 / 29.0) / (7.0 / 6.0)
    inside = (found["K_D_lo"] <= true) & (true <= found["K_D_hi"])
    assert 0.935 < inside.mean() < 0.985
    # Taken as independent the crystals that trade Fe for Mg fall short.
    if correlation == (-0.95, 0.0):
        apart = exchange_tables(table, covariance(table.iloc[:0]))[0]
        assert ((apart["K_D_lo"] <= true) & (true <= apart["K_D_hi"])).mean() < 0.93


def test_reversed_elements_give_the_reciprocal():
    table = partition([{"element": "Fe", "D": 1.2, "D_sd": 0.1}, {"element": "Mg", "D": 4.2, "D_sd": 0.1}])
    one = exchange_tables(table, covariance(table))[0].iloc[0]
    other = exchange_tables(table, covariance(table), pairs=(("Mg", "Fe"),))[0].iloc[0]
    assert other["K_D"] == pytest.approx(1 / one["K_D"])
    assert (other["K_D_lo"], other["K_D_hi"]) == pytest.approx((1 / one["K_D_hi"], 1 / one["K_D_lo"]))
    assert other["K_D_sd"] / other["K_D"] == pytest.approx(one["K_D_sd"] / one["K_D"])


def test_shared_factors_cancel_and_own_ones_do_not():
    rows = [{"element": "Fe", "D": 1.2}, {"element": "Mg", "D": 4.2}]
    factors = {"shared_sd_alpha": 0.1, "shared_sd_beta": 0.0}
    plain = partition(rows)
    wide = plain.assign(**factors, D_sd=plain["D"] * np.hypot(0.05, 0.1))
    table = exchange_tables(wide, covariance(wide))[0].iloc[0]
    assert table["K_D_sd"] / table["K_D"] == pytest.approx(np.sqrt(2) * np.hypot(0.05, 0.1), rel=1e-6)
    common = exchange_tables(wide, covariance(wide, shared_relative_sd=0.1))[0].iloc[0]
    assert common["K_D_sd"] / common["K_D"] == pytest.approx(np.sqrt(2) * 0.05, rel=1e-6)


def test_scatter_that_is_small_by_luck_is_widened_to_the_counting():
    table = partition([{"element": "Fe", "D": 1.2, "D_sd": 1e-4}, {"element": "Mg", "D": 4.2, "D_sd": 1e-4}])
    for side in ("alpha", "beta"):
        table[f"counting_se_{side}_ppm"] = 0.01 * table[f"mean_{side}_ppm"]
    found = exchange_tables(table, covariance(table))[0].iloc[0]
    assert found["K_D_hi"] / found["K_D"] - 1 == pytest.approx(1.96 * 0.02, rel=0.05)


def test_one_spot_has_a_value_without_an_interval():
    table = partition(
        [{"element": "Fe", "D": 1.2}, {"element": "Mg", "D": 4.2}], n_independent_beta=1, dof_beta=0.0
    )
    coefficients, checks = exchange_tables(table, covariance(table))
    assert coefficients["K_D"][0] == pytest.approx(1.2 / 4.2)
    assert np.isnan(coefficients["K_D_lo"][0])
    assert checks["verdict"].tolist() == ["cannot tell"]
    assert "one value" in checks["detail"][0]


def test_an_element_that_may_be_absent_bounds_the_coefficient_or_leaves_none():
    iron = {"element": "Fe", "D": 0.01, "D_sd": 0.008, "se_alpha_ppm": 0.8, "se_beta_ppm": 1.0}
    table = partition([iron, {"element": "Mg", "D": 4.2}])
    found, checks = exchange_tables(table, covariance(table))
    assert np.isnan(found["K_D"][0])
    assert found["K_D_lo"][0] == 0
    assert 0.01 / 4.2 < found["K_D_hi"][0] < 0.02
    assert checks["verdict"].tolist() == ["differs"]  # far below the window of olivine
    below = exchange_tables(table, covariance(table), pairs=(("Mg", "Fe"),))[1]
    assert "lies between" in below["detail"][0]


def test_a_mean_with_limits_goes_by_the_two_coefficients():
    table = partition([{"element": "Fe", "D": 1.2}, {"element": "Mg", "D": 4.2}])
    table.loc[0, ["mean_alpha_ppm", "se_alpha_ppm", "counting_se_alpha_ppm"]] = np.nan
    found, checks = exchange_tables(table, covariance(table))
    assert found["K_D"][0] == pytest.approx(1.2 / 4.2)
    assert "from the two D" in checks["detail"][0]


def test_a_window_holds_for_melts_unless_it_names_another_phase():
    rows = [{"element": "Fe", "D": 1.25}, {"element": "Mg", "D": 4.2}]
    both = partition([*rows, *[row | {"beta": "orthopyroxene"} for row in rows]])
    windows = {
        ("olivine", "Fe-Mg", None): (0.2, 0.4, "over melts"),
        ("olivine", "Fe-Mg", "orthopyroxene"): (1.0, 1.2, "over orthopyroxene"),
    }
    named = exchange_tables(both, covariance(both), windows=windows)[0].set_index("beta")
    assert named["window_source"].to_dict() == {"glass": "over melts", "orthopyroxene": "over orthopyroxene"}
    assert named["verdict"].to_dict() == {"glass": "consistent", "orthopyroxene": "differs"}
    melts_only = {key: value for key, value in windows.items() if key[2] is None}
    unnamed = exchange_tables(both, covariance(both), windows=melts_only)[0].set_index("beta")
    assert unnamed.loc["orthopyroxene", "window_source"] == ""


def test_without_the_ferric_share_that_was_asked_for_no_window_is_compared():
    table = partition([{"element": "Fe", "D": 1.25}, {"element": "Mg", "D": 4.2}])
    coefficients, checks = exchange_tables(
        table, covariance(table), lacking={("A", "glass"): "no log_fO2 is given"}
    )
    assert checks["verdict"].tolist() == coefficients["verdict"].tolist() == ["cannot tell"]
    assert "glass not known, no log_fO2 is given" in checks["detail"][0]


def test_a_low_coefficient_of_total_iron_names_the_ferric_share_that_would_mend_it():
    table = partition([{"element": "Fe", "D": 0.8, "D_sd": 0.008}, {"element": "Mg", "D": 4.2, "D_sd": 0.04}])
    found = exchange_tables(table, covariance(table))[0].iloc[0]
    detail = exchange_tables(table, covariance(table))[1]["detail"][0]
    assert found["verdict"] == "differs"
    share = float(detail.split("A ferric share of ")[1].split(" ")[0])
    assert found["K_D_hi"] / (1 - share) == pytest.approx(0.27, rel=0.01)
