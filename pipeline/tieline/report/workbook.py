"""The workbook as bytes: labels stay text, numbers keep every digit, no formula anywhere.

The writing library makes everything but the rows: styles, widths, frozen headers, filters. The rows are put in
here, column by column, for cell by cell it takes longer than all the rest of the report.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from datetime import UTC, datetime
from zipfile import ZIP_DEFLATED, ZipFile

from tieline.report.sheet_rows import rows_xml
from tieline.report.sheets import Sheet

# A fixed date: the same results give the same bytes.
CREATED = datetime(2000, 1, 1, tzinfo=UTC).replace(tzinfo=None)
WIDEST, NARROWEST = 40, 8
LEGEND = "Cells written like this one enter no phase mean."


def workbook_bytes(sheets: Sequence[Sheet], title: str) -> bytes:
    """One worksheet per sheet, header frozen and filterable; cells in `shaded` are grey, as the first sheet tells."""
    frame, grey = _frame(sheets, title)
    parts = {f"xl/worksheets/sheet{number}.xml": sheet for number, sheet in enumerate(sheets, start=1)}
    stream = io.BytesIO()
    with ZipFile(io.BytesIO(frame)) as source, ZipFile(stream, "w", ZIP_DEFLATED) as target:
        for part in source.infolist():
            data = source.read(part)
            sheet = parts.get(part.filename)
            target.writestr(part, data if sheet is None else _with_rows(data.decode(), sheet, grey).encode())
    return stream.getvalue()


def _frame(sheets: Sequence[Sheet], title: str) -> tuple[bytes, int]:
    """The workbook without its rows, and the number of the style of grey cells."""
    import xlsxwriter

    stream = io.BytesIO()
    with xlsxwriter.Workbook(stream, {"in_memory": True}) as book:
        book.set_properties({"title": title, "created": CREATED})
        header = book.add_format({"bold": True, "bottom": 1, "text_wrap": True, "valign": "top"})
        grey = book.add_format({"font_color": "#808080", "italic": True})
        for sheet in sheets:
            worksheet = book.add_worksheet(sheet.name)
            for place, heading in enumerate(sheet.headings):
                unit = f" [{heading.unit}]" if heading.unit not in ("", "1", "as named") else ""
                worksheet.write_string(0, place, heading.name + unit, header)
                worksheet.set_column(place, place, _width(sheet, place))
            worksheet.freeze_panes(1, 1)
            if sheet.n_rows:
                worksheet.autofilter(0, 0, sheet.n_rows, len(sheet.headings) - 1)
        if any(sheet.shaded for sheet in sheets):
            book.worksheets()[0].write_string(sheets[0].n_rows + 1, 0, LEGEND, grey)
    return stream.getvalue(), int(grey.xf_index or 0)


def _with_rows(xml: str, sheet: Sheet, grey: int) -> str:
    """The part of a worksheet with its rows after the header, and the cells it says it holds."""
    header, end, rest = xml.partition("</row>")
    rows, last_column = rows_xml(sheet, grey)
    last_row = max([sheet.n_rows + 1, *(int(row) for row in re.findall(r'<row r="(\d+)"', xml))])
    header = re.sub(r'<dimension ref="[^"]*"/>', f'<dimension ref="A1:{last_column}{last_row}"/>', header)
    return f"{header}{end}{rows}{rest}"


def _width(sheet: Sheet, place: int) -> int:
    texts = [len(cell) if isinstance(cell, str) else NARROWEST for cell in sheet.columns[place][:200]]
    return min(WIDEST, max(NARROWEST, len(sheet.headings[place].name) + 2, *texts)) if texts else NARROWEST
