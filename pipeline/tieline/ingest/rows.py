"""Which rows of a grid are spots, and which are blank, repeated headers or summaries."""

from __future__ import annotations

import re
from itertools import accumulate

import numpy as np
import numpy.typing as npt

from tieline.ingest.asides import Asides
from tieline.ingest.texts import Texts
from tieline.reading.cell_text import clean, fold
from tieline.reading.grid import Block, Grid
from tieline.reading.header import is_units_row

Mask = npt.NDArray[np.bool_]

REPEATED_HEADER = "repeated header line"
REPEATED_UNITS = "repeated line of units"
SUMMARY = "summary row between the spots"


def spot_rows(
    grid: Grid,
    label_columns: dict[str, int],
    labels: dict[str, Texts],
    summary_words: tuple[str, ...],
    asides: Asides,
) -> tuple[Mask, int]:
    """Rows that may be spots, and the number of wholly blank rows, which hold no cells.

    Repeated header and unit lines and summary rows go to `asides`, as expected lines.
    """
    keep = np.ones(grid.row_count, dtype=bool)
    keys = list(labels.values())
    first = Texts.from_column(grid.column(0)) if grid.blocks else Texts.constant(None, 0)
    unlabelled = np.all([texts.is_missing() for texts in keys], axis=0) if keys else first.is_missing()
    keys = [labels[name] for name in ("spot", "experiment", "phase", "labels") if name in labels]
    nameless = np.all([texts.is_missing() for texts in keys], axis=0) if keys else first.is_missing()
    header_like = _repeats_header(grid, label_columns, labels)
    pattern = summary_pattern(summary_words)
    summary = first.fitting(pattern)
    if label_columns.get("spot", 0) != 0:
        summary |= labels["spot"].fitting(pattern)
    if "spot" in labels:
        # "Average" in the column of phases, the spot's own cell left empty.
        unnamed = labels["spot"].is_missing()
        for name in ("experiment", "phase", "grain"):
            if name in labels:
                summary |= unnamed & labels[name].fitting(pattern)
    blank_count = 0
    for block, start in _placed_blocks(grid):
        stop = start + len(block.rows)
        blank = _blank_rows(block, np.flatnonzero(unlabelled[start:stop]))
        keep[start + blank] = False
        blank_count += len(blank)
        for position in np.flatnonzero((header_like | summary | nameless)[start:stop] & keep[start:stop]):
            cells = [column[int(position)].as_py() for column in block.cells]
            reason = _row_reason(
                cells, grid, bool(header_like[start + position]), bool(summary[start + position])
            )
            if reason is not None:
                keep[start + position] = False
                row = int(block.rows[position])
                asides.add(row, None, joined(cells, grid), grid.width, reason, expected=True)
    return keep, blank_count


def summary_pattern(words: tuple[str, ...]) -> str:
    """Fits the start of a label that says that its row sums up others.

    A known word alone, or a long one followed by more: "Average", "Mean ol (n = 8)". But "n 3" or "max-2" may
    be spots; short words count only when they stand alone.
    """
    cleaned = [clean(word) for word in words if word.strip()]
    alone = [rf"^{re.escape(word)}$" for word in cleaned]
    started = [rf"^{re.escape(word)}[^\w]" for word in cleaned if len(word) >= 4]
    return "|".join([*alone, *started]) or r"^$"


def is_summary(text: str, grid: Grid, words: tuple[str, ...]) -> bool:
    """Whether a row that has too few or too many cells to be a spot sums up others, by its first cell."""
    first = clean(text.split(grid.found.delimiter or "\t", 1)[0].strip(' "'))
    return bool(first) and re.search(summary_pattern(words), first, re.IGNORECASE) is not None


def joined(cells: list[str], grid: Grid) -> str:
    """A row as one text."""
    return (grid.found.delimiter or "\t").join(cells)


def _placed_blocks(grid: Grid) -> list[tuple[Block, int]]:
    sizes = [len(block.rows) for block in grid.blocks]
    return list(zip(grid.blocks, accumulate(sizes, initial=0), strict=False))


def _repeats_header(grid: Grid, label_columns: dict[str, int], labels: dict[str, Texts]) -> Mask:
    found = np.zeros(grid.row_count, dtype=bool)
    for name, texts in labels.items():
        found |= texts.fitting(f"^{re.escape(clean(grid.headers[label_columns[name]]))}$")
    if not labels and grid.blocks:
        found |= Texts.from_column(grid.column(0)).fitting(f"^{re.escape(clean(grid.headers[0]))}$")
    return found


def _blank_rows(block: Block, candidates: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    """The candidates of which every cell is blank."""
    for column in block.cells:
        if not candidates.size:
            return candidates
        texts = column.take(candidates).to_pylist()
        candidates = candidates[np.array([not text.strip() for text in texts], dtype=bool)]
    return candidates


def _row_reason(cells: list[str], grid: Grid, header_like: bool, summary: bool) -> str | None:
    if header_like:
        same = sum(
            1
            for cell, header in zip(cells, grid.headers, strict=True)
            if header and fold(cell) == fold(header)
        )
        if 2 * same >= sum(1 for header in grid.headers if header.strip()):
            return REPEATED_HEADER
    if is_units_row(cells):
        return REPEATED_UNITS
    return SUMMARY if summary else None
