"""Oxides: the strict parser, factors against two libraries, round trips, totals."""

import molmass
import numpy as np
import periodictable
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.chemistry.elements import SYMBOLS, atomic_weight
from tieline.chemistry.oxides import (
    cation_charges,
    element_fraction,
    iron_to_sum,
    is_reported_oxide,
    oxide_formula,
    oxide_from_element,
    oxide_total,
    oxygen_equivalent,
    parse_oxide,
    usual_oxide,
    wt_percent_per_ppm,
)

CATIONS = sorted(SYMBOLS - {"O"})
oxides = st.builds(
    oxide_formula, st.sampled_from(CATIONS), cations=st.integers(1, 12), oxygens=st.integers(1, 20)
)
REPORTED = sorted({oxide_from_element(symbol, q) for symbol in CATIONS for q in cation_charges(symbol)})


@given(oxides, st.floats(1e-6, 100.0))
def test_oxide_to_element_and_back(formula: str, oxide_wt: float) -> None:
    fraction = element_fraction(formula)
    oxide = parse_oxide(formula)
    element_ppm = oxide_wt * fraction * 1e4
    cation_moles = element_ppm / atomic_weight(oxide.element)
    oxygen_ppm = cation_moles * oxide.oxygens / oxide.cations * atomic_weight("O")
    assert (element_ppm + oxygen_ppm) / 1e4 == pytest.approx(oxide_wt, rel=1e-12)
    assert element_ppm / fraction / 1e4 == pytest.approx(oxide_wt, rel=1e-12)


@given(oxides)
def test_formula_survives_parsing(formula: str) -> None:
    oxide = parse_oxide(formula)
    assert oxide.formula == formula
    assert oxide_formula(oxide.element, oxide.cations, oxide.oxygens) == formula


@pytest.mark.parametrize("formula", REPORTED)
def test_element_fraction_agrees_with_two_libraries(formula: str) -> None:
    element = parse_oxide(formula).element
    by_periodictable = periodictable.formula(formula).mass_fraction[getattr(periodictable, element)]
    assert element_fraction(formula) == pytest.approx(by_periodictable, rel=1e-5)
    by_molmass = molmass.Formula(formula).composition()[element].fraction
    assert element_fraction(formula) == pytest.approx(by_molmass, rel=1.5e-4)


@pytest.mark.parametrize(
    "text",
    ["", "FeOT", "FeO*", "O2", "SIO2", "mgo", "CaCO3", "CaSO4.2H2O", "Fe2", "2FeO", "Fe 2O3", "Fe0O", "SiO02",
     "XO2", "OH", "Fe2O3 ", "Si O2", "SiO₂"],
)  # fmt: skip
def test_parser_refuses(text: str) -> None:
    with pytest.raises(ValueError, match=r"formula|cation|element"):
        parse_oxide(text)


@given(st.text(max_size=12))
def test_parser_reads_or_says_no(text: str) -> None:
    try:
        oxide = parse_oxide(text)
    except ValueError:
        return
    assert oxide.element in SYMBOLS
    assert 0 < oxide.element_fraction <= 1


@pytest.mark.parametrize("symbol", ["S", "F", "Cl", "Ni"])
def test_bare_element(symbol: str) -> None:
    oxide = parse_oxide(symbol)
    assert (oxide.formula, oxide.oxygens, oxide.element_fraction) == (symbol, 0, 1.0)


def test_explicit_subscript_one_is_dropped() -> None:
    assert parse_oxide("Mg1O1").formula == "MgO"


@pytest.mark.parametrize("formula", [*REPORTED, "Fe3O4"])
def test_reported_oxides(formula: str) -> None:
    assert is_reported_oxide(parse_oxide(formula))


@pytest.mark.parametrize("formula", ["SiO3", "CO", "HO", "NaO", "Mg2O2", "Na3O4", "Ni"])
def test_formulas_nobody_reports(formula: str) -> None:
    assert not is_reported_oxide(parse_oxide(formula))


