"""A table as text cells with the row numbers a spreadsheet shows."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pyarrow as pa


@dataclass(frozen=True)
class ReadLimits:
    """Beyond these a table is refused: memory stays bounded whatever the file claims to be."""

    columns: int = 5_000
    cells: int = 100_000_000
    expanded_bytes: int = 2_000_000_000


@dataclass(frozen=True)
class Block:
    """Some consecutive rows: one string array per column, without nulls, and the row number of every row."""

    rows: npt.NDArray[np.int32]
    cells: tuple[pa.StringArray, ...]

    def kept(self, keep: npt.NDArray[np.bool_]) -> Block:
        """The rows that are kept; the block itself when all are."""
        if keep.all():
            return self
        return Block(self.rows[keep], tuple(column.filter(pa.array(keep)) for column in self.cells))


@dataclass(frozen=True)
class RaggedRow:
    """A row with another number of cells than the header."""

    row: int
    cells: int
    text: str


@dataclass(frozen=True)
class Found:
    """What was found out about the file; empty texts where it does not apply."""

    kind: str
    encoding: str = ""
    delimiter: str = ""
    sheet: str = ""
    decimal: str = "."
    header_row: int = 1
    units_row: int | None = None


@dataclass
class Grid:
    """The data rows of one table. `blocks` may be emptied while it is used, see `drain`."""

    file: str
    headers: tuple[str, ...]
    units: tuple[str, ...] | None
    blocks: list[Block]
    found: Found
    ragged: tuple[RaggedRow, ...] = ()
    notes: tuple[str, ...] = field(default=())

    @property
    def width(self) -> int:
        return len(self.headers)

    @property
    def row_count(self) -> int:
        return sum(len(block.rows) for block in self.blocks)

    def column(self, index: int) -> pa.ChunkedArray:
        """One column over all blocks."""
        return pa.chunked_array([block.cells[index] for block in self.blocks], pa.string())

    def rows(self) -> npt.NDArray[np.int32]:
        """Row numbers over all blocks."""
        return np.concatenate([block.rows for block in self.blocks]) if self.blocks else np.empty(0, np.int32)

    def drain(self) -> Iterator[Block]:
        """The blocks in order, each dropped from the grid so that its memory can be freed."""
        while self.blocks:
            yield self.blocks.pop(0)
            # Arrow keeps freed memory for itself, but what is built from the blocks is allocated elsewhere.
            pa.default_memory_pool().release_unused()
