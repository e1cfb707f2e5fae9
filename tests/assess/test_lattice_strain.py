"""Series of elements and their curves from partition tables: who enters, what is held, and what is said."""

import numpy as np
import pandas as pd
import pytest

from assess.frames import covariance, partition
from tieline.assess.lattice_fits import fit_series
from tieline.assess.lattice_series import collect_series, pair_rows
from tieline.assess.lattice_strain import lattice_strain_tables
from tieline.chemistry.radii import ionic_radius
from tieline.statistics.lattice_strain import Prior, lattice_strain
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import ratio_dof

RARE_EARTHS = ("La", "Ce", "Nd", "Sm", "Gd", "Dy", "Y", "Er", "Yb", "Lu", "Sc")


def curve(elements=RARE_EARTHS, fraction=0.0, seed=1, error=0.03, charge=3, parameters=(0.5, 1.02, 290.0)):
    rng = np.random.default_rng(seed)
    radius = np.array([ionic_radius(element, charge, 8) for element in elements])
    D = lattice_strain(radius, 1573.15, *parameters)
    D = (D + fraction * (1 - D)) * (1 + error * rng.standard_normal(len(D)))
    return [{"element": e, "D": d, "D_sd": error * d} for e, d in zip(elements, D, strict=True)]


def tables(rows, temperature=1300.0, shared=0.0, **settings):
    table = partition(rows, alpha="clinopyroxene")
    return lattice_strain_tables(table, covariance(table, shared), {"A": temperature}, **settings)


def test_rows_of_pairs_come_in_the_order_of_pairs_and_of_the_table():
    table = partition(curve()[:2])
    names = table["element"].tolist()
    second = table.assign(experiment="0")
    both = pd.concat([table.iloc[[1]], second, table.iloc[[0]]], ignore_index=True)
    found = [(keys[0], [row["element"] for row in rows]) for keys, rows in pair_rows(both)]
    assert found == [("0", names), ("A", names[::-1])]
    assert not list(pair_rows(both.iloc[:0]))


def test_curve_is_recovered_from_a_table():
    found = tables(curve(), shared=0.02)
    row = found.curves.iloc[0]
    assert row["verdict"] == "fitted"
    for name, truth in (("D0", 0.5), ("r0_angstrom", 1.02), ("E_GPa", 290.0)):
        assert row[f"{name}_lo"] < truth < row[f"{name}_hi"]
        assert row[f"{name}_status"] == "fitted"
    assert row["held"] == ""
    assert found.checks.set_index("subject").loc["3+ curve", "verdict"] == "consistent"
    assert "no proof of equilibrium" in found.checks["detail"][0]


def test_unmeasured_elements_are_predicted_and_europium_is_compared():
    truth = float(lattice_strain(np.array([ionic_radius("Eu", 3, 8)]), 1573.15, 0.5, 1.02, 290.0)[0])
    rows = [*curve(), {"element": "Eu", "D": 1.6 * truth, "D_sd": 0.03 * truth}]
    elements = tables(rows).elements.set_index("element")
    assert elements.loc["Eu", "role"] == "compared"
    assert elements.loc["Eu", "sigmas"] > 5
    assert elements.loc["Ho", "role"] == "predicted"
    assert elements.loc["Ho", "curve_lo"] < 0.4989 < elements.loc["Ho", "curve_hi"]
    fitted = elements[elements["role"] == "fitted"]
    assert sorted(fitted.index) == sorted(RARE_EARTHS)
    assert np.abs(fitted["sigmas"]).max() < 4
    assert fitted["deleted_sigmas"].notna().all()
    named = tables(rows, charges={"Eu": 3}).elements.set_index("element")
    assert named.loc["Eu", "role"] == "fitted"


def test_errors_from_few_spots_widen_intervals_by_their_degrees_of_freedom():
    few, many = (tables([{**row, "dof": dof} for row in curve()]).curves.iloc[0] for dof in (3.0, 3000.0))
    assert few["E_GPa_hi"] - few["E_GPa_lo"] > 1.05 * (many["E_GPa_hi"] - many["E_GPa_lo"])


