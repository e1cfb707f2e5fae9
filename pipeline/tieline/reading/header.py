"""Which of the first rows is the header, whether units follow it, and which decimal mark the cells use."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Sequence

from tieline.reading.cell_text import fold, unit_of

_NUMERIC = re.compile(r"[<\u2264]?\s*[+\-\u2212]?[0-9][0-9.,'\s]*(?:[eE][+-]?[0-9]+)?%?")
_COMMA_NUMBER = re.compile(r"[<\u2264]?\s*[+\-\u2212]?([0-9]+),([0-9]+)(?:[eE][+-]?[0-9]+)?")
_POINT_NUMBER = re.compile(r"[<\u2264]?\s*[+\-\u2212]?[0-9]*\.[0-9]+(?:[eE][+-]?[0-9]+)?")
_OTHER_UNITS = frozenset(
    fold(word)
    for word in (
        "um", "\u00b5m", "mm", "nm", "\u00b0c", "c", "k", "kbar", "gpa", "mpa", "bar", "h", "hr", "hours", "min", "s", "d",
        "1s", "2s", "1\u03c3", "2\u03c3", "1sd", "2sd", "1se", "2se", "rel%", "% rel", "rsd", "apfu", "cps", "mol%", "at%",
    )
)  # fmt: skip


def is_numeric(text: str) -> bool:
    """Whether a cell looks like a number in any notation."""
    return _NUMERIC.fullmatch(text.strip()) is not None


def find_header(rows: Sequence[Sequence[str]], expected: Iterable[str] = ()) -> int | None:
    """Index of the header among the first rows, or None.

    The row holding most of the `expected` headers; without any, the first row that fills at least seven in ten
    columns of the table and has no more than one number in ten cells.
    """
    wanted = {fold(text) for text in expected if text}
    if wanted:
        hits = [len(wanted & {fold(cell) for cell in row}) for row in rows]
        best = max(hits, default=0)
        if best:
            return hits.index(best)
    widths = Counter(_filled(row) for row in rows if _filled(row) > 1)
    usual = max(widths, key=lambda width: (widths[width], width)) if widths else 1
    for index, row in enumerate(rows):
        filled = [cell for cell in row if cell.strip()]
        if len(filled) >= max(1, 0.7 * usual) and sum(map(is_numeric, filled)) <= len(filled) / 10:
            return index
    return None


def is_units_row(row: Sequence[str]) -> bool:
    """Whether a row holds units: no numbers, at least one concentration unit, and half of its texts are units."""
    filled = [cell for cell in row if cell.strip()]
    if not filled or any(is_numeric(cell) for cell in filled):
        return False
    known = [cell for cell in filled if unit_of(cell) or fold(cell).strip("()[] ") in _OTHER_UNITS]
    return any(unit_of(cell) for cell in filled) and 2 * len(known) >= len(filled)


def find_decimal(rows: Iterable[Sequence[str]]) -> str | None:
    """`.` or `,` from the numbers in some rows; None where commas may be decimal marks or thousands separators.

    The majority decides, for labels may look like numbers. A wrong mark cannot change a number: a number with
    the other mark is unreadable.
    """
    comma_only, proof, point = 0, 0, 0
    for row in rows:
        for cell in row:
            text = cell.strip()
            if match := _COMMA_NUMBER.fullmatch(text):
                comma_only += 1
                # "1,234" may be either; "0,234" and "1,23" can only be a decimal comma.
                proof += len(match.group(2)) != 3 or match.group(1).startswith("0") or len(match.group(1)) > 3
            elif _POINT_NUMBER.fullmatch(text):
                point += 1
    if proof > point:
        return ","
    return None if comma_only and not point else "."


def _filled(row: Sequence[str]) -> int:
    return sum(1 for cell in row if cell.strip())
