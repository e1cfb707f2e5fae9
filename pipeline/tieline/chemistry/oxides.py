"""Oxides: a strict formula parser, element fractions, usual oxides, oxygen equivalents of anions.

The parser accepts one cation and oxygen, or a bare element, and nothing else: general formula parsers read
``FeOT`` as an iron tritium oxide and ``CaSO4.2H2O`` as O4.2 without a word.
"""

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tieline.chemistry.elements import RARE_EARTHS, SYMBOLS, atomic_weight

FloatArray = npt.NDArray[np.float64]

PPM_PER_WT_PERCENT = 1.0e4

_FORMULA = re.compile(
    r"(?P<cation>[A-Z][a-z]?)(?P<cations>[1-9][0-9]?)?(?:(?P<oxygen>O)(?P<oxygens>[1-9][0-9]?)?)?"
)

# Cation charges seen in oxides that analysts report, the usual one first: the oxide in which the element is
# counted in a total. Halogens, noble metals and noble gases have none. Common practice throughout.
_CHARGES: dict[str, tuple[int, ...]] = {
    "H": (1,), "Li": (1,), "Be": (2,), "B": (3,), "C": (4,), "Na": (1,), "Mg": (2,), "Al": (3,), "Si": (4,),
    "P": (5, 3), "S": (6, 4), "K": (1,), "Ca": (2,), "Sc": (3,), "Ti": (4, 3), "V": (3, 4, 5, 2),
    "Cr": (3, 2, 6), "Mn": (2, 3, 4), "Fe": (2, 3), "Co": (2, 3), "Ni": (2,), "Cu": (2, 1), "Zn": (2,),
    "Ga": (3,), "Ge": (4,), "As": (3, 5), "Se": (4,), "Rb": (1,), "Sr": (2,), "Y": (3,), "Zr": (4,),
    "Nb": (5,), "Mo": (6, 4), "Ag": (1,), "Cd": (2,), "In": (3,), "Sn": (4, 2), "Sb": (3, 5), "Te": (4,),
    "Cs": (1,), "Ba": (2,),
    **dict.fromkeys(RARE_EARTHS, (3,)), "Ce": (3, 4), "Pr": (3, 4), "Eu": (3, 2), "Tb": (3, 4),
    "Hf": (4,), "Ta": (5,), "W": (6, 4), "Re": (7, 4), "Tl": (1, 3), "Pb": (2, 4), "Bi": (3,), "Th": (4,),
    "Pa": (5,), "U": (4, 6, 5),
}  # fmt: skip
_COUNTED_AS_ELEMENT = frozenset({"Se", "Te", "Ag", "Re"})

# Electrons an anion carries: half of this many oxygens are replaced by one atom of it.
_ANION_CHARGE = {"F": 1, "Cl": 1, "S": 2}

# Tables also report these, whose charge per cation is no whole number.
_MIXED_VALENCE = frozenset({"Fe3O4", "Mn3O4", "U3O8", "Pr6O11", "Tb4O7"})


@dataclass(frozen=True)
class Oxide:
    """One oxide, or a bare element (``oxygens`` 0, ``cations`` 1). ``formula`` is the canonical spelling."""

    formula: str
    element: str
    cations: int
    oxygens: int

    @property
    def molar_mass(self) -> float:
        """g/mol."""
        return self.cations * atomic_weight(self.element) + self.oxygens * atomic_weight("O")

    @property
    def element_fraction(self) -> float:
        """Mass of the element per mass of the oxide; 1 for a bare element."""
        return self.cations * atomic_weight(self.element) / self.molar_mass


def parse_oxide(formula: str) -> Oxide:
    """Read ``K2O``, ``Al2O3``, ``UO2``, ``H2O``, ``SO3`` or a bare ``S``, ``F``, ``Cl``, ``Ni``.

    Strict: exact capitals, one cation, no blanks, charges, hydrates or suffixes. An explicit subscript 1 is
    accepted and dropped. Raises ValueError, with the text, for everything else, also for ``O2`` and ``Fe2``.
    """
    match = _FORMULA.fullmatch(formula)
    if match is None or match["cation"] not in SYMBOLS:
        raise ValueError(f"{formula!r} is not the formula of an oxide or the symbol of an element")
    element, cations = match["cation"], int(match["cations"] or 1)
    if match["oxygen"] is None:
        if match["cations"] is not None:
            raise ValueError(f"{formula!r} is neither an oxide nor a bare element")
        return Oxide(element, element, 1, 0)
    if element == "O":
        raise ValueError(f"{formula!r} has no cation")
    oxygens = int(match["oxygens"] or 1)
    return Oxide(oxide_formula(element, cations, oxygens), element, cations, oxygens)


def oxide_formula(element: str, cations: int, oxygens: int) -> str:
    """Spell an oxide; subscripts of 1 are left out, and ``oxygens`` 0 gives the bare symbol."""
    if oxygens == 0:
        return element
    return f"{element}{cations if cations > 1 else ''}O{oxygens if oxygens > 1 else ''}"


def is_reported_oxide(oxide: Oxide) -> bool:
    """Whether the formula is one that analysts report: the cation in a charge it takes in oxides."""
    if oxide.oxygens == 0:
        return False
    if oxide.formula in _MIXED_VALENCE:
        return True
    smallest = any((oxide.cations, oxide.oxygens) == _subscripts(q) for q in _CHARGES.get(oxide.element, ()))
    return smallest or oxide.formula == "P4O10"


