"""Column headers: every usual spelling, and the headers that must not be taken for an analyte."""

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from tieline.chemistry.elements import SYMBOLS, isotopes
from tieline.chemistry.names import KNOWN_NAMES, Analyte, looks_like_analyte, nearest_names, recognise_analyte
from tieline.chemistry.oxides import cation_charges, oxide_from_element

REPORTED = sorted({oxide_from_element(symbol, q) for symbol in SYMBOLS for q in cation_charges(symbol)})
LABELS = sorted([*REPORTED, *SYMBOLS, *(f"{s}{a}" for s in SYMBOLS for a in isotopes(s)), "FeOT", "Fe2O3T"])


def read(header: str) -> Analyte:
    analyte = recognise_analyte(header)
    assert analyte is not None, header
    return analyte


@pytest.mark.parametrize(
    ("header", "label", "unit"),
    [
        ("SiO2", "SiO2", None), ("SiO₂ (wt%)", "SiO2", "wt%"), ("Wt% SiO2", "SiO2", "wt%"),
        ("SiO2 (wt.%)", "SiO2", "wt%"), ("SiO2_wt%", "SiO2", "wt%"), ("SiO2 wt %", "SiO2", "wt%"),
        ("wt%SiO2", "SiO2", "wt%"), ("SiO2wt%", "SiO2", "wt%"), ("SiO2 mass%", "SiO2", "wt%"),
        ("SiO2 [% m/m]", "SiO2", "wt%"), ("SiO2 weight percent", "SiO2", "wt%"), ("SiO2 %", "SiO2", "wt%"),
        ("\ufeffSiO2", "SiO2", None), ("MgO\u00a0(wt%)", "MgO", "wt%"), ("MgO\n(wt%)", "MgO", "wt%"),
        ("SIO2", "SiO2", None), ("al2o3", "Al2O3", None), ("MGO", "MgO", None), ("COO", "CoO", None),
        ("FeO", "FeO", None), ("FeO*", "FeOT", None), ("FeOT", "FeOT", None), ("FeOt", "FeOT", None),
        ("FeO(T)", "FeOT", None), ("FeO_tot", "FeOT", None), ("FeO total (wt%)", "FeOT", "wt%"),
        ("Total FeO", "FeOT", None), ("ΣFeO", "FeOT", None), ("FEOT", "FeOT", None), ("Fe as FeO", "FeOT", None),
        ("total Fe as FeO", "FeOT", None), ("Fe2O3(T)", "Fe2O3T", None), ("Fe2O3*", "Fe2O3T", None),
        ("TFe2O3", "Fe2O3T", None), ("Total iron as Fe2O3", "Fe2O3T", None),
        ("Sr88", "Sr88", None), ("88Sr", "Sr88", None), ("Sr 88", "Sr88", None), ("Sr 88 ppm", "Sr88", "ppm"),
        ("Sr-88", "Sr88", None), ("²⁰⁶Pb", "Pb206", None), ("[88]Sr", "Sr88", None),
        ("Ni_ppm", "Ni", "ppm"), ("Ni ppm", "Ni", "ppm"), ("Ni (ppm)", "Ni", "ppm"), ("Ni[ppm]", "Ni", "ppm"),
        ("Ni \u00b5g/g", "Ni", "ppm"), ("Ni \u03bcg/g", "Ni", "ppm"), ("Ni ug/g", "Ni", "ppm"),
        ("Ni µg g⁻¹", "Ni", "ppm"), ("Ni µg·g−1", "Ni", "ppm"), ("Ni mg/kg", "Ni", "ppm"), ("Ni ppmw", "Ni", "ppm"),
        ("Ni (wt ppm)", "Ni", "ppm"), ("NI ppm", "Ni", "ppm"), ("Ni ppb", "Ni", "ppb"), ("Ni ng/g", "Ni", "ppb"),
        ("Ni µg/kg", "Ni", "ppb"), ("Ni conc. (ppm)", "Ni", "ppm"), ("K (ppm)", "K", "ppm"), ("C (wt%)", "C", "wt%"),
        ("H2O", "H2O", None), ("H2OT", "H2O", None), ("CO2 ppm", "CO2", "ppm"), ("S total", "S", None),
        ("Se", "Se", None), ("UO2", "UO2", None), ("Fe3O4", "Fe3O4", None),
    ],
)  # fmt: skip
def test_values(header: str, label: str, unit: str | None) -> None:
    analyte = read(header)
    assert (analyte.label, analyte.unit, analyte.role) == (label, unit, "value")
    assert analyte.usable
    assert analyte.certain


