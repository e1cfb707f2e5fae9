"""Published and recomputed conversion factors, end-members and radii."""

import numpy as np
import pytest

from tieline.chemistry.elements import atomic_weight
from tieline.chemistry.formula import atoms_from_oxides, ferric_iron
from tieline.chemistry.oxides import element_fraction, oxygen_equivalent, parse_oxide
from tieline.chemistry.phases import PHASES
from tieline.chemistry.radii import ionic_radius

# Prohaska et al. (2022), Pure Appl. Chem. 94:573, rounded; Gd, Lu, Zr as revised in 2024 (from memory).
WEIGHTS = {
    "H": 1.008, "C": 12.011, "O": 15.999, "F": 18.9984, "Na": 22.98977, "Mg": 24.305, "Al": 26.98154, "Si": 28.085,
    "P": 30.97376, "S": 32.06, "Cl": 35.45, "K": 39.0983, "Ca": 40.078, "Ti": 47.867, "Cr": 51.9961, "Mn": 54.93804,
    "Fe": 55.845, "Ni": 58.6934, "Gd": 157.249, "Lu": 174.96669, "Zr": 91.222,
}  # fmt: skip

# Mass fraction of the element, recomputed with periodictable 2.1.0 from the weights of Prohaska et al. (2022).
FRACTIONS = {
    "SiO2": 0.46744, "TiO2": 0.59935, "Al2O3": 0.52926, "Cr2O3": 0.68421, "V2O3": 0.67976, "Fe2O3": 0.69943,
    "FeO": 0.77731, "MnO": 0.77446, "MgO": 0.60304, "NiO": 0.78580, "CoO": 0.78649, "ZnO": 0.80340, "CuO": 0.79887,
    "CaO": 0.71470, "SrO": 0.84560, "BaO": 0.89565, "Li2O": 0.46454, "Na2O": 0.74186, "K2O": 0.83015,
    "Rb2O": 0.91441, "Cs2O": 0.94323, "P2O5": 0.43643, "Sc2O3": 0.65197, "Y2O3": 0.78744, "La2O3": 0.85268,
    "Ce2O3": 0.85377, "Nd2O3": 0.85736, "Sm2O3": 0.86236, "Eu2O3": 0.86362, "Gd2O3": 0.86759, "Dy2O3": 0.87132,
    "Er2O3": 0.87452, "Yb2O3": 0.87821, "Lu2O3": 0.87938, "ZrO2": 0.74032, "HfO2": 0.84798, "Nb2O5": 0.69905,
    "Ta2O5": 0.81897, "ThO2": 0.87881, "UO2": 0.88150, "SO3": 0.40046, "H2O": 0.11191, "CO2": 0.27292,
}  # fmt: skip

# Ideal end-members in wt%, recomputed from the same weights: phase, oxides, oxygens, cations.
END_MEMBERS = {
    "forsterite": ("olivine", {"MgO": 57.29, "SiO2": 42.71}, 4, 3),
    "fayalite": ("olivine", {"FeO": 70.51, "SiO2": 29.49}, 4, 3),
    "enstatite": ("orthopyroxene", {"MgO": 40.15, "SiO2": 59.85}, 6, 4),
    "diopside": ("clinopyroxene", {"CaO": 25.90, "MgO": 18.61, "SiO2": 55.49}, 6, 4),
    "hedenbergite": ("clinopyroxene", {"CaO": 22.60, "FeO": 28.96, "SiO2": 48.44}, 6, 4),
    "jadeite": ("clinopyroxene", {"Na2O": 15.33, "Al2O3": 25.22, "SiO2": 59.45}, 6, 4),
    "anorthite": ("plagioclase", {"CaO": 20.16, "Al2O3": 36.65, "SiO2": 43.19}, 8, 5),
    "albite": ("plagioclase", {"Na2O": 11.82, "Al2O3": 19.44, "SiO2": 68.74}, 8, 5),
    "K-feldspar": ("alkali feldspar", {"K2O": 16.92, "Al2O3": 18.32, "SiO2": 64.76}, 8, 5),
    "pyrope": ("garnet", {"MgO": 29.99, "Al2O3": 25.29, "SiO2": 44.71}, 12, 8),
    "almandine": ("garnet", {"FeO": 43.30, "Al2O3": 20.48, "SiO2": 36.21}, 12, 8),
    "grossular": ("garnet", {"CaO": 37.35, "Al2O3": 22.64, "SiO2": 40.02}, 12, 8),
    "spinel": ("spinel", {"MgO": 28.33, "Al2O3": 71.67}, 4, 3),
    "magnetite": ("magnetite", {"FeO": 31.03, "Fe2O3": 68.97}, 4, 3),
    "ilmenite": ("ilmenite", {"FeO": 47.36, "TiO2": 52.64}, 3, 2),
    "zircon": ("zircon", {"ZrO2": 67.22, "SiO2": 32.78}, 4, 2),
    "titanite": ("titanite", {"CaO": 28.61, "TiO2": 40.74, "SiO2": 30.65}, 5, 3),
    "fluorapatite": ("apatite", {"CaO": 55.60, "P2O5": 42.22, "F": 3.77}, 12.5, 8),
}  # fmt: skip

