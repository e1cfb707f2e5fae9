"""Several tables together: their names, batches and conditions."""

from __future__ import annotations

import io

import openpyxl
import pytest
from pydantic import ValidationError

from ingest.tables import COLUMNS, problems, remarks, run
from tieline.ingest import ingest
from tieline.ingest.spots import batch_of_path
from tieline.ingest.stage import table_names
from tieline.reading.input_file import InputFile
from tieline.settings.ingest import IngestSettings, Table

TEXT = "Point,Run,Phase,MgO\n1,A,gl,5\n"


def test_two_sheets_of_one_workbook_are_two_tables():
    book = openpyxl.Workbook()
    for name, value in (("Majors", 5.5), ("Traces", 12.0)):
        sheet = book.create_sheet(name)
        sheet.append(["Point", "Run", "Phase", "MgO" if name == "Majors" else "Ni"])
        sheet.append(["1", "A", "gl", value])
    stream = io.BytesIO()
    book.save(stream)
    tables = [
        {"path": "lab.xlsx", "sheet": "Majors", "unit": "wt%", "columns": COLUMNS, "batch": "probe"},
        {"path": "lab.xlsx", "sheet": 3, "unit": "ppm", "columns": COLUMNS, "batch": "laser"},
    ]
    settings = IngestSettings.model_validate({"tables": tables})
    result = ingest({"lab.xlsx": InputFile.from_bytes("lab.xlsx", stream.getvalue())}, settings=settings)
    assert result.tables["ingest"].column("table").to_pylist() == ["lab.xlsx [Majors]", "lab.xlsx [3]"]
    assert result.tables["ingest"].column("value").to_pylist() == [5.5, 12.0]


def test_names_are_unique():
    tables = [Table(path="a.csv"), Table(path="a.csv"), Table(path="b.csv"), Table(path="a.csv")]
    assert table_names(tables) == ["a.csv [1]", "a.csv [1] (2)", "b.csv", "a.csv [1] (3)"]


@pytest.mark.parametrize(
    ("path", "batch"),
    [
        ("x/2024.03.01 probe.csv", "2024.03.01 probe"),
        ("a.tsv.gz", "a"),
        ("c:\\data\\b.xlsx", "b"),
        ("plain", "plain"),
    ],
)
def test_batch_by_file_name(path: str, batch: str):
    assert batch_of_path(path) == batch


def test_batches_shared_by_name_only_are_told():
    told = remarks(run({"a/probe.csv": TEXT, "b/probe.csv": TEXT}))
    assert 'a/probe.csv, b/probe.csv count as one batch, "probe"' in told
    assert not remarks(run({"a/probe.csv": TEXT, "b/probe.csv": TEXT}, {"batch": "one"}))


def test_spelling_problems_do_not_hide_those_of_the_tables():
    found = problems(TEXT.replace("5", "five"), phases={"glass": ["x"], "melt": ["X"]})
    assert len(found) == 2
    assert found[1].column == "MgO"


def test_conditions_must_name_the_experiment():
    with pytest.raises(ValidationError, match="must include experiment"):
        IngestSettings.model_validate(
            {"tables": [{"path": "a.csv"}], "experiments": {"path": "e.csv", "columns": {"T": "T"}}}
        )


def test_a_thousands_point_is_no_decimal_point():
    result = run("Point;Run;Phase;Ni\n1;A;gl;1.234\n2;A;gl;12.500\n", {"thousands": ".", "unit": "ppm"})
    assert result.tables["ingest"].column("value").to_pylist() == [1234.0, 12500.0]
    result = run("Point;Run;Phase;Ni\n1;A;gl;1,234\n2;A;gl;0.5\n", {"thousands": ",", "unit": "ppm"})
    assert result.tables["ingest"].column("value").to_pylist() == [1234.0, 0.5]
