"""XLSX files written by hand, so that they can be wrong in every way."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping

TYPES = (
    '<?xml version="1.0"?><Types xmlns="http://schemas.openxmlformats.org/package/2006/content-types">'
    '<Default Extension="rels" ContentType="application/vnd.openxmlformats-package.relationships+xml"/>'
    '<Default Extension="xml" ContentType="application/xml"/>'
    '<Override PartName="/xl/workbook.xml" '
    'ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml"/>'
    '<Override PartName="/xl/worksheets/sheet1.xml" '
    'ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.worksheet+xml"/></Types>'
)
RELATIONS = (
    '<?xml version="1.0"?><Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
    '<Relationship Id="rId1" Type="http://schemas.openxmlformats.org/officeDocument/2006/relationships/{kind}" '
    'Target="{target}"/></Relationships>'
)
WORKBOOK = (
    '<?xml version="1.0"?><workbook xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main" '
    'xmlns:r="http://schemas.openxmlformats.org/officeDocument/2006/relationships">'
    '<sheets><sheet name="probe" sheetId="1" r:id="rId1"/></sheets></workbook>'
)
SHEET = (
    '<?xml version="1.0"?>{before}<worksheet xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main">'
    "<sheetData>{rows}</sheetData>{after}</worksheet>"
)


def text_cell(place: str, text: str) -> str:
    return f'<c r="{place}" t="inlineStr"><is><t>{text}</t></is></c>'


def number_cell(place: str, number: object) -> str:
    return f'<c r="{place}"><v>{number}</v></c>'


HEADER_ROW = f'<row r="1">{text_cell("A1", "Point")}{text_cell("B1", "MgO")}</row>'
ONE_ROW = f'<row r="2">{text_cell("A2", "p1")}{number_cell("B2", 48.5)}</row>'


def workbook(
    rows: str = HEADER_ROW + ONE_ROW,
    *,
    before: str = "",
    after: str = "",
    more: Mapping[str, str | bytes] | None = None,
    packed: bool = True,
) -> bytes:
    """An XLSX file of one sheet with the given XML rows; `more` adds or replaces members."""
    members: dict[str, str | bytes] = {
        "[Content_Types].xml": TYPES,
        "_rels/.rels": RELATIONS.format(kind="officeDocument", target="xl/workbook.xml"),
        "xl/workbook.xml": WORKBOOK,
        "xl/_rels/workbook.xml.rels": RELATIONS.format(kind="worksheet", target="worksheets/sheet1.xml"),
        "xl/worksheets/sheet1.xml": SHEET.format(before=before, rows=rows, after=after),
        **(more or {}),
    }
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED if packed else zipfile.ZIP_STORED) as archive:
        for name, content in members.items():
            archive.writestr(name, content)
    return stream.getvalue()
