"""The spreadsheet is a sound file whose cells are those of its sheets."""

from __future__ import annotations

import io
import zipfile
from pathlib import Path
from xml.etree import ElementTree

import openpyxl
import pytest
from openpyxl.utils.escape import unescape
from python_calamine import CalamineWorkbook

from tieline.report.sheet_rows import column_letters
from tieline.report.sheets import Cell, Heading, Sheet
from tieline.report.source import Source
from tieline.report.spots import spot_use
from tieline.report.values_sheet import spots_sheet
from tieline.report.workbook import workbook_bytes


def test_cells_of_every_kind_come_back(tmp_path: Path):
    texts = [
        " a ",
        "x_x0041_y",
        "<&>\"'",
        "line\nbreak",
        "tab\tand\rreturn",
        "bell\x07",
        "é µ 中 🜁",
        "",
        "-1",
    ]
    columns: tuple[list[Cell], ...] = (
        [*texts, None], [0.1, -2, 1e-300, 5e300, 0.1 + 0.2, True, False, None, -0.0, 9007199254740992]
    )  # fmt: skip
    headings = (Heading("a"), Heading("b", "ug/g"))
    data = workbook_bytes(
        [Sheet("x", headings, columns), Sheet("none", (), ()), Sheet("bare", headings, ([], []))], "t"
    )
    book = openpyxl.load_workbook(io.BytesIO(data))
    header, *rows = book["x"].iter_rows(values_only=True)
    assert header == ("a", "b [ug/g]")
    assert [row[1] for row in rows] == columns[1]
    assert [unescape(row[0]) if row[0] else row[0] for row in rows] == [text or None for text in columns[0]]
    assert list(book["bare"].iter_rows(values_only=True)) == [("a", "b [ug/g]")]
    (tmp_path / "t.xlsx").write_bytes(data)
    read = CalamineWorkbook.from_path(tmp_path / "t.xlsx").get_sheet_by_name("x").to_python()
    assert [row[1] for row in read[1:]] == ["" if cell is None else cell for cell in columns[1]]
    # Older versions of this reader leave escapes such as _x005F_ as they stand; openpyxl is asked about them above.
    plain = [place for place, text in enumerate(texts[:4]) if "_x" not in text]
    assert [read[1 + place][0] for place in plain] == [texts[place] for place in plain]


def test_the_rows_of_a_workbook_are_where_its_parts_say(ember_files: dict[str, bytes]):
    with zipfile.ZipFile(io.BytesIO(ember_files["partition_coefficients.xlsx"])) as book:
        for name in (name for name in book.namelist() if name.startswith("xl/worksheets/")):
            xml = ElementTree.fromstring(book.read(name))
            space = xml.tag.removesuffix("worksheet")
            rows = [int(row.get("r", "")) for row in xml.iter(f"{space}row")]
            assert rows == list(range(1, len(rows) + 1))
            cells = [cell.get("r", "") for cell in xml.iter(f"{space}c")]
            assert len(cells) == len(set(cells))
            dimension = xml.find(f"{space}dimension")
            assert dimension is not None
            n_columns = max(
                openpyxl.utils.cell.coordinate_from_string(cell)[0].rjust(3) for cell in cells
            ).strip()
            assert dimension.get("ref") == f"A1:{n_columns}{len(rows)}"


def test_unused_values_are_grey_and_the_first_sheet_says_so(
    ember_source: Source, ember_files: dict[str, bytes]
):
    book = openpyxl.load_workbook(io.BytesIO(ember_files["partition_coefficients.xlsx"]))
    grey = {
        (cell.row - 2, cell.column - 1)
        for row in book["spots"].iter_rows(min_row=2)
        for cell in row
        if cell.value is not None and cell.font.italic
    }
    sheet = spots_sheet(ember_source, spot_use(ember_source.tables))
    assert grey == {(row, place) for row, place in sheet.shaded if sheet.columns[place][row] is not None}
    legend = book["readme"].cell(row=book["readme"].max_row, column=1)
    assert legend.font.italic
    assert "no phase mean" in legend.value


@pytest.mark.parametrize("place", [0, 25, 26, 51, 701, 702, 16383])
def test_columns_have_the_letters_of_a_spreadsheet(place: int):
    assert column_letters(place) == openpyxl.utils.get_column_letter(place + 1)
