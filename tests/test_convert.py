"""Stage `convert`: conversions, iron in two columns, normalisation, internal standards."""

from __future__ import annotations

import pyarrow as pa
import pytest

from stage_tables import ingest_tables, spot
from tieline.convert import convert
from tieline.errors import InputError
from tieline.settings.chemistry import Actual, ConvertSettings, InternalStandard


def ppm(table: pa.Table, column: str = "value_ppm") -> dict[tuple[str, str], float]:
    rows = table.select(["spot", "analyte", column]).to_pylist()
    return {(row["spot"], row["analyte"]): row[column] for row in rows}


def converted(spots: list[dict], settings: ConvertSettings | None = None) -> pa.Table:
    ingest, _ = ingest_tables(spots)
    result = convert(ingest, settings=settings or ConvertSettings())
    result.ledger.check("convert")
    return result.tables["convert"]


def test_oxide_element_and_isotope_units():
    # Mass fractions by arithmetic from standard atomic weights (Prohaska et al. 2022).
    oxide = {"MgO": (10.0, 0.1, 0.02), "FeOT": 8.0}
    table = converted(
        [spot("a", oxide), spot("b", {"Ni60": (100.0, 2.0)}, unit="ppm"), spot("c", {"Rb": 5.0}, unit="ppb")]
    )
    values, sigmas, limits = ppm(table), ppm(table, "sigma_ppm"), ppm(table, "limit_ppm")
    magnesium = 24.305 / (24.305 + 15.999)
    assert values["a", "MgO"] == pytest.approx(1e5 * magnesium, rel=1e-12)
    assert sigmas["a", "MgO"] == pytest.approx(1e3 * magnesium, rel=1e-12)
    assert limits["a", "MgO"] == pytest.approx(2e2 * magnesium, rel=1e-12)
    assert values["a", "FeOT"] == pytest.approx(8e4 * 55.845 / (55.845 + 15.999), rel=1e-12)
    assert values["b", "Ni60"] == 100.0
    assert values["c", "Rb"] == pytest.approx(0.005)
    assert table.column("element").to_pylist() == ["Mg", "Fe", "Ni", "Rb"]


def test_limit_only_stays_a_limit():
    table = converted([spot("a", {"Cr2O3": "<0.03"})])
    assert ppm(table)["a", "Cr2O3"] is None
    assert ppm(table, "limit_ppm")["a", "Cr2O3"] == pytest.approx(
        300 * 2 * 51.9961 / (2 * 51.9961 + 3 * 15.999), rel=1e-6
    )


def test_ferrous_and_ferric_iron_add_up_to_the_iron_of_the_spot():
    table = converted(
        [spot("a", {"FeO": (5.0, 0.3), "Fe2O3": (2.0, 0.4)}), spot("b", {"FeO": 4.0, "Fe2O3": 1.0})]
    )
    ferrous, ferric = 55.845 / 71.844, 2 * 55.845 / (2 * 55.845 + 3 * 15.999)
    assert ppm(table)["a", "FeO"] == pytest.approx(1e4 * (5 * ferrous + 2 * ferric), rel=1e-9)
    assert ppm(table)["a", "Fe2O3"] is None
    expected_sigma = 1e4 * ((0.3 * ferrous) ** 2 + (0.4 * ferric) ** 2) ** 0.5
    assert ppm(table, "sigma_ppm")["a", "FeO"] == pytest.approx(expected_sigma, rel=1e-9)


def test_the_same_iron_written_twice_is_not_added():
    spots = [spot(name, {"FeO": x, "Fe2O3": x / 0.89981}) for name, x in (("a", 5.0), ("b", 6.0))]
    assert ppm(converted(spots))["a", "FeO"] == pytest.approx(5e4 * 55.845 / 71.844, rel=1e-9)


