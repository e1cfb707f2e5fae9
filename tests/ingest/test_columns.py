"""What the columns are: units, uncertainties, limits, totals, and what is not read."""

from __future__ import annotations

import pytest

from ingest.tables import lines, problems, remarks, run

HEAD = "Point,Run,Phase"


def test_unit_of_the_header_goes_before_that_of_the_table():
    result = run(f"{HEAD},SiO2,Ni (ppm),Sr ppb\n1,A,glass,50,100,3\n")
    assert lines(result, "analyte", "unit") == [("SiO2", "wt%"), ("Ni", "ppm"), ("Sr", "ppb")]


def test_unit_of_the_units_row_goes_before_that_of_the_table():
    result = run(f"{HEAD},SiO2,Ni\n,,,wt%,µg/g\n1,A,glass,50,100\n", {"unit": None})
    assert lines(result, "analyte", "unit", "row") == [("SiO2", "wt%", 3), ("Ni", "ppm", 3)]


def test_a_missing_unit_names_every_column():
    found = problems(f"{HEAD},SiO2,MgO wt%,Ni\n1,A,glass,50,1,2\n", {"unit": None})
    assert [problem.column for problem in found] == ["SiO2", "Ni"]
    assert "unit is not stated" in str(found[0])


SIGMA = f"{HEAD},MgO,MgO 2s\n1,A,glass,50,4\n2,A,glass,-0.5,0.2\n3,A,glass,<0.1,0.2\n"


@pytest.mark.parametrize(
    ("setting", "expected"),
    [
        ({"level": 2}, [2.0, 0.1, None]),
        ({"level": 2, "relative": True}, [1.0, 0.0005, None]),
        ({"level": 2, "kind": "sd", "replicates": 4}, [1.0, 0.05, None]),
        ({"level": 2, "kind": "se", "replicates": 4}, [2.0, 0.1, None]),
    ],
)
def test_sigma_is_one_absolute_standard_uncertainty_of_the_value(
    setting: dict[str, object], expected: list[float]
):
    result = run(SIGMA, {"sigma": {"pattern": "{analyte} 2s", **setting}})
    assert [sigma for (sigma,) in lines(result, "sigma")] == [
        None if value is None else pytest.approx(value, rel=1e-12) for value in expected
    ]


def test_an_uncertainty_that_is_not_stated_is_refused():
    found = problems(SIGMA)
    assert found[0].column == "MgO 2s"
    assert "what they are is not stated" in found[0].message
    assert "not stated" in str(problems(f"{HEAD},MgO,±\n1,A,glass,50,4\n")[0])
    assert run(
        SIGMA, {"columns": {"spot": "Point", "experiment": "Run", "phase": "Phase", "ignore": ["MgO 2s"]}}
    )


@pytest.mark.parametrize(
    ("header", "setting", "message"),
    [
        ("MgO 2s", {"pattern": "{analyte} 2s", "level": 1}, "the header says 2 sigma"),
        ("MgO %RSD", {"pattern": "{analyte} %RSD"}, "the header says relative"),
        ("MgO 1s ppm", {"pattern": "{analyte} 1s", "relative": True}, "the header says ppm"),
        ("MgO 1s", {"pattern": "{analyte} err"}, "no column fits sigma.pattern"),
    ],
)
def test_headers_must_not_contradict_what_is_stated(header: str, setting: dict[str, object], message: str):
    found = problems(f"{HEAD},MgO,{header}\n1,A,glass,50,4\n", {"sigma": setting})
    assert message in str(found[0])


def test_sigma_in_another_unit_than_its_value():
    result = run(f"{HEAD},MgO wt%,MgO 1s (ppm)\n1,A,glass,50,400\n", {"sigma": {"pattern": "{analyte} 1s"}})
    assert lines(result, "sigma") == [(pytest.approx(0.04, rel=1e-12),)]


def test_sigma_cells_that_are_none():
    text = f"{HEAD},MgO,MgO 1s\n1,A,glass,5,\n2,A,glass,5,n.d.\n3,A,glass,5,-1\n4,A,glass,5,<1\n5,A,glass,5,x\n6,A,glass,5,0\n"
    result = run(text, {"sigma": {"pattern": "{analyte} 1s"}}, on_unreadable="set-aside")
    assert lines(result, "sigma") == [(None,), (None,), (None,), (None,), (None,), (0.0,)]
    aside = result.tables["ingest.set_aside"].select(["row", "column", "raw", "cells"]).to_pylist()
    assert [(line["row"], line["column"], line["raw"]) for line in aside] == [
        (4, "MgO 1s", "-1"),
        (5, "MgO 1s", "<1"),
        (6, "MgO 1s", "x"),
    ]
    assert result.ledger.outcomes["sigma"] == 3


