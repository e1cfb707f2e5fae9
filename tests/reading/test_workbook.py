"""XLSX and ODS workbooks."""

from __future__ import annotations

import datetime
import io
import zipfile
from collections.abc import Callable
from typing import Any

import openpyxl
import pytest

from reading.test_delimited import texts
from tieline.errors import InputError
from tieline.reading.formats import read_grid
from tieline.reading.grid import Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.reading.sheet_scan import XlsxScan
from tieline.reading.workbook import cell_as_text


def workbook(fill: Callable[[Any], None]) -> bytes:
    book = openpyxl.Workbook()
    book.active.title = "First"
    fill(book)
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


def table(rows: list[list[Any]]) -> bytes:
    def fill(book: Any) -> None:
        for row in rows:
            book.active.append(row)

    return workbook(fill)


def read(data: bytes, path: str = "t.xlsx", limits: ReadLimits | None = None, **layout: Any) -> Grid:
    return read_grid(InputFile.from_bytes(path, data), Layout(**layout), limits)


def refusal(data: bytes, path: str = "t.xlsx", limits: ReadLimits | None = None, **layout: Any) -> str:
    with pytest.raises(InputError) as caught:
        read(data, path, limits, **layout)
    return str(caught.value)


def rewritten(data: bytes, name: str, change: Callable[[bytes], bytes]) -> bytes:
    """The archive with one member changed."""
    stream = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(data)) as old, zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as new:
        for info in old.infolist():
            content = old.read(info)
            new.writestr(info, change(content) if info.filename == name else content)
    return stream.getvalue()


def test_numbers_keep_every_digit():
    numbers = [0.1, 1 / 3, 1e-7, 123456789.125, 2.5e20, -0.0625, 7]
    grid = read(table([["Spot", "MgO"], *(["a", number] for number in numbers)]))
    assert [float(row[1]) for row in texts(grid)] == numbers
    assert texts(grid)[-1][1] == "7"
    assert grid.rows().tolist() == [2, 3, 4, 5, 6, 7, 8]


def test_dates_and_truth_values_are_texts_that_are_no_numbers():
    day = datetime.datetime(2024, 3, 1)
    grid = read(table([["Spot", "MgO", "CaO"], ["a", day, True]]))
    assert texts(grid) == [["a", "2024-03-01 00:00:00", "True"]] or texts(grid) == [
        ["a", "2024-03-01", "True"]
    ]
    assert cell_as_text(datetime.time(12, 30)) == "12:30:00"
    assert cell_as_text(0.5, ",") == "0,5"


def test_sheets_by_name_and_number():
    def fill(book: Any) -> None:
        book.active.append(["A", "B"])
        second = book.create_sheet("Data")
        second.append(["Spot", "MgO"])
        second.append(["a", 1.5])

    data = workbook(fill)
    assert read(data).headers == ("A", "B")
    assert read(data, sheet="Data").headers == read(data, sheet=2).headers == ("Spot", "MgO")
    assert 'Did you mean "Data"' in refusal(data, sheet="Dat")
    assert "the workbook has 2" in refusal(data, sheet=3)


def test_rows_count_from_the_top_of_the_sheet():
    grid = read(
        table([[], ["Title"], [], ["Spot", "MgO", "CaO"], [None, "wt%", "wt%"], ["a", 1, 2], [], ["b", 3, 4]])
    )
    assert (grid.found.header_row, grid.found.units_row) == (4, 5)
    assert grid.rows().tolist() == [6, 7, 8]


def test_cells_merged_downwards_show_their_text_in_every_row():
    def fill(book: Any) -> None:
        for row in (["Run", "MgO"], ["TX1", 1], [None, 2], [None, 3], ["TX2", 4]):
            book.active.append(row)
        book.active.merge_cells("A2:A4")

    grid = read(workbook(fill))
    assert [row[0] for row in texts(grid)] == ["TX1", "TX1", "TX1", "TX2"]
    assert grid.notes == ("1 merged areas show their text in every row they cover",)


def test_error_cells_and_formulas_without_a_value_do_not_become_blanks():
    data = table([["Spot", "MgO"], ["a", "#DIV/0!"], ["b", "=A1&B1"], ["c", "1"], ["d", "#N/A"], ["", "=1"]])
    assert [row[1] for row in texts(read(data))] == ["#DIV/0!", "=A1&B1", "1", "#N/A", "=1"]
    sheet = ods(
        f"<table:table-row>{ods_cell('Spot')}{ods_cell('MgO')}</table:table-row>"
        f"<table:table-row>{ods_cell('a')}{ods_cell('#DIV/0!', ODS_ERROR)}</table:table-row>"
    )
    assert texts(read(sheet, "t.ods")) == [["a", "#DIV/0!"]]