def test_normalisation_carries_the_correlation_with_the_total():
    # Against uncertainties (general-purpose library): x / sum(x) * 100 of two correlated quantities.
    from uncertainties import ufloat

    settings = ConvertSettings(normalise={"EPMA": 100.0})
    table = converted([spot("a", {"MgO": (50.0, 0.4), "SiO2": (45.0, 0.5)})], settings)
    magnesia, silica = ufloat(50.0, 0.4), ufloat(45.0, 0.5)
    share = magnesia / (magnesia + silica) * 100
    factor = 1e4 * 24.305 / 40.304
    assert ppm(table)["a", "MgO"] == pytest.approx(share.nominal_value * factor, rel=1e-9)
    assert ppm(table, "sigma_ppm")["a", "MgO"] == pytest.approx(share.std_dev * factor, rel=1e-9)


def laser_session(assumed: dict[str, float], true: dict[str, float]) -> list[dict]:
    """Laser values that scale with the assumed CaO, and probe spots that measured the true one."""
    spots = []
    for phase, concentration in {"clinopyroxene": 2.0, "glass": 20.0}.items():
        for number in range(4):
            value = concentration * (1 + 0.01 * number) * assumed[phase] / true[phase]
            keys = {"technique": "laser", "batch": "laser-1", "unit": "ppm", "phase": phase}
            spots.append(
                spot(
                    f"L{phase}{number}",
                    {"La": (value, 0.02 * value), "Sr88": (7 * value, 0.1 * value)},
                    **keys,
                )
            )
            spots.append(
                spot(
                    f"P{phase}{number}",
                    {"CaO": (true[phase] * (1 + 0.002 * (number - 1.5)), 0.1)},
                    phase=phase,
                )
            )
    return spots


def with_standards(spots: list[dict], **standard: object) -> tuple[pa.Table, list[dict]]:
    settings = ConvertSettings(internal_standard=(InternalStandard(**STANDARD, **standard),))
    ingest, _ = ingest_tables(spots)
    tables = convert(ingest, settings=settings).tables
    return tables["convert"], tables["convert.standards"].to_pylist()


TRUE = {"clinopyroxene": 20.0, "glass": 11.0}
STANDARD = {"technique": "laser", "element": "CaO"}


def test_rescaling_undoes_wrong_internal_standards_exactly():
    wrong = {"clinopyroxene": 22.0, "glass": 9.0}
    right = converted(
        laser_session(TRUE, TRUE),
        ConvertSettings(internal_standard=(InternalStandard(**STANDARD, assumed=TRUE),)),
    )
    mended = converted(
        laser_session(wrong, TRUE),
        ConvertSettings(internal_standard=(InternalStandard(**STANDARD, assumed=wrong),)),
    )
    for column in ("value_ppm", "sigma_ppm"):
        for key, value in ppm(right, column).items():
            assert ppm(mended, column)[key] == pytest.approx(value, rel=1e-12), key
    _, standards = with_standards(laser_session(TRUE, TRUE), assumed=TRUE)
    assert [(row["phase"], row["technique"]) for row in standards] == [
        ("clinopyroxene", "laser"),
        ("glass", "laser"),
    ]
    assert all(row["relative_sd"] > 0 and row["dof"] == pytest.approx(3, abs=0.2) for row in standards)
    assert {row["source_batch"] for row in standards} == {"probe-1"}
    assert {row["source_analyte"] for row in standards} == {"CaO"}


def test_given_internal_standard_with_its_uncertainty():
    actual = {phase: Actual(value=value, sd=0.05 * value) for phase, value in TRUE.items()}
    spots = laser_session({"clinopyroxene": 10.0, "glass": 10.0}, TRUE)
    table, standards = with_standards(spots, assumed={"*": 10.0}, actual=actual)
    assert ppm(table)["Lglass0", "La"] == pytest.approx(20.0, rel=1e-12)
    assert [row["relative_sd"] for row in standards] == [pytest.approx(0.05)] * 2
    assert {row["source_batch"] for row in standards} == {None}
    assert {row["dof"] for row in standards} == {None}