# Moles of oxides that the formulas above stand for, by which the ideal wt% are made to full precision.
MOLES = {
    "forsterite": (2, 1), "fayalite": (2, 1), "enstatite": (2, 2), "diopside": (1, 1, 2), "hedenbergite": (1, 1, 2),
    "jadeite": (0.5, 0.5, 2), "anorthite": (1, 1, 2), "albite": (0.5, 0.5, 3), "K-feldspar": (0.5, 0.5, 3),
    "pyrope": (3, 1, 3), "almandine": (3, 1, 3), "grossular": (3, 1, 3), "spinel": (1, 1), "magnetite": (1, 1),
    "ilmenite": (1, 1), "zircon": (1, 1), "titanite": (1, 1, 1), "fluorapatite": (5, 1.5, 1),
}  # fmt: skip

# Shannon (1976), Acta Crystallogr. A32:751, effective ionic radii in Å: VI, VIII.
SHANNON = {
    ("La", 3): (1.032, 1.160), ("Ce", 3): (1.01, 1.143), ("Pr", 3): (0.99, 1.126), ("Nd", 3): (0.983, 1.109),
    ("Sm", 3): (0.958, 1.079), ("Eu", 3): (0.947, 1.066), ("Gd", 3): (0.938, 1.053), ("Tb", 3): (0.923, 1.040),
    ("Dy", 3): (0.912, 1.027), ("Ho", 3): (0.901, 1.015), ("Er", 3): (0.890, 1.004), ("Tm", 3): (0.880, 0.994),
    ("Yb", 3): (0.868, 0.985), ("Lu", 3): (0.861, 0.977), ("Y", 3): (0.900, 1.019), ("Sc", 3): (0.745, 0.870),
    ("Mg", 2): (0.720, 0.89), ("Fe", 2): (0.780, 0.92), ("Ni", 2): (0.690, np.nan), ("Co", 2): (0.745, 0.90),
    ("Mn", 2): (0.830, 0.96), ("Ca", 2): (1.00, 1.12), ("Sr", 2): (1.18, 1.26), ("Ba", 2): (1.35, 1.42),
    ("Eu", 2): (1.17, 1.25), ("Na", 1): (1.02, 1.18), ("K", 1): (1.38, 1.51), ("Rb", 1): (1.52, 1.61),
    ("Cs", 1): (1.67, 1.74), ("Zr", 4): (0.72, 0.84), ("Hf", 4): (0.71, 0.83), ("Ti", 4): (0.605, 0.74),
    ("U", 4): (0.89, 1.00), ("Th", 4): (0.94, 1.05), ("Nb", 5): (0.64, 0.74), ("Ta", 5): (0.64, 0.74),
}  # fmt: skip