@pytest.mark.parametrize(
    ("header", "label", "unit", "level", "relative", "statistic"),
    [
        ("1s MgO", "MgO", None, 1, None, None), ("1σ (MgO)", "MgO", None, 1, None, None),
        ("MgO 2σ (wt%)", "MgO", "wt%", 2, None, None), ("±1σ MgO", "MgO", None, 1, None, None),
        ("1-sigma MgO", "MgO", None, 1, None, None), ("σMgO", "MgO", None, None, None, None),
        ("Ni ppm 2SE", "Ni", "ppm", 2, None, "SE"), ("Ni_ppm_2SE", "Ni", "ppm", 2, None, "SE"),
        ("Ni 2 SE", "Ni", None, 2, None, "SE"), ("Sr88 1SD", "Sr88", None, 1, None, "SD"),
        ("Mg 24 2 SE", "Mg24", None, 2, None, "SE"), ("MgO s.d.", "MgO", None, None, None, "SD"),
        ("MgO Std. Dev.", "MgO", None, None, None, "SD"), ("MgO_stdev", "MgO", None, None, None, "SD"),
        ("StdErr MgO", "MgO", None, None, None, "SE"), ("Se SE", "Se", None, None, None, "SE"),
        ("MgO %RSD", "MgO", None, None, True, "SD"), ("MgO RSD (%)", "MgO", None, None, True, "SD"),
        ("MgO 1s%", "MgO", None, 1, True, None), ("MgO 1s rel. %", "MgO", None, 1, True, None),
        ("MgO 2SE abs", "MgO", None, 2, False, "SE"), ("MgO % error", "MgO", None, None, True, None),
        ("MgO 1s (%)", "MgO", None, 1, None, None), ("MgO ±", "MgO", None, None, None, None),
        ("MgO +/-", "MgO", None, None, None, None), ("MgO uncertainty (wt%)", "MgO", "wt%", None, None, None),
        ("FeO* 1s", "FeOT", None, 1, None, None),
    ],
)  # fmt: skip
def test_uncertainties(
    header: str, label: str, unit: str | None, level: int | None, relative: bool | None, statistic: str | None
) -> None:
    analyte = read(header)
    assert (analyte.label, analyte.unit, analyte.role) == (label, unit, "sigma")
    assert (analyte.level, analyte.relative, analyte.statistic) == (level, relative, statistic)


@pytest.mark.parametrize(
    ("header", "label", "unit", "level"),
    [("Ni_LOD", "Ni", None, None), ("MgO DL (ppm)", "MgO", "ppm", None), ("MgO D.L.", "MgO", None, None),
     ("MgO LLD", "MgO", None, None), ("Det. Lim. MgO (ppm)", "MgO", "ppm", None),
     ("Ni detection limit", "Ni", None, None), ("Ni MDL ppb", "Ni", "ppb", None), ("LOD 3σ Sr88", "Sr88", None, 3)],
)  # fmt: skip
def test_limits(header: str, label: str, unit: str | None, level: int | None) -> None:
    analyte = read(header)
    assert (analyte.label, analyte.unit, analyte.role, analyte.level) == (label, unit, "limit", level)


@pytest.mark.parametrize(
    ("header", "name", "role"),
    [("Total", "Total", "total"), ("TOTAL", "Total", "total"), ("Oxide total", "Total", "total"),
     ("Sum (wt%)", "Total", "total"), ("Mg#", "Mg#", "ratio"), ("Mg# 1s", "Mg#", "sigma"), ("Fe/Mg", "Fe/Mg", "ratio"),
     ("87Sr/86Sr", "87Sr/86Sr", "ratio"), ("O=F", "O=F", "correction"), ("-O=F,Cl", "O=F,Cl", "correction"),
     ("Ni cps", "Ni", "intensity"), ("Si net counts", "Si", "intensity"), ("K-ratio Mg", "Mg", "intensity"),
     ("Mg apfu", "Mg", "cations"), ("Si cations", "Si", "cations")],
)  # fmt: skip
def test_columns_that_are_no_concentration(header: str, name: str, role: str) -> None:
    analyte = read(header)
    assert (analyte.name, analyte.role, analyte.usable) == (name, role, False)


@pytest.mark.parametrize(("header", "unit"), [("MgO at%", "at%"), ("Mg (at.%)", "at%"), ("MgO mol%", "mol%")])
def test_units_that_are_not_by_mass_are_recognised_and_not_usable(header: str, unit: str) -> None:
    assert (read(header).unit, read(header).usable) == (unit, False)


