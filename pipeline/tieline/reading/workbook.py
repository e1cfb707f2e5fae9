"""Sheets of XLSX and ODS workbooks into a grid, read by the calamine library."""

from __future__ import annotations

import datetime
from collections.abc import Sequence
from io import BytesIO

import numpy as np
import pyarrow as pa
from python_calamine import CalamineError, CalamineSheet, CalamineWorkbook

from tieline.errors import InputError, Problem, nearest
from tieline.reading.delimited import check_width, decided_decimal, locate_header, locate_units
from tieline.reading.grid import Block, Found, Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.reading.packed import scan_workbook, unreadable
from tieline.reading.sheet_scan import Places

HEAD_ROWS = 1000
BLOCK_ROWS = 1 << 14
Cell = str | float | int | bool | datetime.date | datetime.time | datetime.timedelta


def read_workbook(file: InputFile, layout: Layout, limits: ReadLimits) -> Grid:
    """Reads one sheet; see `formats.read_grid`.

    Numbers are written with as many digits as they need to read back the same, with the layout's decimal
    mark. Cells merged downwards show their text in every row they cover, as they do in the spreadsheet.
    """
    scans = scan_workbook(file, limits)
    try:
        with CalamineWorkbook.from_filelike(BytesIO(memoryview(file.data))) as workbook:
            name = _sheet_name(file, workbook.sheet_names, layout.sheet)
            sheet = workbook.get_sheet_by_name(name)
            _check_size(file, sheet, limits)
            rows: list[list[Cell]] = sheet.to_python(skip_empty_area=False)
            _put_back(rows, scans.lost_cells(name))
            merged = _fill_merged(rows, sheet)
    except (CalamineError, OSError, ValueError) as error:
        raise InputError(unreadable(file, error)) from error
    except BaseException as error:
        if (
            type(error).__name__ == "PanicException"
        ):  # how the library shows that it met what it cannot handle
            raise InputError(unreadable(file, error)) from error
        raise
    return _grid(file, layout, limits, name, rows, merged)


def _sheet_name(file: InputFile, names: Sequence[str], wanted: str | int | None) -> str:
    if not names:
        raise InputError(Problem("the workbook has no sheet.", file.path))
    if wanted is None:
        return names[0]
    if isinstance(wanted, int):
        if 1 <= wanted <= len(names):
            return names[wanted - 1]
        raise InputError(Problem(f"there is no sheet {wanted}; the workbook has {len(names)}.", file.path))
    if wanted in names:
        return wanted
    remedy = nearest(wanted, names) or f"Sheets: {', '.join(names[:20])}."
    raise InputError(Problem(f'there is no sheet "{wanted}".', file.path, remedy=remedy))


def _check_size(file: InputFile, sheet: CalamineSheet, limits: ReadLimits) -> None:
    check_width(file, sheet.total_width, limits)
    if sheet.total_width * sheet.total_height > limits.cells:
        message = (
            f"the sheet has {sheet.total_height} rows and {sheet.total_width} columns, more than is read."
        )
        raise InputError(Problem(message, file.path, remedy="If that is right, raise ingest.limits.cells."))


def _put_back(rows: list[list[Cell]], lost: Places) -> None:
    """Error cells and formulas without a value, which the library reads as blanks."""
    width = max((len(row) for row in rows), default=0)
    for (row, column), text in sorted(lost.items()):
        while row >= len(rows):
            rows.append([""] * width)
        if column >= width:
            width = column + 1
            for line in rows:
                line.extend([""] * (width - len(line)))
        if rows[row][column] == "":
            rows[row][column] = text


def _fill_merged(rows: list[list[Cell]], sheet: CalamineSheet) -> int:
    """Writes the text of cells merged downwards into all rows they cover; how many merged areas there were."""
    areas = [area for area in sheet.merged_cell_ranges or () if area[1][0] > area[0][0]]
    cells = sum(min(bottom + 1, len(rows)) - top for (top, _), (bottom, _) in areas)
    if cells > len(rows) * max(sheet.total_width, 1):
        raise ValueError("its merged areas cover one another")
    for (top, left), (bottom, _) in areas:
        for row in range(top + 1, min(bottom + 1, len(rows))):
            if left < len(rows[row]) and rows[row][left] == "":
                rows[row][left] = rows[top][left]
    return len(areas)


def _grid(
    file: InputFile, layout: Layout, limits: ReadLimits, sheet: str, rows: list[list[Cell]], merged: int
) -> Grid:
    mark = layout.decimal or "."
    head = [[cell_as_text(cell, mark) for cell in row] for row in rows[: layout.skip_rows + HEAD_ROWS]]
    header_index = locate_header(file, head, layout)
    units_index = locate_units(head, header_index, layout)
    first = (units_index if units_index is not None else header_index) + 1
    headers = tuple(head[header_index])
    check_width(file, len(headers), limits)
    decimal = decided_decimal(file, head[first:], layout)
    blocks = [
        _block(rows, start, min(start + BLOCK_ROWS, len(rows)), mark)
        for start in range(first, len(rows), BLOCK_ROWS)
    ]
    found = Found(
        kind="workbook",
        sheet=sheet,
        decimal=decimal,
        header_row=header_index + 1,
        units_row=None if units_index is None else units_index + 1,
    )
    notes = (f"{merged} merged areas show their text in every row they cover",) if merged else ()
    units = None if units_index is None else tuple(head[units_index])
    return Grid(file.path, headers, units, blocks, found, (), notes)


def _block(rows: list[list[Cell]], start: int, stop: int, mark: str) -> Block:
    columns = zip(*rows[start:stop], strict=True)
    cells = tuple(pa.array([cell_as_text(cell, mark) for cell in column], pa.string()) for column in columns)
    return Block(np.arange(start + 1, stop + 1, dtype=np.int32), cells)


def cell_as_text(cell: Cell, decimal: str = ".") -> str:
    """A spreadsheet cell as text: numbers with the digits they need, whole ones without a point."""
    if isinstance(cell, str):
        return cell
    if isinstance(cell, float):
        text = repr(int(cell)) if cell.is_integer() and abs(cell) < 1e15 else repr(cell)
        return text if decimal == "." else text.replace(".", decimal)
    if isinstance(cell, datetime.datetime | datetime.date | datetime.time):
        return cell.isoformat(" ") if isinstance(cell, datetime.datetime) else cell.isoformat()
    return str(cell)