def ideal_wt(name: str) -> tuple[list[str], np.ndarray]:
    """wt% of an end-member from its formula, summing to 100 after O=F."""
    oxides = list(END_MEMBERS[name][1])
    masses = np.array([n * parse_oxide(o).molar_mass for n, o in zip(MOLES[name], oxides, strict=True)])
    replaced = masses[oxides.index("F")] * oxygen_equivalent("F") if "F" in oxides else 0.0
    return oxides, 100.0 * masses / (masses.sum() - replaced)


@pytest.mark.parametrize("symbol", WEIGHTS)
def test_atomic_weights(symbol: str) -> None:
    assert atomic_weight(symbol) == pytest.approx(WEIGHTS[symbol], abs=5e-6)


@pytest.mark.parametrize("oxide", FRACTIONS)
def test_element_fractions(oxide: str) -> None:
    assert element_fraction(oxide) == pytest.approx(FRACTIONS[oxide], abs=5e-5 if oxide == "SO3" else 2e-5)


def test_iron_oxides_into_each_other_and_oxygen_equivalents() -> None:
    feo_per_fe2o3 = element_fraction("Fe2O3") / element_fraction("FeO")
    assert feo_per_fe2o3 == pytest.approx(0.89981, abs=2e-5)
    assert 1 / feo_per_fe2o3 == pytest.approx(1.11135, abs=2e-5)
    assert oxygen_equivalent("F") == pytest.approx(0.42106, abs=2e-5)
    assert oxygen_equivalent("Cl") == pytest.approx(0.22566, abs=2e-5)
    assert oxygen_equivalent("S") == pytest.approx(0.49903, abs=2e-5)


@pytest.mark.parametrize("name", END_MEMBERS)
def test_end_member_weights(name: str) -> None:
    oxides, wt = ideal_wt(name)
    assert dict(zip(oxides, wt, strict=True)) == pytest.approx(END_MEMBERS[name][1], abs=0.0051)


@pytest.mark.parametrize("name", END_MEMBERS)
def test_end_member_cation_sums(name: str) -> None:
    phase, _, oxygens, cations = END_MEMBERS[name]
    oxides, wt = ideal_wt(name)
    units = atoms_from_oxides(wt[np.newaxis, :], oxides, oxygens)
    assert units.cation_sum == pytest.approx([cations], abs=1e-4)
    assert (PHASES[phase].oxygens, PHASES[phase].cation_sum) == (oxygens, cations)


@pytest.mark.parametrize("name", END_MEMBERS)
def test_end_member_cation_sums_from_the_rounded_analysis(name: str) -> None:
    """Two decimals of wt% leave the sum within 0.001, far inside the tolerance of the phase."""
    phase, analysis, oxygens, cations = END_MEMBERS[name]
    units = atoms_from_oxides(np.array([list(analysis.values())]), list(analysis), oxygens)
    assert units.cation_sum == pytest.approx([cations], abs=1e-3)
    tolerance = PHASES[phase].cation_tolerance
    assert tolerance is not None
    assert tolerance > 1e-3


def test_fluorapatite_less_oxygen_for_fluorine() -> None:
    _, wt = ideal_wt("fluorapatite")
    assert wt[2] * oxygen_equivalent("F") == pytest.approx(1.59, abs=0.0051)
    assert wt.sum() - wt[2] * oxygen_equivalent("F") == pytest.approx(100.0, rel=1e-12)


def test_magnetite_by_charge_balance() -> None:
    """Droop (1987), Mineral. Mag. 51:431, eq. 2, on FeO 93.09: the iron of 31.03 FeO + 68.97 Fe2O3."""
    as_feo = 31.03 + 68.97 * 0.89981
    result = ferric_iron(atoms_from_oxides(np.array([[as_feo]]), ["FeO"], 4), 3.0)
    assert result.fe3 == pytest.approx([2.0], abs=1e-9)
    assert result.fe2 == pytest.approx([1.0], abs=1e-9)


@pytest.mark.parametrize(("element", "charge"), SHANNON)
def test_radii(element: str, charge: int) -> None:
    radii = [ionic_radius(element, charge, coordination) for coordination in (6, 8)]
    assert radii == pytest.approx(list(SHANNON[element, charge]), abs=1e-9, nan_ok=True)
