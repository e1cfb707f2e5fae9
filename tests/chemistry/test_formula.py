"""Formula units: invariants, uncertainty against Monte Carlo, ferric iron of known minerals."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.chemistry.elements import atomic_weight
from tieline.chemistry.formula import (
    atoms_from_oxides,
    atoms_from_ppm,
    chromium_number,
    feldspar_components,
    ferric_iron,
    mg_number,
    moles,
    oxygen_of_ferric_iron,
    pyroxene_components,
)
from tieline.chemistry.oxides import element_fraction, parse_oxide

OXIDES = ["SiO2", "TiO2", "Al2O3", "FeO", "MgO", "CaO", "Na2O"]
AUGITE = np.array([[50.1, 0.6, 3.2, 7.9, 15.8, 20.9, 0.4]])
SIGMA = np.array([[0.25, 0.02, 0.05, 0.1, 0.15, 0.18, 0.03]])

rows = st.lists(st.floats(0.01, 60.0), min_size=7, max_size=7)


def weights(moles_of: dict[str, float]) -> tuple[list[str], np.ndarray]:
    """wt% of a mineral written as moles of oxides."""
    masses = np.array([n * parse_oxide(name).molar_mass for name, n in moles_of.items()])
    return list(moles_of), 100.0 * masses[np.newaxis, :] / masses.sum()


@given(rows, st.floats(0.01, 50.0), st.sampled_from([4.0, 6.0, 23.0]))
def test_formula_does_not_depend_on_the_total_of_the_analysis(
    row: list[float], factor: float, oxygens: float
) -> None:
    wt = np.array([row])
    one, other = (atoms_from_oxides(w, OXIDES, oxygens) for w in (wt, factor * wt))
    assert one.atoms == pytest.approx(other.atoms, rel=1e-12)
    assert one.cation_sum == pytest.approx(other.cation_sum, rel=1e-12)


@given(rows)
def test_charges_balance(row: list[float]) -> None:
    units = atoms_from_oxides(np.array([row]), OXIDES, 6)
    charges = [2 * oxide.oxygens / oxide.cations for oxide in units.oxides]
    assert units.atoms @ charges == pytest.approx([12.0], rel=1e-12)


@given(rows)
def test_element_ppm_gives_the_formula_of_the_oxides(row: list[float]) -> None:
    wt, sigma = np.array([row]), 0.01 * np.array([row])
    per_oxide = np.array([element_fraction(name) * 1e4 for name in OXIDES])
    elements = [parse_oxide(name).element for name in OXIDES]
    by_oxide = atoms_from_oxides(wt, OXIDES, 6, sigma)
    by_ppm = atoms_from_ppm(wt * per_oxide, elements, 6, sigma * per_oxide)
    assert by_ppm.atoms == pytest.approx(by_oxide.atoms, rel=1e-12)
    assert by_ppm.cation_sum_sigma == pytest.approx(by_oxide.cation_sum_sigma, rel=1e-9)


def test_uncertainty_is_that_of_a_monte_carlo() -> None:
    units = atoms_from_oxides(AUGITE, OXIDES, 6, SIGMA)
    draws = np.random.default_rng(20260).normal(AUGITE, SIGMA, size=(100_000, 7))
    simulated = atoms_from_oxides(draws, OXIDES, 6)
    # The Monte Carlo error of a standard deviation from 100,000 draws is 0.22 %.
    assert units.cation_sum_sigma == pytest.approx([simulated.cation_sum.std()], rel=0.01)
    assert units.sigma[0] == pytest.approx(simulated.atoms.std(axis=0), rel=0.01)
    # Silicon is less uncertain than its wt%, since its own error also moves the oxygen it is normalised to.
    assert units.sigma[0, 0] / units.atoms[0, 0] < 0.6 * SIGMA[0, 0] / AUGITE[0, 0]


def test_missing_values_add_nothing_and_unknown_sigmas_are_not_taken_for_zero() -> None:
    wt = np.vstack([AUGITE, AUGITE, np.full((1, 7), np.nan)])
    wt[0, 1] = np.nan
    sigma = np.vstack([SIGMA, SIGMA, SIGMA])
    sigma[1, 2] = np.nan
    units = atoms_from_oxides(wt, OXIDES, 6, sigma)
    without = atoms_from_oxides(np.delete(AUGITE, 1, axis=1), [o for o in OXIDES if o != "TiO2"], 6)
    assert units.cation_sum[0] == pytest.approx(without.cation_sum[0], rel=1e-12)
    assert np.isnan(units.atoms[0, 1])
    assert np.isfinite(units.cation_sum_sigma[0])
    assert np.isnan(units.cation_sum_sigma[1])
    assert np.isnan(units.cation_sum[2])
    assert np.isnan(atoms_from_oxides(AUGITE, OXIDES, 6).cation_sum_sigma[0])


def test_water_and_halogens_are_reported_and_not_counted() -> None:
    names, wt = weights({"K2O": 0.5, "MgO": 3.0, "Al2O3": 0.5, "SiO2": 3.0, "H2O": 0.5})
    wt = np.hstack([wt, wt[:, -1:] * atomic_weight("F") / parse_oxide("H2O").molar_mass * 2])
    sigma = np.full_like(wt, 0.1)
    sigma[0, -2:] = np.nan  # what is not counted does not make the sum uncertain
    units = atoms_from_oxides(wt, [*names, "F"], 11, sigma)  # phlogopite K Mg3 Al Si3 O10 (OH, F)2
    assert units.cation_sum == pytest.approx([8.0], rel=1e-12)
    assert units.of("H") == pytest.approx([1.0], rel=1e-12)
    assert units.of("F") == pytest.approx([1.0], rel=1e-12)
    assert np.isfinite(units.cation_sum_sigma[0])


def test_two_columns_of_one_element_add_up() -> None:
    names, wt = weights({"FeO": 1.0, "Fe2O3": 1.0})
    units = atoms_from_oxides(wt, names, 4)
    assert units.of("Fe") == pytest.approx([3.0], rel=1e-12)
    assert units.of("Mg") == pytest.approx([0.0])


@pytest.mark.parametrize(
    ("oxides_as_feo", "oxygens", "cations", "ferric", "ferrous"),
    [
        ({"FeO": 3.0}, 4, 3.0, 2.0, 1.0),  # magnetite
        ({"FeO": 2.0, "TiO2": 1.0}, 4, 3.0, 0.0, 2.0),  # ulvöspinel
        ({"Na2O": 0.5, "FeO": 1.0, "SiO2": 2.0}, 6, 4.0, 1.0, 0.0),  # aegirine
        ({"CaO": 3.0, "FeO": 2.0, "SiO2": 3.0}, 12, 8.0, 2.0, 0.0),  # andradite
        ({"CaO": 1.0, "FeO": 1.0, "SiO2": 2.0}, 6, 4.0, 0.0, 1.0),  # hedenbergite
        ({"FeO": 1.3, "TiO2": 0.7}, 3, 2.0, 0.6, 0.7),  # ilmenite with 30 mol% hematite
    ],
)
def test_ferric_iron_of_ideal_minerals(
    oxides_as_feo: dict[str, float], oxygens: float, cations: float, ferric: float, ferrous: float
) -> None:
    names, wt = weights(oxides_as_feo)
    result = ferric_iron(atoms_from_oxides(wt, names, oxygens), cations)
    assert result.fe3 == pytest.approx([ferric], abs=1e-9)
    assert result.fe2 == pytest.approx([ferrous], abs=1e-9)
    assert result.atoms.sum() == pytest.approx(cations, abs=1e-9)
    assert result.fraction == pytest.approx([ferric / (ferric + ferrous)], abs=1e-9)


def test_ferric_iron_stays_between_none_and_all_and_says_what_was_asked() -> None:
    wt = np.array([[60.0, 2.0, 35.0], [30.0, 2.0, 60.0]])  # too many and too few silicon atoms for a pyroxene
    result = ferric_iron(atoms_from_oxides(wt, ["SiO2", "FeO", "MgO"], 6, 0.01 * wt), 4.0)
    assert result.balance[0] < 0.0 == result.fe3[0]
    assert result.balance[1] > result.fe3[1]
    assert result.fe2[1] == pytest.approx(0.0, abs=1e-12)
    assert result.fraction == pytest.approx([0.0, 1.0])
    charges = result.atoms[1] @ [4.0, 3.0, 2.0]
    assert charges == pytest.approx(12.0, rel=1e-12)


def test_uncertainty_of_ferric_iron_is_that_of_a_monte_carlo() -> None:
    names, wt = weights({"FeO": 2.6, "TiO2": 0.4, "MgO": 0.2})
    sigma = 0.01 * wt
    result = ferric_iron(atoms_from_oxides(wt, names, 4, sigma), 3.0)
    draws = np.random.default_rng(7).normal(wt, sigma, size=(50_000, 3))
    simulated = ferric_iron(atoms_from_oxides(draws, names, 4), 3.0)
    assert result.balance_sigma == pytest.approx([simulated.balance.std()], rel=0.02)


def test_ferric_iron_needs_all_iron_as_feo() -> None:
    with pytest.raises(ValueError, match="FeO"):
        ferric_iron(atoms_from_oxides(np.array([[1.0, 1.0]]), ["FeO", "Fe2O3"], 4), 3.0)


def test_total_gains_the_oxygen_of_ferric_iron() -> None:
    gain = oxygen_of_ferric_iron(np.array([10.0]), np.array([1.0]))
    assert gain == pytest.approx([10.0 * (element_fraction("FeO") / element_fraction("Fe2O3") - 1.0)])


def test_molar_ratios() -> None:
    ppm = np.array([1000.0])
    assert moles(ppm, "Mg") == pytest.approx([0.1 / 24.305])
    assert mg_number(np.array([1.8]), np.array([0.2])) == pytest.approx([0.9])
    assert chromium_number(np.array([0.3]), np.array([0.7])) == pytest.approx([0.3])
    an, ab, orthoclase = feldspar_components(np.array([0.5]), np.array([0.4]), np.array([0.1]))
    assert [an[0], ab[0], orthoclase[0]] == pytest.approx([0.5, 0.4, 0.1])
    wo, en, fs = pyroxene_components(np.array([1.0]), np.array([2.0]), np.array([1.0]))
    assert [wo[0], en[0], fs[0]] == pytest.approx([0.25, 0.5, 0.25])
    assert np.isnan(mg_number(np.array([0.0]), np.array([0.0]))[0])


@pytest.mark.parametrize(
    ("wt", "names", "oxygens", "message"),
    [
        (np.ones((1, 2)), ["SiO2"], 4, "shape"),
        (np.ones(2), ["SiO2", "MgO"], 4, "shape"),
        (np.ones((1, 1)), ["SiO2"], 0, "positive"),
        (np.ones((1, 1)), ["Si"], 4, "no oxide"),
        (np.ones((1, 1)), ["SiO2*"], 4, "formula"),
    ],
)
def test_refused(wt: np.ndarray, names: list[str], oxygens: float, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        atoms_from_oxides(wt, names, oxygens)
    if message == "positive":
        with pytest.raises(ValueError, match="sigma_wt"):
            atoms_from_oxides(wt, names, 4, np.ones((2, 1)))
