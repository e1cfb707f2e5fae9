"""The workbook as bytes: labels stay text, numbers stay numbers, no formula anywhere."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Any

from tieline.report.sheets import Cell, Sheet

# A fixed date: the same results give the same bytes.
CREATED = datetime(2000, 1, 1, tzinfo=UTC).replace(tzinfo=None)
LONGEST_TEXT = 32767  # of a cell, by the file format
WIDEST, NARROWEST = 40, 8


class _Exact(float):
    """A number that is written with all its digits; the writing library would keep sixteen."""

    def __format__(self, form: str) -> str:
        return float.__repr__(self)


def workbook_bytes(sheets: Sequence[Sheet], title: str) -> bytes:
    """One worksheet per sheet, header frozen and filterable; cells in `shaded` are grey."""
    import xlsxwriter

    stream = io.BytesIO()
    options = {
        "in_memory": True,
        "strings_to_formulas": False,
        "strings_to_urls": False,
        "strings_to_numbers": False,
    }
    with xlsxwriter.Workbook(stream, options) as book:
        book.set_properties({"title": title, "created": CREATED})
        header = book.add_format({"bold": True, "bottom": 1, "text_wrap": True, "valign": "top"})
        shade = book.add_format({"font_color": "#808080", "italic": True})
        for sheet in sheets:
            _write(book.add_worksheet(sheet.name), sheet, header, shade)
    return stream.getvalue()


def _write(worksheet: Any, sheet: Sheet, header: Any, shade: Any) -> None:
    for place, heading in enumerate(sheet.headings):
        unit = f" [{heading.unit}]" if heading.unit not in ("", "1", "as named") else ""
        worksheet.write_string(0, place, heading.name + unit, header)
    for place, column in enumerate(sheet.columns):
        for row, cell in enumerate(column):
            _write_cell(worksheet, row + 1, place, cell, shade if (row, place) in sheet.shaded else None)
        worksheet.set_column(place, place, _width(sheet, place))
    worksheet.freeze_panes(1, 1)
    if sheet.n_rows:
        worksheet.autofilter(0, 0, sheet.n_rows, len(sheet.headings) - 1)


def _write_cell(worksheet: Any, row: int, column: int, cell: Cell, style: Any) -> None:
    if cell is None or cell == "":
        return
    if isinstance(cell, bool):
        worksheet.write_boolean(row, column, cell, style)
    elif isinstance(cell, str):
        worksheet.write_string(row, column, cell[:LONGEST_TEXT], style)
    elif math.isfinite(cell):
        worksheet.write_number(row, column, _Exact(cell), style)
    else:  # an infinite limit has no number format in the file
        worksheet.write_string(row, column, str(cell), style)


def _width(sheet: Sheet, place: int) -> int:
    texts = [len(cell) if isinstance(cell, str) else NARROWEST for cell in sheet.columns[place][:200]]
    return min(WIDEST, max(NARROWEST, len(sheet.headings[place].name) + 2, *texts)) if texts else NARROWEST
