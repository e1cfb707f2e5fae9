"""CSV as bytes: full precision, and no label that a spreadsheet program could take for a formula."""

from __future__ import annotations

import csv
import io

from tieline.report.sheets import Cell, Sheet

# What makes a spreadsheet program read a cell as a formula or a command (common knowledge of spreadsheet injection).
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def csv_bytes(sheet: Sheet) -> bytes:
    """UTF-8 with a header line; an empty cell is a missing value, true and false are written in lower case."""
    text = io.StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([_cell(heading.name) for heading in sheet.headings])
    writer.writerows(zip(*([_cell(cell) for cell in column] for column in sheet.columns), strict=True))
    return text.getvalue().encode()


def _cell(cell: Cell) -> str:
    if cell is None:
        return ""
    if isinstance(cell, bool):
        return "true" if cell else "false"
    return defused(cell) if isinstance(cell, str) else repr(cell)


def defused(text: str) -> str:
    """The text with an apostrophe before what would otherwise run as a formula.

    Blanks before the sign do not help: some programs trim them.
    """
    return (
        f"'{text}"
        if text.lstrip(" \n").startswith(FORMULA_STARTS) or text.startswith(FORMULA_STARTS)
        else text
    )