@pytest.mark.parametrize(
    "header",
    ["", " ", "T (C)", "T (K)", "T_C", "T°C", "P (GPa)", "t (h)", "Spot", "Phase", "Comment", "Grain", "Run", "No", "X",
     "Z", "Date", "Point", "Rim um", "as", "in", "Distance um", "log fO2", "LOI", "wt%", "ppm", "SE", "Zone1", "m/z",
     "Spot 12", "TX07-ol3", "Total alkalis", "Average", "Sum cations", "Fo", "Ol"],
)  # fmt: skip
def test_headers_that_are_no_analyte(header: str) -> None:
    assert recognise_analyte(header) is None
    assert not looks_like_analyte(header)


@pytest.mark.parametrize(
    ("header", "nearest"),
    [("SiO3", "SiO2"), ("Si02", "SiO2"), ("Na20", "Na2O"), ("K20", "K2O"), ("FeO calc", None), ("Ni ppt", None),
     ("CO", "Co"), ("NI", "Ni"), ("SiO2*", "SiO2"), ("SiO2 norm", "SiO2"), ("Fe2+", "Fe"), ("REE2O3", None),
     ("Na2O+K2O", None), ("MgO 1s 2s", None), ("MgO wt% ppm", None), ("MgO LOD 99%", None), ("Total REE ppm", None)],
)  # fmt: skip
def test_headers_that_deserve_a_remark(header: str, nearest: str | None) -> None:
    assert recognise_analyte(header) is None
    assert looks_like_analyte(header)
    assert nearest is None or nearest in nearest_names(header)


@pytest.mark.parametrize("header", ["P", "K", "Y", "V", "F", "sr88"])
def test_headers_that_may_be_something_else_are_uncertain(header: str) -> None:
    assert not read(header).certain


def test_selenium_and_standard_error_are_told_apart() -> None:
    assert read("Se ppm").element == "Se"
    assert read("Se ppm").role == "value"
    assert read("Ni se").role == "sigma"


def test_total_iron_keeps_the_oxide_and_says_total() -> None:
    assert (read("FeO*").name, read("FeO*").total_iron, read("FeO*").element) == ("FeO", True, "Fe")
    assert not read("FeO").total_iron
    assert read("FeT").label == "Fe"


UNITS = {
    "wt%": "wt%",
    " (wt.%)": "wt%",
    " ppm": "ppm",
    "_ppm": "ppm",
    " [µg/g]": "ppm",
    " ng/g": "ppb",
    "": None,
}
ROLES = {"": "value", " 1s": "sigma", " 2SE": "sigma", " LOD": "limit", "_1σ": "sigma", " DL": "limit"}


@given(st.sampled_from(LABELS), st.sampled_from(sorted(UNITS)), st.sampled_from(sorted(ROLES)), st.booleans())
def test_label_unit_and_role_in_any_combination(label: str, unit: str, role: str, role_first: bool) -> None:
    word = role.strip(" _")
    header = f"{word} {label} {unit}" if role_first else f"{label}{role} {unit}"
    analyte = read(header)
    assert (analyte.label, analyte.unit, analyte.role) == (label, UNITS[unit], ROLES[role])


ALPHABET = "SiOMgFeTKNal0123456789 ()[]%*±σµ_-/.,=+^#spmwtLDE²₂\u00a0"


@given(st.one_of(st.text(max_size=100), st.text(alphabet=ALPHABET, max_size=16)))
@example("\x00")
@example("+/-")
@example("Σ")
@example("9" * 200)
def test_any_text_is_recognised_or_not_and_never_raises(text: str) -> None:
    analyte = recognise_analyte(text)
    if analyte is not None:
        assert looks_like_analyte(text)
        assert (analyte.element is None) == (analyte.kind == "other")
        assert analyte.element is None or analyte.name.startswith(analyte.element)
    assert isinstance(looks_like_analyte(text), bool)
    assert set(nearest_names(text)) <= set(KNOWN_NAMES)


@given(st.text(alphabet="bdefghjlqrtuwxz", min_size=3, max_size=12))
def test_small_letter_words_are_no_analyte(word: str) -> None:
    assert recognise_analyte(word) is None


def test_nearest_names_of_given_candidates_ignores_case() -> None:
    assert nearest_names("OLIVNE", ["olivine", "glass"]) == ["olivine"]
    assert nearest_names("qqqq", ["olivine"]) == []
