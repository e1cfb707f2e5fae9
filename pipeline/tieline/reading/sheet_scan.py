"""What the XML of a workbook says before a library builds a sheet: how far it reaches, and its lost cells.

A sheet is built as a whole rectangle in memory, so its reach must be known first, and known from the XML itself: a
pattern that looked for cells would miss those written another way. And the reading library hands over error
cells (`#DIV/0!`) and formulas that were never calculated as blanks, which would turn them into "not
measured": they are found here and put back.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from xml.parsers import expat

Places = dict[tuple[int, int], str]

_LETTERS = re.compile(r"[A-Za-z]{1,3}")
_REPEAT_DIGITS = 12


class UnusualXmlError(ValueError):
    """XML that no spreadsheet program writes: entities of its own, cells that are nowhere."""


class _Scan:
    """Feeds an XML document piece by piece to `start`; texts go to `texts` while that is not None."""

    def __init__(self) -> None:
        self.rows, self.columns = 0, 0
        self.texts: list[str] | None = None
        self._parser = expat.ParserCreate()
        self._parser.StartElementHandler = self.start
        self._parser.StartDoctypeDeclHandler = _refuse_document_type

    def see(self, piece: bytes) -> None:
        """Raises ValueError for what is not XML, or unusual."""
        try:
            self._parser.Parse(piece, False)
        except expat.ExpatError as error:
            raise UnusualXmlError(f"damaged XML: {error}") from None

    def end(self) -> None:
        """Raises ValueError where the document is not complete."""
        try:
            self._parser.Parse(b"", True)
        except expat.ExpatError as error:
            raise UnusualXmlError(f"damaged XML: {error}") from None
        self.finish_cell()

    def start(self, name: str, attributes: Mapping[str, str]) -> None:
        raise NotImplementedError

    def finish_cell(self) -> None:
        raise NotImplementedError

    def collect(self) -> list[str]:
        """A list that takes the texts from here on."""
        texts: list[str] = []
        self.texts = texts
        self._parser.CharacterDataHandler = texts.append
        return texts

    def collect_no_more(self) -> None:
        self.texts = None
        self._parser.CharacterDataHandler = None


def _refuse_document_type(*_: object) -> None:
    raise UnusualXmlError("a document type declaration, which no spreadsheet program writes")


class XlsxScan(_Scan):
    """One XLSX sheet, seen piece by piece. `lost` maps (row, column), from 0, to the text to put back."""

    def __init__(self) -> None:
        super().__init__()
        self.rows, self.columns = 1, 1
        self.lost: Places = {}
        self._row, self._column = 0, 0
        self._numbers: dict[str, int] = {}  # column letters -> number from 1
        self._kind = ""
        self._formula: list[str] | None = None
        self._value: list[str] | None = None

    def start(self, name: str, attributes: Mapping[str, str]) -> None:
        name = name.rpartition(":")[2]
        if name == "c":
            self.finish_cell()
            self._place(attributes.get("r"))
            self._kind = attributes.get("t", "n")
        elif name == "row":
            self.finish_cell()
            row = attributes.get("r", "")
            self._row = _number(row) if row else self._row + 1
            self._column = 0
        elif name == "f" and self._kind:
            self._formula = self.collect()
        elif name == "v" and (self._kind == "e" or self._formula is not None):
            self._value = self.collect()

    def _place(self, reference: str | None) -> None:
        """Where a cell stands: at its reference, or after the one before."""
        if reference is None:
            self._column += 1
        else:
            letters = reference.rstrip("0123456789")
            column = self._numbers.get(letters) or self._new_letters(reference, letters)
            self._row, self._column = _number(reference[len(letters) :]), column
        self.rows = max(self.rows, self._row)
        self.columns = max(self.columns, self._column)

    def _new_letters(self, reference: str, letters: str) -> int:
        if not _LETTERS.fullmatch(letters):
            raise UnusualXmlError(f'a cell at "{reference[:20]}"')
        number = 0
        for letter in letters.upper():
            number = number * 26 + ord(letter) - ord("A") + 1
        return self._numbers.setdefault(letters, number)

    def finish_cell(self) -> None:
        """Notes the cell that ends here if the reading library loses it."""
        if self.texts is not None or self._kind == "e":
            shown = "".join(self._value or ()).strip()
            place = (max(self._row, 1) - 1, self._column - 1)
            if self._kind == "e":
                self.lost[place] = shown or "#N/A"
            elif self._formula is not None and not shown and self._kind != "str":
                self.lost[place] = "=" + "".join(self._formula).strip()
            self.collect_no_more()
        self._kind, self._formula, self._value = "", None, None

    def lost_in(self, sheet: str) -> Places:
        """All lost cells: an XLSX member holds one sheet."""
        return self.lost


class OdsScan(_Scan):
    """All sheets of an ODS file, with repeats written out and blank runs at the edges left out."""

    def __init__(self) -> None:
        super().__init__()
        self.lost: dict[str, Places] = {}
        self._sheet = ""
        self._row, self._row_repeat, self._column, self._cell_repeat = 0, 0, 0, 0
        self._cell: Mapping[str, str] | None = None
        self._has_content = False

    def start(self, name: str, attributes: Mapping[str, str]) -> None:
        if name in ("table:table-cell", "table:covered-table-cell"):
            self.finish_cell()
            self._cell, self._has_content = attributes, False
            if (
                attributes.get("calcext:value-type") == "error"
                or attributes.get("office:value-type") == "error"
            ):
                self.collect()
        elif name == "table:table-row":
            self.finish_cell()
            self._row += self._row_repeat
            self._row_repeat, self._column = _repeats(attributes, "table:number-rows-repeated"), 0
        elif name == "table:table":
            self.finish_cell()
            self._sheet = attributes.get("table:name", "")
            self._row, self._row_repeat = 0, 0
        else:
            self._has_content = True

    def finish_cell(self) -> None:
        """Counts the cell that ends here, and notes an error, which the reading library loses."""
        cell, self._cell = self._cell, None
        if cell is None:
            return
        if self.texts is not None:
            word = "".join(self.texts).strip()
            shown = word if word.startswith(("#", "Err")) else "#N/A"
            self.lost.setdefault(self._sheet, {})[self._row, self._column] = shown
            self.collect_no_more()
        self._column += _repeats(cell, "table:number-columns-repeated")
        if self._has_content or any("value" in name for name in cell):
            self.columns = max(self.columns, self._column)
            self.rows = max(self.rows, self._row + self._row_repeat)

    def lost_in(self, sheet: str) -> Places:
        """Lost cells of one sheet."""
        return self.lost.get(sheet, {})


class ElementList(_Scan):
    """The attributes of all elements of one name, whatever its prefix."""

    def __init__(self, name: str) -> None:
        super().__init__()
        self._name = name
        self.found: list[dict[str, str]] = []

    def start(self, name: str, attributes: Mapping[str, str]) -> None:
        if name.rpartition(":")[2] == self._name:
            self.found.append(dict(attributes))

    def finish_cell(self) -> None:
        """Nothing is kept for the end."""


def elements(xml: bytes, name: str) -> list[dict[str, str]]:
    """The attributes of all elements of a name in a whole document; raises ValueError for unusual XML."""
    scan = ElementList(name)
    scan.see(xml)
    scan.end()
    return scan.found


def _number(digits: str) -> int:
    if not (digits.isascii() and digits.isdigit() and len(digits) <= _REPEAT_DIGITS):
        raise UnusualXmlError(f'a cell in row "{digits[:20]}"')
    return int(digits)


def _repeats(attributes: Mapping[str, str], name: str) -> int:
    return _number(attributes.get(name, "1").strip())
