"""What could not be used, row by row and cell by cell, as table rows and as problems."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import pyarrow as pa

from tieline.columns import INGEST_SET_ASIDE
from tieline.errors import Problem
from tieline.tables import build

SHOWN_TEXT = 60
MOST_PROBLEMS = 200
MOST_LINES = 2_000


def shown(text: str) -> str:
    """A text as it may stand in a message: short, and without control characters."""
    visible = "".join(c if c.isprintable() else f"\\x{ord(c):02x}" for c in text[:SHOWN_TEXT])
    return f"{visible}..." if len(text) > SHOWN_TEXT else visible


@dataclass
class Asides:
    """Lines of `ingest.set_aside` for one table. `expected` lines never stop a run, the others may.

    Where they do, their text is not needed beyond the first ones: `most` lines are kept, `more` counts the rest.
    """

    table: str
    most: int | None = None
    more: int = 0
    rows: list[int] = field(default_factory=list)
    columns: list[str | None] = field(default_factory=list)
    raws: list[str] = field(default_factory=list)
    cells: list[int] = field(default_factory=list)
    reasons: list[str] = field(default_factory=list)
    expected: list[bool] = field(default_factory=list)

    def add(
        self, row: int, column: str | None, raw: str, cells: int, reason: str, expected: bool = False
    ) -> None:
        self.rows.append(row)
        self.columns.append(column)
        self.raws.append(raw)
        self.cells.append(cells)
        self.reasons.append(reason)
        self.expected.append(expected)

    def add_cells(
        self, rows: Sequence[int], column: str, raws: Sequence[str], reasons: Sequence[str]
    ) -> None:
        """Unreadable cells of one column."""
        if self.most is not None:
            free = max(self.most - len(self.rows), 0)
            self.more += len(rows[free:])
            rows, raws, reasons = rows[:free], raws[:free], reasons[:free]
        self.rows.extend(rows)
        self.columns.extend([column] * len(rows))
        self.raws.extend(raws)
        self.cells.extend([1] * len(rows))
        self.reasons.extend(reasons)
        self.expected.extend([False] * len(rows))

    def add_all(self, other: Asides) -> None:
        """The lines of another block of the same table."""
        self.more += other.more
        self.rows += other.rows
        self.columns += other.columns
        self.raws += other.raws
        self.cells += other.cells
        self.reasons += other.reasons
        self.expected += other.expected

    def cell_count(self) -> int:
        return sum(self.cells)

    def problems(self, remedy: str) -> list[Problem]:
        """One problem per line that was not expected, in the order of rows; the first 200 and a count."""
        order = sorted((row, place) for place, row in enumerate(self.rows) if not self.expected[place])
        found = [
            Problem(
                _message(self.raws[place], self.columns[place], self.reasons[place]),
                self.table,
                row,
                self.columns[place],
            )
            for row, place in order[:MOST_PROBLEMS]
        ]
        left = len(order) - len(found) + self.more
        if left:
            found.append(Problem(f"{left} more cells or rows cannot be used.", self.table))
        if found:
            last = found[-1]
            found[-1] = Problem(last.message, last.file, last.row, last.column, remedy)
        return found


def _message(raw: str, column: str | None, reason: str) -> str:
    return f"{reason}." if column is None else f'"{shown(raw)}": {reason}.'


def set_aside_table(asides: Sequence[Asides]) -> pa.Table:
    """The table `ingest.set_aside`, in the order of tables, rows and columns found."""
    lines = [
        (number, row, place, aside)
        for number, aside in enumerate(asides)
        for place, row in enumerate(aside.rows)
    ]
    lines.sort(key=lambda line: line[:3])
    return build(
        INGEST_SET_ASIDE,
        {
            "table": [aside.table for *_, aside in lines],
            "row": [row for _, row, _, _ in lines],
            "column": [aside.columns[place] for *_, place, aside in lines],
            "raw": [aside.raws[place] for *_, place, aside in lines],
            "cells": [aside.cells[place] for *_, place, aside in lines],
            "reason": [aside.reasons[place] for *_, place, aside in lines],
        },
    )