def test_assumed_values_of_the_table_are_taken_spot_by_spot():
    # The same concentration, computed with another assumed CaO in every spot, which the table reports beside it.
    spots = [one for one in laser_session(TRUE, TRUE) if one["spot"].startswith("P")]
    for number, assumed in enumerate((9.0, 10.0, 12.0)):
        keys = {"technique": "laser", "batch": "laser-1", "unit": "ppm", "phase": "glass"}
        calcium = assumed * 1e4 * 40.078 / (40.078 + 15.999)
        spots.append(spot(f"L{number}", {"Ca43": calcium, "La": 20.0 * assumed / TRUE["glass"]}, **keys))
    table, _ = with_standards(spots, assumed_from="table")
    assert [ppm(table)[f"L{number}", "La"] for number in range(3)] == [pytest.approx(20.0, rel=1e-6)] * 3


def test_two_standards_share_a_technique_phase_by_phase():
    spots = laser_session({"clinopyroxene": 10.0, "glass": 12.0}, TRUE)
    both = (
        InternalStandard(**STANDARD, assumed={"clinopyroxene": 10.0}),
        InternalStandard(**STANDARD, assumed={"glass": 12.0}),
    )
    table = converted(spots, ConvertSettings(internal_standard=both))
    assert ppm(table)["Lglass0", "La"] == pytest.approx(20.0, rel=1e-12)
    assert ppm(table)["Lclinopyroxene0", "La"] == pytest.approx(2.0, rel=1e-12)
    twice = (both[0], InternalStandard(**STANDARD, assumed={"clinopyroxene": 11.0, "glass": 12.0}))
    with pytest.raises(InputError, match="clinopyroxene twice"):
        converted(spots, ConvertSettings(internal_standard=twice))


def test_iron_of_which_only_a_part_is_known_has_no_value():
    spots = [
        spot("a", {"FeO": 5.0, "Fe2O3": 2.0}),
        spot("b", {"Fe2O3": 2.0}),
        spot("c", {"FeO": "<0.3", "Fe2O3": 2.0}),
    ]
    values = ppm(converted(spots))
    assert values["a", "FeO"] is not None
    assert values["b", "Fe2O3"] is None
    assert (values["c", "FeO"], values["c", "Fe2O3"]) == (None, None)


def test_missing_actual_value_stops_or_is_said():
    spots = [
        one
        for one in laser_session(TRUE, TRUE)
        if one["spot"] != "x" and not one["spot"].startswith("Pglass")
    ]
    with pytest.raises(InputError, match="glass of X1: no actual CaO"):
        converted(spots, ConvertSettings(internal_standard=(InternalStandard(**STANDARD, assumed=TRUE),)))
    lenient = InternalStandard(**STANDARD, assumed={**TRUE, "glass": 5.0}, missing="as-assumed")
    ingest, _ = ingest_tables(spots)
    result = convert(ingest, settings=ConvertSettings(internal_standard=(lenient,)))
    assert any("left as assumed" in str(remark) for remark in result.remarks)
    assert ppm(result.tables["convert"])["Lglass0", "La"] == pytest.approx(20.0)


def test_missing_assumed_value_names_every_phase():
    with pytest.raises(InputError) as caught:
        converted(
            laser_session(TRUE, TRUE), ConvertSettings(internal_standard=(InternalStandard(**STANDARD),))
        )
    assert len(caught.value.problems) == 2


def test_reference_materials_are_not_rescaled():
    spots = laser_session(TRUE, TRUE)
    keys = {
        "technique": "laser",
        "batch": "laser-1",
        "unit": "ppm",
        "phase": "REF",
        "experiment": None,
        "material": "REF",
    }
    spots.append(spot("ref", {"La": 33.0}, **keys))
    standard = InternalStandard(**STANDARD, assumed={"clinopyroxene": 10.0, "glass": 10.0})
    table = converted(spots, ConvertSettings(internal_standard=(standard,)))
    assert ppm(table)["ref", "La"] == 33.0