@pytest.mark.parametrize("share", [0.1, 0.5, 1.0])
def test_degrees_of_freedom_of_the_spots_are_told_from_those_of_the_whole(share):
    alpha, beta = (
        MeanEstimate(np.ones(1), np.array([variance]), np.zeros(1), np.array([6.0]), np.array([7]))
        for variance in (0.02, 1e-9)
    )
    shared = np.sqrt(0.01 * (1 / share - 1)) * np.ones(1)
    whole = ratio_dof(alpha, beta, shared, shared)
    rows = [
        {**row, "dof": whole[0], "share_counting": share / 2, "share_spread": share / 2} for row in curve()
    ]
    found = collect_series(dict(pair_rows(partition(rows)))["A", "olivine", "glass"], {}, 3, 8).data.dof
    np.testing.assert_allclose(
        found, 11 * 6.0, rtol=1e-3
    )  # spots that scatter alike have those of all together


def test_a_charge_that_was_given_moves_the_element():
    rows = [{"element": e, "D": d} for e, d in (("Ca", 1.5), ("Sr", 0.1), ("Mg", 3.0), ("Eu", 0.2))]
    found = tables(rows, charges={"Eu": 2}).elements.set_index("element")
    assert found.loc["Eu", "charge"] == 2
    assert found.loc["Eu", "radius_angstrom"] == ionic_radius("Eu", 2, 8)


def test_missing_radii_are_reported():
    found = tables([*curve(), {"element": "Ga", "D": 0.4}])
    assert "Ga: no radius for charge 3 and coordination 8" in found.curves["remarks"][0]


def test_limits_enter_and_are_not_numbers():
    rows = curve()
    rows[0] = {"element": "La", "kind": "upper-limit", "D_hi": 0.06}
    row = tables(rows).curves.iloc[0]
    without = tables(rows[1:]).curves.iloc[0]
    assert (row["n_values"], row["n_limits"]) == (10, 1)
    assert row["E_GPa"] > without["E_GPa"]  # a limit below the curve steepens it


def test_a_prior_steps_in_and_is_named():
    pair = [{"element": "Ca", "D": 1.8}, {"element": "Mg", "D": 3.0}]
    row = tables(pair).curves.iloc[0]
    assert row["E_GPa_status"] == "prior"
    assert row["held"].startswith("E 1")
    given = tables(pair, priors={("clinopyroxene", 2): {"E": Prior(250.0, 0.0)}}).curves.iloc[0]
    assert (given["E_GPa"], given["E_GPa_status"]) == (pytest.approx(250.0), "fixed")
    full = tables(curve(), priors={("clinopyroxene", 3): {"E": Prior(100.0, 1.0)}}).curves.iloc[0]
    assert full["held"] == ""
    assert full["E_GPa"] > 250


def test_one_value_with_everything_held_gives_a_level_only_with_r0():
    table = partition([{"element": "Y", "D": 0.5}], alpha="clinopyroxene")
    series = collect_series(dict(pair_rows(table))["A", "clinopyroxene", "glass"], {}, 3, 8)
    assert fit_series(series, 1573.15).fit.verdict == "cannot tell"
    held = fit_series(series, 1573.15, {"r0": Prior(1.02, 0.01)})
    assert held.fit.verdict == "fitted"
    assert held.fit.r0.status == "prior"
    assert "r0" in held.held


def test_overlap_is_reported_beside_the_curve():
    rows = curve(parameters=(0.15, 0.96, 400.0), fraction=0.004, error=0.04)
    found = tables(rows)
    check = found.checks.set_index("subject").loc["3+ overlap"]
    assert check["verdict"] == "differs"
    assert "if one curve holds for all of them" in check["detail"]
    row = found.curves.iloc[0]
    assert row["overlap_lo"] < 0.004 < row["overlap_hi"]
    elements = found.elements.set_index("element")
    assert elements.loc["La", "corrected_D"] < 0.5 * elements.loc["La", "D"]