def test_a_sheet_seen_in_pieces_is_seen_like_a_whole_one():
    rows = "".join(
        f'<row r="{i}"><c r="A{i}" t="e"><v>#N/A</v></c><c r="AB{i}"><f>A1</f></c><c r="C{i}"><v>1</v></c></row>'
        for i in range(1, 40)
    )
    xml = f"<sheetData>{rows}</sheetData>".encode()
    whole = XlsxScan()
    whole.see(xml)
    assert (whole.rows, whole.columns, len(whole.lost)) == (39, 28, 78)
    assert whole.lost[3, 27] == "=A1"
    for size in (7, 64, 1000):
        pieces = XlsxScan()
        for start in range(0, len(xml), size):
            pieces.see(xml[start : start + size])
        assert (pieces.rows, pieces.columns, pieces.lost) == (whole.rows, whole.columns, whole.lost)


def test_what_is_no_workbook_is_refused():
    assert "not a readable workbook" in refusal(b"PK\x03\x04 nothing")
    assert "not a readable workbook" in refusal(b"Spot,MgO\n", "t.ods")
    whole = table([["Spot", "MgO"], ["a", 1]])
    assert "not a readable workbook" in refusal(whole[: len(whole) // 2])


def test_a_workbook_that_unpacks_to_too_much_is_refused():
    data = table([["Spot", "MgO"], ["a", 1]])
    bomb = rewritten(
        data,
        "xl/worksheets/sheet1.xml",
        lambda xml: xml.replace(b"</worksheet>", b" " * (1 << 24) + b"</worksheet>"),
    )
    assert len(bomb) < 1 << 16
    assert "unpacks to more than" in refusal(bomb, limits=ReadLimits(expanded_bytes=1 << 20))


def test_a_stray_cell_far_away_is_refused_before_the_sheet_is_built():
    def far(xml: bytes) -> bytes:
        cell = b'<row r="1048576"><c r="XFD1048576"><v>1</v></c></row></sheetData>'
        return xml.replace(b"</sheetData>", cell)

    data = rewritten(table([["Spot", "MgO"], ["a", 1]]), "xl/worksheets/sheet1.xml", far)
    assert "spans 1048576 rows and 16384 columns" in refusal(data)


def test_a_lying_size_in_the_archive_does_not_help():
    data = table([["Spot", "MgO"], *[["a", i] for i in range(2000)]])
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        info = archive.getinfo("xl/worksheets/sheet1.xml")
    small = data.replace(info.file_size.to_bytes(4, "little"), (10).to_bytes(4, "little"))
    assert small != data
    try:
        grid = read(small)
    except InputError:
        return
    assert len(texts(grid)) == 2000


def ods(xml_rows: str) -> bytes:
    stream = io.BytesIO()
    spaces = (
        'xmlns:office="urn:oasis:names:tc:opendocument:xmlns:office:1.0" '
        'xmlns:table="urn:oasis:names:tc:opendocument:xmlns:table:1.0" '
        'xmlns:calcext="urn:org:documentfoundation:names:experimental:calc:xmlns:calcext:1.0" '
        'xmlns:text="urn:oasis:names:tc:opendocument:xmlns:text:1.0"'
    )
    content = (
        f'<?xml version="1.0"?><office:document-content {spaces}><office:body><office:spreadsheet>'
        f'<table:table table:name="S">{xml_rows}</table:table></office:spreadsheet></office:body></office:document-content>'
    )
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("mimetype", "application/vnd.oasis.opendocument.spreadsheet", zipfile.ZIP_STORED)
        archive.writestr("META-INF/manifest.xml", '<?xml version="1.0"?><manifest:manifest/>')
        archive.writestr("content.xml", content)
    return stream.getvalue()


def ods_cell(text: str, attributes: str = "") -> str:
    return f'<table:table-cell office:value-type="string" {attributes}><text:p>{text}</text:p></table:table-cell>'


ODS_ERROR = 'office:string-value="" calcext:value-type="error"'
REPEAT_TWICE = 'table:number-columns-repeated="2"'


def test_ods_repeats():
    head = f"<table:table-row>{ods_cell('Spot')}{ods_cell('MgO')}</table:table-row>"
    body = f"<table:table-row>{ods_cell('1', REPEAT_TWICE)}</table:table-row>"
    blank = '<table:table-cell table:number-columns-repeated="16384"/>'
    edge = f'<table:table-row table:number-rows-repeated="1048000">{blank}</table:table-row>'
    assert texts(read(ods(head + body + edge), "t.ods")) == [["1", "1"]]


@pytest.mark.parametrize("columns", [16_000, 10**9])
def test_an_ods_bomb_of_repeats_is_refused(columns: int):
    head = f"<table:table-row>{ods_cell('Spot')}{ods_cell('MgO')}</table:table-row>"
    cell = ods_cell("1", f'table:number-columns-repeated="{columns}"')
    row = f'<table:table-row table:number-rows-repeated="1000000">{cell}</table:table-row>'
    message = refusal(ods(head + row), "t.ods")
    assert "content.xml spans 1000001 rows" in message
