"""What the XML of a sheet says before a library builds the sheet: how far it reaches, and its lost cells.

A sheet is built as a whole rectangle in memory, so its reach must be known first. And the reading library
hands over error cells (`#DIV/0!`) and formulas that were never calculated as blanks, which would turn them
into "not measured": they are found here and put back.
"""

from __future__ import annotations

import html
import re

Places = dict[tuple[int, int], str]

_REFERENCE = re.compile(rb'<(?:\w+:)?c\b[^>]{0,200}?\br="([A-Z]{1,3})([0-9]{1,7})"')
_CELL_PLACE = re.compile(rb'\br="([A-Z]{1,3})([0-9]{1,7})"')
_CELL_VALUE = re.compile(rb"<(?:\w+:)?v\b[^>]*>([^<]*)</")
_CELL_FORMULA = re.compile(rb"<(?:\w+:)?f\b[^>]*?(?:/>|>([^<]*)</)")

_ODS_TAG = re.compile(rb"<table:(table-row|table-cell|covered-table-cell|table)\b([^>]{0,4000})>")
_ODS_NAME = re.compile(rb'table:name="([^"]*)"')
_ODS_TEXT = re.compile(rb"<text:p[^>]*>([^<]*)<")
_ROWS_REPEATED = re.compile(rb"number-rows-repeated=[\"']([0-9]+)")
_COLUMNS_REPEATED = re.compile(rb"number-columns-repeated=[\"']([0-9]+)")

LONGEST_CELL = 1 << 20


class XlsxScan:
    """One XLSX sheet, seen piece by piece. `lost` maps (row, column), from 0, to the text to put back."""

    def __init__(self) -> None:
        self.rows, self.columns = 1, 1
        self.lost: Places = {}
        self._rest = b""

    def see(self, piece: bytes) -> None:
        text = self._rest + piece
        for letters, digits in set(_REFERENCE.findall(text)):
            self.rows = max(self.rows, int(digits))
            self.columns = max(self.columns, _column_number(letters))
        if b't="e"' in text or b"<f" in text or b":f" in text:
            self._find_lost(text)
        last = max(text.rfind(b"<c "), text.rfind(b":c "))
        cut = text.rfind(b"<", 0, last + 1) if last >= 0 else 0
        self._rest = text[cut:][-LONGEST_CELL:]

    def _find_lost(self, text: bytes) -> None:
        opening = b"<c " if b"<c " in text else b":c "
        for cell in text.split(opening)[1:]:
            if b't="e"' not in cell and b"<f" not in cell and b":f" not in cell:
                continue
            attributes, _, content = cell.partition(b">")
            place = _CELL_PLACE.search(b" " + attributes)
            if place is None or b't="str"' in attributes:
                continue
            lost = _lost_text(attributes, content)
            if lost:
                self.lost[int(place.group(2)) - 1, _column_number(place.group(1)) - 1] = unescaped(lost)

    def end(self) -> None:
        """Nothing is kept back."""

    def lost_in(self, sheet: str) -> Places:
        """All lost cells: an XLSX member holds one sheet."""
        return self.lost


class OdsScan:
    """All sheets of an ODS file, with repeats written out and blank runs at the edges left out."""

    def __init__(self) -> None:
        self.rows, self.columns = 0, 0
        self.lost: dict[str, Places] = {}
        self._rest, self._sheet = b"", ""
        self._row, self._repeat, self._column = 0, 0, 0

    def see(self, piece: bytes) -> None:
        text = self._rest + piece
        end = max(text.rfind(b"<table:"), 0)  # the last tag and its text may be cut
        self._tags(text, end)
        self._rest = text[end:][-LONGEST_CELL:]

    def end(self) -> None:
        """Sees what was kept back for the next piece."""
        self._tags(self._rest, len(self._rest))

    def _tags(self, text: bytes, end: int) -> None:
        for match in _ODS_TAG.finditer(text, 0, end):
            self._tag(match.group(1), match.group(2), text, match.end())

    def _tag(self, name: bytes, attributes: bytes, text: bytes, end: int) -> None:
        if name == b"table":
            found = _ODS_NAME.search(attributes)
            self._sheet = unescaped(found.group(1)) if found else ""
            self._row, self._repeat = 0, 0
        elif name == b"table-row":
            self._row += self._repeat
            self._repeat, self._column = _repeats(_ROWS_REPEATED, attributes), 0
        else:
            if b'value-type="error"' in attributes:
                shown = _ODS_TEXT.search(text, end, end + 200)
                word = (
                    unescaped(shown.group(1))
                    if shown and shown.group(1).startswith((b"#", b"Err"))
                    else "#N/A"
                )
                self.lost.setdefault(self._sheet, {})[self._row, self._column] = word
            self._column += _repeats(_COLUMNS_REPEATED, attributes)
            if not attributes.endswith(b"/") or b"value" in attributes:
                self.columns = max(self.columns, self._column)
                self.rows = max(self.rows, self._row + self._repeat)

    def lost_in(self, sheet: str) -> Places:
        """Lost cells of one sheet."""
        return self.lost.get(sheet, {})


def _lost_text(attributes: bytes, content: bytes) -> bytes:
    """The error word of a cell, or its formula where no value is stored; empty for other cells."""
    value, formula = _CELL_VALUE.search(content), _CELL_FORMULA.search(content)
    shown = value.group(1) if value is not None else b""
    if b't="e"' in attributes:
        return shown or b"#N/A"
    return b"=" + (formula.group(1) or b"") if formula is not None and not shown else b""


def _repeats(pattern: re.Pattern[bytes], attributes: bytes) -> int:
    match = pattern.search(attributes)
    return int(match.group(1)[:12]) if match else 1


def _column_number(letters: bytes) -> int:
    number = 0
    for letter in letters:
        number = number * 26 + letter - ord("A") + 1
    return number


def unescaped(xml: bytes) -> str:
    """XML text without its entities."""
    return html.unescape(xml.decode("utf-8", "replace"))