def test_without_temperature_or_site_there_is_no_curve_and_it_is_said():
    found = tables(curve(), temperature=np.nan)
    assert found.curves.empty
    assert found.checks["verdict"].tolist() == ["cannot tell"]
    assert "temperature" in found.checks["detail"][0]
    table = partition(curve(), alpha="metal")
    metal = lattice_strain_tables(table, covariance(table), {"A": 1300.0})
    assert "coordination" in metal.checks["detail"][0]
    assert not lattice_strain_tables(
        table, covariance(table), {"A": 1300.0}, coordination={"metal": 8}
    ).curves.empty


def test_zones_share_the_site_of_their_phase():
    table = partition(curve(), alpha="clinopyroxene (rim)")
    assert lattice_strain_tables(table, covariance(table), {"A": 1300.0}).curves["verdict"].tolist() == [
        "fitted"
    ]


def test_impossible_covariances_are_left_out_and_named():
    table = partition(curve(), alpha="clinopyroxene")
    wrong = covariance(table, shared_relative_sd=0.5)
    found = lattice_strain_tables(table, wrong, {"A": 1300.0})
    assert found.curves["verdict"].tolist() == ["fitted"]
    assert "contradict" in found.curves["remarks"][0]


def test_empty_table():
    table = partition([{"element": "La", "D": 0.1}]).iloc[:0]
    found = lattice_strain_tables(table, covariance(table), {})
    assert found.curves.empty
    assert found.elements.empty
    assert found.checks.empty


def test_between_two_crystals_there_is_no_curve():
    table = partition(curve(), alpha="orthopyroxene", beta="clinopyroxene (rim)")
    found = lattice_strain_tables(table, covariance(table), {"A": 1300.0})
    assert found.curves.empty
    assert found.checks["verdict"].tolist() == ["cannot tell"]
    assert "two curves, one over the other" in found.checks["detail"][0]


def test_elements_without_a_radius_are_named_where_there_is_no_curve():
    found = tables(curve(), coordination={"clinopyroxene": 5}, least_values=4)
    assert found.curves.empty
    assert "3+ none, no radius in coordination 5 for Ce, Dy" in found.checks["detail"][0]


def test_values_all_above_one_leave_the_overlap_open_and_say_so():
    rows = [{**row, "D": 1 + 40 * row["D"], "D_sd": 1.2 * row["D"]} for row in curve()]
    floor = tables(rows).checks.set_index("subject").loc["3+ overlap"]
    assert floor["verdict"] == "cannot tell"
    assert floor["detail"].endswith("the values set no limit to the overlap, or none to E besides it.")


def test_a_value_that_is_not_above_zero_says_why_it_is_of_no_use():
    found = tables([*curve(), {"element": "Tb", "D": -0.01, "D_sd": 0.02}, {"element": "Al", "D": 0.1}])
    assert "Tb: its D is not above zero, or has no error" in found.curves["remarks"][0]
    assert found.checks["detail"][0].endswith("No radius in coordination 8 for Al.")


def test_an_overlap_that_may_be_none_has_an_interval_down_to_none():
    """Four values close together: a floor under a narrow curve, and no floor under a wide one, with a barrier between."""
    D = {"Y": 0.3, "Ho": 0.3, "Dy": 0.31, "Er": 0.29}
    found = tables([{"element": element, "D": value} for element, value in D.items()])
    row = found.curves.iloc[0]
    assert row["overlap"] > 0.05
    assert row["overlap_p"] > 0.1
    assert row["overlap_lo"] == 0.0
    floor = found.checks.set_index("subject").loc["3+ overlap"]
    assert "Held by what is known: E" in floor["detail"]


def test_values_that_contradict_the_estimate_of_the_modulus_say_so():
    found = tables([{"element": element, "D": 0.3, "D_sd": 0.006} for element in RARE_EARTHS])
    assert "The values contradict what is known of E beforehand" in found.checks["detail"][0]
