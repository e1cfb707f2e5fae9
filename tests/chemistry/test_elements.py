"""Atomic weights against two maintained libraries; isotopes of headers."""

import molmass
import periodictable
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.chemistry.elements import (
    ATOMIC_NUMBER,
    RARE_EARTHS,
    SYMBOLS,
    atomic_weight,
    atomic_weight_uncertainty,
    isotopes,
    parse_isotope,
)

# Revised in 2024, after the table periodictable 2.1 carries.
REVISED = {"Gd", "Lu", "Zr"}
# molmass gives means over isotopes, Hf and Yb of an earlier table, and no range for elements of variable weight.
OTHER_TABLE_IN_MOLMASS = {"H": 6e-5, "B": 1e-4, "S": 2e-4, "Cl": 9e-5, "Ar": 6e-5, "Hf": 3e-5, "Yb": 6e-5}


@pytest.mark.parametrize("symbol", sorted(SYMBOLS - REVISED))
def test_weight_and_stated_uncertainty_are_those_of_periodictable(symbol: str) -> None:
    element = getattr(periodictable, symbol)
    assert atomic_weight(symbol) == element.mass
    assert atomic_weight_uncertainty(symbol) * 3**0.5 == pytest.approx(element._mass_unc, rel=1e-12)
    assert ATOMIC_NUMBER[symbol] == element.number


@pytest.mark.parametrize("symbol", sorted(REVISED))
def test_revised_weight_agrees_with_the_earlier_one_within_both_uncertainties(symbol: str) -> None:
    element = getattr(periodictable, symbol)
    assert atomic_weight(symbol) != element.mass
    both = element._mass_unc + atomic_weight_uncertainty(symbol) * 3**0.5
    assert abs(atomic_weight(symbol) - element.mass) < both
    assert atomic_weight(symbol) == pytest.approx(element.mass, rel=2.5e-5)


@pytest.mark.parametrize("symbol", sorted(SYMBOLS))
def test_weight_agrees_with_molmass(symbol: str) -> None:
    tolerance = OTHER_TABLE_IN_MOLMASS.get(symbol, 2.6e-5)
    assert atomic_weight(symbol) == pytest.approx(molmass.ELEMENTS[symbol].mass, rel=tolerance)


def test_every_element_with_a_standard_weight_is_there() -> None:
    without = {"Tc", "Pm", "Po", "At", "Rn", "Fr", "Ra", "Ac"}
    up_to_uranium = {periodictable.elements[number].symbol for number in range(1, 93)}
    assert up_to_uranium - without == SYMBOLS
    assert len(RARE_EARTHS) == 14


@pytest.mark.parametrize("symbol", sorted(SYMBOLS - {"U"}))
def test_natural_isotopes_are_those_of_periodictable(symbol: str) -> None:
    element = getattr(periodictable, symbol)
    natural = {mass for mass in element.isotopes if element[mass].abundance > 0}
    assert natural <= isotopes(symbol)
    assert isotopes(symbol) <= set(element.isotopes)
    assert isotopes(symbol) == natural or symbol in ("Pb", "Th")


@pytest.mark.parametrize("text", ["Sr88", "88Sr", "Sr 88", "88 Sr", "Sr-88", "Sr_88", " Sr88 "])
def test_isotope_spellings(text: str) -> None:
    assert parse_isotope(text) == ("Sr", 88)


@pytest.mark.parametrize(
    "text",
    ["FeOT", "T", "D2O", "C1", "P3", "K2O", "SiO2", "Sr", "88", "Sr89", "88 Sr 87", "sr88", "Tc99", ""],
)
def test_what_is_no_isotope(text: str) -> None:
    assert parse_isotope(text) is None


@given(st.sampled_from(sorted((s, a) for s in SYMBOLS for a in isotopes(s))))
def test_every_isotope_is_read_from_both_orders(isotope: tuple[str, int]) -> None:
    symbol, mass = isotope
    assert parse_isotope(f"{symbol}{mass}") == isotope
    assert parse_isotope(f"{mass}{symbol}") == isotope


def test_unknown_symbol_is_an_error() -> None:
    for function in (atomic_weight, atomic_weight_uncertainty, isotopes):
        with pytest.raises(KeyError, match="Xx"):
            function("Xx")