def test_limits_from_the_cell_the_column_and_the_settings():
    text = f"{HEAD},MgO,MgO DL,Ni ppm\n1,A,glass,<0.3,0.1,5\n2,A,glass,bdl,0.1,<7\n3,A,glass,0.05,0.1,bdl\n4,A,glass,0.05,,9\n"
    setting = {"pattern": "{analyte} DL", "values": {"MgO": 0.04, "Ni": 6}}
    result = run(text, {"limit": setting})
    assert lines(result, "value", "limit", "below_limit") == [
        (None, 0.3, True), (5, 6, True),
        (None, 0.1, True), (None, 7, True),
        (0.05, 0.1, True), (None, 6, True),
        (0.05, 0.04, False), (9, 6, False),
    ]  # fmt: skip
    assert "no limit column for Ni ppm" in remarks(result)


def test_limits_in_a_unit_of_their_own():
    text = f"{HEAD},MgO wt%,MgO DL\n1,A,glass,0.5,120\n"
    result = run(text, {"limit": {"pattern": "{analyte} DL", "unit": "ppm"}})
    assert lines(result, "limit") == [(pytest.approx(0.012, rel=1e-12),)]
    text = f"{HEAD},MgO wt%,MgO DL (ppm)\n1,A,glass,0.5,120\n"
    assert lines(run(text, {"limit": {"pattern": "{analyte} DL"}}), "limit") == [
        (pytest.approx(0.012, rel=1e-12),)
    ]
    result = run(f"{HEAD},MgO\n1,A,glass,0.5\n", {"limit": {"values": {"MgO": 120}, "unit": "ppm"}})
    assert lines(result, "limit") == [(pytest.approx(0.012, rel=1e-12),)]


def test_a_limit_of_zero_is_no_limit_and_a_negative_one_unreadable():
    text = f"{HEAD},MgO,MgO DL\n1,A,glass,0.5,0\n2,A,glass,-0.1,0.2\n3,A,glass,1,-2\n"
    result = run(text, {"limit": {"pattern": "{analyte} DL"}}, on_unreadable="set-aside")
    assert lines(result, "value", "limit", "below_limit") == [
        (0.5, None, False),
        (-0.1, 0.2, True),
        (1.0, None, False),
    ]
    assert result.ledger.outcomes["limit"] == 2


def test_limits_given_for_an_unknown_analyte():
    found = problems(f"{HEAD},MgO\n1,A,glass,5\n", {"limit": {"values": {"MnO": 0.1}}})
    assert 'Did you mean "MgO"' in str(found[0])


def test_words_below_a_limit_that_nobody_gave_are_told():
    result = run(f"{HEAD},MgO\n1,A,glass,bdl\n2,A,glass,5\n")
    assert lines(result, "value", "limit", "below_limit") == [(None, None, True), (5.0, None, False)]
    assert "1 cells are below a detection limit that is not given" in remarks(result)


def test_ambiguous_words_are_told_until_they_are_decided():
    text = f"{HEAD},MgO\n1,A,glass,n.d.\n2,A,glass,5\n"
    result = run(text)
    assert '1 cells say "n.d."' in remarks(result)
    assert lines(result, "raw", "value", "below_limit") == [("n.d.", None, False), ("5", 5.0, False)]
    # The same settings say the same, whether spelled out or by default.
    assert remarks(run(text, {"not_measured": ["", "n.d."]})) == remarks(result)
    decided = run(text, {"below_limit": ["n.d."], "not_measured": [""], "limit": {"values": {"MgO": 0.1}}})
    assert lines(decided, "limit", "below_limit") == [(0.1, True), (0.1, False)]


def test_same_analyte_twice_and_same_header_twice():
    found = problems(f"{HEAD},Ni60 ppm,60Ni ppm\n1,A,glass,5,6\n")
    assert "report the same analyte, Ni60" in str(found[0])
    found = problems(f"{HEAD},MgO,MgO\n1,A,glass,5,6\n")
    assert "stands twice, in columns D and E" in str(found[0])
    found = problems("Point,Run,Run,Phase,MgO\n1,A,A,glass,5\n")
    assert "stands twice, in columns B and C" in str(found[0])