@pytest.mark.parametrize(
    ("element", "oxide"),
    [("Si", "SiO2"), ("Fe", "FeO"), ("Mn", "MnO"), ("P", "P2O5"), ("V", "V2O3"), ("Cr", "Cr2O3"), ("Ce", "Ce2O3"),
     ("Eu", "Eu2O3"), ("Tb", "Tb2O3"), ("Y", "Y2O3"), ("S", "SO3"), ("F", "F"), ("Cl", "Cl"), ("Pt", "Pt"),
     ("H", "H2O"), ("C", "CO2"), ("U", "UO2"), ("K", "K2O")],
)  # fmt: skip
def test_usual_oxide(element: str, oxide: str) -> None:
    assert usual_oxide(element) == oxide


def test_usual_oxide_can_be_overridden_for_its_own_element_only() -> None:
    assert usual_oxide("Fe", {"Fe": "Fe2O3"}) == "Fe2O3"
    assert usual_oxide("Mn", {"Fe": "Fe2O3"}) == "MnO"
    with pytest.raises(ValueError, match="no oxide of Fe"):
        usual_oxide("Fe", {"Fe": "MgO"})
    with pytest.raises(ValueError, match="symbol"):
        usual_oxide("Xx")


@pytest.mark.parametrize(("element", "charge"), [("O", 2), ("Fe", 0), ("Fe", -1), ("Xx", 2)])
def test_no_oxide_of(element: str, charge: int) -> None:
    with pytest.raises(ValueError, match="no oxide"):
        oxide_from_element(element, charge)


def test_oxygen_equivalents_exist_for_anions_only() -> None:
    assert oxygen_equivalent("F") == pytest.approx(15.999 / 2 / 18.998403162, rel=1e-12)
    with pytest.raises(ValueError, match="oxygen equivalent"):
        oxygen_equivalent("Br")


def test_total_of_an_analysis_given_in_ppm_is_the_sum_of_its_oxides() -> None:
    names = ["SiO2", "FeO", "MgO", "Na2O", "SO3", "F"]
    wt = np.array([[45.0, 10.0, 30.0, 2.0, 0.5, 1.2], [60.0, 5.0, 3.0, 4.0, 0.1, 0.0]])
    elements = [parse_oxide(name).element for name in names]
    ppm = wt * [element_fraction(name) * 1e4 for name in names]
    expected = wt.sum(axis=1) - 0.42106170 * wt[:, -1]
    assert oxide_total(ppm, elements) == pytest.approx(expected, rel=1e-8)


def test_sulfur_as_sulfide_replaces_oxygen() -> None:
    sulfide = oxide_total(np.array([[1e4]]), ["S"], {"S": "S"})
    assert sulfide == pytest.approx([1.0 - 0.49903], abs=1e-5)
    assert oxide_total(np.array([[1e4]]), ["S"]) == pytest.approx([1.0 / 0.40046], rel=2e-5)


def test_total_takes_missing_values_as_not_measured() -> None:
    ppm = np.array([[1e5, np.nan], [np.nan, np.nan]])
    total = oxide_total(ppm, ["Si", "Mg"])
    assert total[0] == pytest.approx(10.0 / element_fraction("SiO2"))
    assert np.isnan(total[1])


def test_total_refuses_oxygen_and_wrong_shapes() -> None:
    with pytest.raises(ValueError, match="oxygen"):
        oxide_total(np.ones((1, 2)), ["Si", "O"])
    with pytest.raises(ValueError, match="shape"):
        oxide_total(np.ones((1, 3)), ["Si", "Mg"])
    with pytest.raises(ValueError, match="symbol"):
        wt_percent_per_ppm(["Xx"])


@pytest.mark.parametrize(
    ("columns", "summed"),
    [(["FeO"], ("FeO",)), (["Fe2O3", "FeO"], ("FeO", "Fe2O3")), (["FeO", "Fe2O3", "FeOT"], ("FeOT",)),
     (["Fe2O3T", "FeO"], ("Fe2O3T",)), (["MgO"], ()), ([], ())],
)  # fmt: skip
def test_iron_columns_that_add_up_to_the_iron(columns: list[str], summed: tuple[str, ...]) -> None:
    assert iron_to_sum(columns) == summed
