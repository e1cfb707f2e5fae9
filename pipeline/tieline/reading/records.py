"""Small tables with known columns (accepted values, rulings, conditions): texts and numbers by name."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import compress
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.errors import InputError, Problem, nearest
from tieline.reading.cell_text import UNREADABLE, VALUE, CellStyle, clean, fold
from tieline.reading.cells import REASONS, parse_cells
from tieline.reading.formats import read_grid
from tieline.reading.grid import Grid
from tieline.reading.input_file import InputFile

NOT_GIVEN = ("", "-", "\N{EN DASH}", "\N{EM DASH}", "n.a.", "na", "n.d.", "nd")
MOST_PROBLEMS = 200


@dataclass(frozen=True)
class TextRecords:
    """Text columns of the rows that are not wholly blank, with their row numbers and decimal mark."""

    columns: dict[str, pa.StringArray]
    rows: npt.NDArray[np.int32]
    decimal: str


def read_records(
    file: InputFile,
    columns: Mapping[str, str],
    numbers: frozenset[str] = frozenset(),
    required: frozenset[str] | None = None,
) -> dict[str, Any]:
    """Columns of a small table: lists of texts (None where blank), float arrays for `numbers` (NaN where blank).

    columns: name -> header. `required` columns must exist and, for these, no cell may be blank; by default
    all; a missing column that is not required is filled with blanks. The result has `row` besides: the row
    number of every record. Raises InputError with every missing column, blank cell and text in a number
    column, with file, row and column.
    """
    required = frozenset(columns) if required is None else required
    texts = read_texts(file, columns, required)
    problems: list[Problem] = []
    result: dict[str, Any] = {"row": texts.rows}
    for name, header in columns.items():
        column = texts.columns[name]
        if name in numbers:
            result[name], blank = _numbers(file, header, column, texts, problems)
        else:
            result[name] = [text.strip() or None for text in column.to_pylist()]
            blank = np.array([text is None for text in result[name]], dtype=bool)
        if name in required:
            problems += [
                Problem("the cell is blank.", file.path, int(row), header) for row in texts.rows[blank]
            ]
    if problems:
        problems.sort(key=lambda problem: problem.row or 0)
        raise InputError(problems[:MOST_PROBLEMS])
    return result


def read_texts(
    file: InputFile, columns: Mapping[str, str], required: frozenset[str] | None = None
) -> TextRecords:
    """The named columns as texts. Raises InputError for missing and doubled columns and rows of another length."""
    texts, rows, decimal = _texts(*_matched(file, columns, required))
    arrays = {name: pa.array(column, pa.string()) for name, column in texts.items()}
    return TextRecords(arrays, rows, decimal)


def read_labels(file: InputFile, header: str) -> list[str]:
    """One column as texts, blanks left out; raises InputError as `read_texts` does."""
    texts, _, _ = _texts(*_matched(file, {header: header}, None))
    return [text.strip() for text in texts[header] if text.strip()]


def _matched(
    file: InputFile, columns: Mapping[str, str], required: frozenset[str] | None
) -> tuple[Grid, dict[str, int | None]]:
    required = frozenset(columns) if required is None else required
    from tieline.reading.layout import Layout

    grid = read_grid(file, Layout(expected_headers=tuple(columns.values()), units_row=False))
    problems = [
        Problem(f"the row has {row.cells} cells, the header {grid.width}.", file.path, row.row)
        for row in grid.ragged
    ]
    found: dict[str, int | None] = {}
    for name, header in columns.items():
        # Exactly as written first: T and t may be two columns.
        exact = [index for index, text in enumerate(grid.headers) if clean(text) == clean(header)]
        matches = exact or [index for index, text in enumerate(grid.headers) if fold(text) == fold(header)]
        found[name] = matches[0] if matches else None
        if len(matches) > 1:
            problems.append(Problem("the header stands twice.", file.path, grid.found.header_row, header))
        elif not matches and name in required:
            remedy = nearest(header, [text for text in grid.headers if text.strip()])
            problems.append(
                Problem("there is no such column.", file.path, grid.found.header_row, header, remedy)
            )
    if problems:
        raise InputError(problems)
    return grid, found


def _texts(
    grid: Grid, found: Mapping[str, int | None]
) -> tuple[dict[str, list[str]], npt.NDArray[np.int32], str]:
    """The columns as lists: Arrow would import pandas to look at one, and `status` needs no more than this."""
    rows = grid.rows()
    cells = [[column.to_pylist() for column in block.cells] for block in grid.blocks]
    filled = np.array(
        [any(text.strip() for text in row) for block in cells for row in zip(*block, strict=True)], dtype=bool
    )
    columns = {}
    for name, index in found.items():
        texts = [""] * len(rows) if index is None else [text for block in cells for text in block[index]]
        columns[name] = list(compress(texts, filled))
    return columns, rows[filled] if len(rows) else rows, grid.found.decimal


def _numbers(
    file: InputFile, header: str, column: pa.StringArray, texts: TextRecords, problems: list[Problem]
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.bool_]]:
    """Numbers of a column and which cells are blank; anything else is a problem."""
    cells = parse_cells(column, CellStyle(decimal=texts.decimal, not_measured=NOT_GIVEN))
    for place in np.flatnonzero(np.isnan(cells.value) & (cells.state != VALUE)).tolist():
        text = column[place].as_py()
        if cells.state[place] == UNREADABLE:
            message = f'"{text[:60]}": {REASONS[cells.reason[place]][1]}.'
            problems.append(Problem(message, file.path, int(texts.rows[place]), header))
        elif not np.isnan(cells.limit[place]):
            problems.append(
                Problem(f'"{text[:60]}": a limit, not a value.', file.path, int(texts.rows[place]), header)
            )
    said = (cells.state == UNREADABLE) | ~np.isnan(cells.limit)
    return cells.value, np.isnan(cells.value) & ~said