def element_fraction(formula: str) -> float:
    """Mass fraction of the element in an oxide: wt% oxide × this × 1e4 = ppm element. Raises ValueError."""
    return parse_oxide(formula).element_fraction


def oxide_from_element(element: str, charge: int) -> str:
    """The simplest oxide of a cation: ("Fe", 3) gives ``Fe2O3``. ValueError for oxygen or a charge < 1."""
    if element not in SYMBOLS or element == "O" or charge < 1:
        raise ValueError(f"no oxide of {element!r} with charge {charge}")
    return oxide_formula(element, *_subscripts(charge))


def cation_charges(element: str) -> tuple[int, ...]:
    """Charges of the element in reported oxides, the usual one first; empty for halogens and noble metals."""
    return _CHARGES.get(element, ())


def usual_oxide(element: str, overrides: Mapping[str, str] | None = None) -> str:
    """The oxide (or the bare element) in which an element is counted in a total and in a formula.

    Iron is FeO, sulfur SO3, manganese MnO, every rare earth RE2O3; halogens and noble metals are counted as
    elements. ``overrides`` changes that by element, as ``{"Fe": "Fe2O3", "S": "S"}``. Common practice, not
    a law of nature. Raises ValueError for an unknown element and for an override of another element.
    """
    if element not in SYMBOLS:
        raise ValueError(f"{element!r} is not the symbol of an element")
    if overrides and element in overrides:
        chosen = parse_oxide(overrides[element])
        if chosen.element != element:
            raise ValueError(f"{overrides[element]!r} is no oxide of {element}")
        return chosen.formula
    charges = _CHARGES.get(element)
    if not charges or element in _COUNTED_AS_ELEMENT:
        return element
    return oxide_from_element(element, charges[0])


def oxygen_equivalent(anion: str) -> float:
    """Mass of oxygen that one mass of F, Cl or S (as sulfide) replaces: 0.42106, 0.22566, 0.49903.

    To be subtracted from a total in which all cations are counted as oxides (Deer, Howie & Zussman 1992,
    appendix 1, from memory). Raises ValueError for any other element.
    """
    if anion not in _ANION_CHARGE:
        raise ValueError(f"{anion!r} has no oxygen equivalent; only {', '.join(_ANION_CHARGE)} have")
    return _ANION_CHARGE[anion] * atomic_weight("O") / (2.0 * atomic_weight(anion))


def wt_percent_per_ppm(elements: Sequence[str], overrides: Mapping[str, str] | None = None) -> FloatArray:
    """What 1 ppm of each element adds to a total in wt%, as its usual oxide; shape (n elements,).

    F and Cl, and S where ``overrides`` counts it as the element, add their mass less the oxygen they replace.
    The factors are constants of one row: a total's variance is the sum of their squares times the variances.
    Raises ValueError for an unknown element.
    """
    factors = []
    for element in elements:
        oxide = parse_oxide(usual_oxide(element, overrides))
        factor = 1.0 / oxide.element_fraction
        if oxide.oxygens == 0 and element in _ANION_CHARGE:
            factor -= oxygen_equivalent(element)
        factors.append(factor / PPM_PER_WT_PERCENT)
    return np.array(factors, dtype=np.float64)


def oxide_total(
    element_ppm: FloatArray, elements: Sequence[str], overrides: Mapping[str, str] | None = None
) -> FloatArray:
    """Analytical total in wt%, shape (n spots,), from element ppm, shape (n spots, n elements).

    NaN is "not measured" and adds nothing; a spot without any value has the total NaN. Oxygen replaced by F
    and Cl is taken off. A column of oxygen itself would count it twice and is refused. Raises ValueError for
    an unknown element, oxygen, or a shape that does not fit.
    """
    ppm = np.asarray(element_ppm, dtype=np.float64)
    if ppm.ndim != 2 or ppm.shape[1] != len(elements):
        raise ValueError(f"element_ppm has shape {ppm.shape}, expected (spots, {len(elements)})")
    if "O" in elements:
        raise ValueError("oxygen is counted with the cations; leave its column out of the total")
    total = np.nan_to_num(ppm, nan=0.0) @ wt_percent_per_ppm(elements, overrides)
    return np.where(np.isnan(ppm).all(axis=1), np.nan, total)


def iron_to_sum(iron_columns: Iterable[str]) -> tuple[str, ...]:
    """Which of a spot's iron columns add up to its iron: labels ``FeO``, ``Fe2O3``, ``FeOT``, ``Fe2O3T``.

    A total-iron column holds all the iron: the first of them is used alone, the others repeat it. Without
    one, FeO and Fe2O3 side by side are two parts and are summed. Whether a table truly reports two parts, or
    the same iron twice (FeO = 0.89981 × Fe2O3 in every row), is for the caller to look at. Other labels are
    ignored.
    """
    labels = list(iron_columns)
    totals = [label for label in labels if label in ("FeOT", "Fe2O3T")]
    if totals:
        return (totals[0],)
    return tuple(label for label in ("FeO", "Fe2O3") if label in labels)


def _subscripts(charge: int) -> tuple[int, int]:
    return (1, charge // 2) if charge % 2 == 0 else (2, charge)