def test_missing_columns_name_the_nearest_header_all_at_once():
    found = problems("Punkt,Runs,Phase,MgO\n1,A,glass,5\n")
    assert [problem.column for problem in found] == ["Point", "Run"]
    assert 'Did you mean "Runs"' in str(found[1])
    assert found[0].row == 1


def test_listed_analytes():
    text = f"{HEAD},SiO2,MgO,K\n1,A,glass,50,5,2\n"
    result = run(text, {"analytes": ["MgO", "K"]})
    assert lines(result, "analyte") == [("MgO",), ("K",)]
    assert 'recognised columns that are not read: "SiO2"' in remarks(result)
    found = problems(text, {"analytes": ["MgO", "CaO", "Run"]})
    assert [problem.column for problem in found] == ["CaO", "Run"]


def test_unknown_analytes_are_told_with_the_nearest_name():
    result = run(f"{HEAD},SiO2,Mg0,AI2O3 wt%,Colour\n1,A,glass,50,5,1,green\n")
    assert '"Mg0" looks like an analyte but is not recognised; not read. Did you mean' in remarks(result)
    assert '"AI2O3 wt%" looks like' in remarks(result)
    assert 'columns not read: "Colour"' in remarks(result)
    assert result.ledger.outcomes["not read"] == 3


def test_single_letters_are_elements_only_among_elements():
    result = run("Point,Run,Phase,Na,K,Ca\n1,A,glass,1,2,3\n")
    assert len(lines(result, "analyte")) == 3
    assert '"K" is read as an element' in remarks(result)
    result = run("Point,Run,Phase,X,Y,SiO2,MgO\n1,A,glass,1,2,3,4\n")
    assert lines(result, "analyte") == [("SiO2",), ("MgO",)]
    assert '"Y" may be an element; it is not read' in remarks(result)


def test_a_table_without_any_analyte():
    assert "no column is recognised" in str(problems(f"{HEAD},a,b\n1,A,glass,1,2\n")[0])


def test_total_columns_are_checked_against_the_sum():
    text = (
        f"{HEAD},SiO2,MgO,CaO,Ni ppm,Total\n"
        "1,A,glass,50,10,20,10000,80\n"  # the sum of the majors
        "2,A,glass,50,10,20,10000,81\n"  # the sum with nickel
        "3,A,glass,50,<0.1,20,,70.1\n"  # within rounding
        "4,A,glass,50,10,20,,98.5\n"
        "5,A,glass,50,10,20,,\n"
    )
    result = run(text)
    assert (
        "differs from the sum of the columns by more than 0.15 wt% in 1 of 4 rows, first in row 5: 98.5 against 80.00"
        in (remarks(result))
    )
    assert result.ledger.outcomes["not read"] == 5


def test_units_that_are_no_mass_fractions_are_not_read():
    result = run(f"{HEAD},SiO2,Si apfu,Mg at%,Ni cps,Fe/Mg\n1,A,glass,50,1,2,3,4\n")
    assert lines(result, "analyte") == [("SiO2",)]
    told = remarks(result)
    assert all(f'"{header}"' in told for header in ("Si apfu", "Mg at%", "Ni cps", "Fe/Mg"))


def test_total_iron_is_an_analyte_of_its_own():
    assert lines(run(f"{HEAD},FeO*,Fe2O3\n1,A,glass,5,6\n"), "analyte") == [("FeOT",), ("Fe2O3",)]


def test_neighbouring_uncertainties_under_one_header():
    text = f"{HEAD},MgO,1s,CaO,1s,FeO\n1,A,glass,5,0.5,6,0.6,7\n"
    result = run(text, {"sigma": {"pattern": "1s"}})
    assert lines(result, "analyte", "sigma") == [("MgO", 0.5), ("CaO", 0.6), ("FeO", None)]
    assert "no sigma column for FeO" in remarks(result)


def test_uncertainties_named_in_the_units_row():
    text = f"{HEAD},MgO,MgO,CaO,CaO\n,,,wt%,1s,wt%,1s\n1,A,glass,5,0.5,6,0.6\n"
    result = run(text, {"unit": None, "sigma": {"pattern": "{analyte} 1s"}})
    assert lines(result, "analyte", "unit", "sigma") == [("MgO", "wt%", 0.5), ("CaO", "wt%", 0.6)]
