"""Rows of a worksheet as Office Open XML (ECMA-376 part 1, 18.3.1): inline texts, numbers, true and false."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from functools import cache
from xml.sax.saxutils import escape

from tieline.report.sheets import Cell, Sheet

FIRST_ROW = 2  # below the header
LONGEST_TEXT = 32767  # of a cell, by the file format
# What XML cannot hold stands as _xHHHH_; what only looks so has its first character written that way.
_NO_XML = re.compile("[\x00-\x08\x0b-\x1f\ufffe\uffff]")
_LIKE_ESCAPED = re.compile("_(?=x[0-9A-Fa-f]{4}_)")


def rows_xml(sheet: Sheet, grey: int) -> tuple[str, str]:
    """The rows below the header, and the letters of the last column. grey: style of the cells in `shaded`."""
    shaded: dict[int, set[int]] = {}
    for row, place in sheet.shaded:
        shaded.setdefault(place, set()).add(row)
    letters = [column_letters(place) for place in range(len(sheet.columns))]
    columns = [
        _cells(column, letters[place], shaded.get(place, set()), grey)
        for place, column in enumerate(sheet.columns)
    ]
    rows = (
        f'<row r="{number}">{"".join(cells)}</row>'
        for number, cells in enumerate(zip(*columns, strict=True), start=FIRST_ROW)
    )
    return "".join(rows), letters[-1] if letters else "A"


def column_letters(place: int) -> str:
    """A, B, ..., Z, AA, ... for 0, 1, ..."""
    letters = ""
    place += 1
    while place:
        place, digit = divmod(place - 1, 26)
        letters = chr(ord("A") + digit) + letters
    return letters


def _cells(column: Sequence[Cell], letters: str, shaded: set[int], grey: int) -> list[str]:
    """One text per row, empty for a cell that holds nothing."""
    text = cache(_inline)
    cells = []
    for row, cell in enumerate(column):
        if cell is None or cell == "":
            cells.append("")
            continue
        style = f' s="{grey}"' if row in shaded else ""
        place = f'<c r="{letters}{row + FIRST_ROW}"{style}'
        if isinstance(cell, str):
            cells.append(f"{place}{text(cell)}")
        elif isinstance(cell, bool):
            cells.append(f'{place} t="b"><v>{cell:d}</v></c>')
        elif math.isfinite(cell):
            cells.append(f"{place}><v>{cell!r}</v></c>")
        else:  # an infinite limit has no number in the file
            cells.append(f"{place}{text(str(cell))}")
    return cells


def _inline(text: str) -> str:
    text = _NO_XML.sub(
        lambda found: f"_x{ord(found[0]):04X}_", _LIKE_ESCAPED.sub("_x005F_", text[:LONGEST_TEXT])
    )
    space = ' xml:space="preserve"' if text != text.strip() else ""
    return f' t="inlineStr"><is><t{space}>{escape(text)}</t></is></c>'
