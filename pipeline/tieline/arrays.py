"""From Arrow tables to NumPy arrays and group codes, in an order that does not depend on the order of rows."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pyarrow as pa

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
TextArray = npt.NDArray[np.object_]


@dataclass(frozen=True)
class Labels:
    """A label column as codes into its sorted texts; -1 is null. `codes` has one entry per row."""

    codes: IntArray
    texts: tuple[str, ...]

    def text(self) -> TextArray:
        """The texts row by row, None for null."""
        return np.array([*self.texts, None], dtype=object)[self.codes]

    def is_one_of(self, wanted: Sequence[str]) -> BoolArray:
        """Rows whose label is among `wanted`."""
        among = np.array([text in wanted for text in self.texts] + [False])
        return among[self.codes]


@dataclass(frozen=True)
class Groups:
    """Rows sorted into groups by several label columns.

    `code` has one entry per row (-1: in no group), `keys` one tuple of texts per group, in sorted order,
    `first` the first row of each group.
    """

    code: IntArray
    keys: tuple[tuple[str | None, ...], ...]
    first: IntArray

    @property
    def count(self) -> int:
        return len(self.keys)

    def key(self, position: int) -> list[str | None]:
        """One key column, one entry per group."""
        return [key[position] for key in self.keys]


def numbers(table: pa.Table, name: str) -> FloatArray:
    """A number or count column as floats, null as NaN."""
    column = table.column(name).combine_chunks()
    values = column.to_numpy(zero_copy_only=False)
    return np.asarray(values, dtype=np.float64)


def counts(table: pa.Table, name: str) -> IntArray:
    """A count column without nulls."""
    return np.asarray(table.column(name).to_numpy(), dtype=np.int64)


def flags(table: pa.Table, name: str) -> BoolArray:
    """A flag column without nulls."""
    return np.asarray(table.column(name).to_numpy(), dtype=np.bool_)


def labels(table: pa.Table, name: str) -> Labels:
    """A label column as codes into its sorted texts in use."""
    array = table.column(name).combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
    texts = array.dictionary.to_pylist()
    codes = array.indices.fill_null(-1).to_numpy(zero_copy_only=False)
    used = np.bincount(codes[codes >= 0], minlength=len(texts)) > 0
    in_use = sorted({text for text, is_used in zip(texts, used, strict=True) if is_used})
    rank = {text: position for position, text in enumerate(in_use)}
    mapping = np.array([*(rank.get(text, -1) for text in texts), -1], dtype=np.int64)
    return Labels(mapping[codes], tuple(in_use))


def group_rows(columns: Sequence[Labels], rows: BoolArray | None = None) -> Groups:
    """Groups rows by label columns; only `rows` where given. A null label is a label of its own, sorted first."""
    size = len(columns[0].codes)
    combined = np.zeros(size, dtype=np.int64)
    for column in columns:
        # Re-numbering after every column keeps the product of many label counts within 64 bits.
        combined = combined * (len(column.texts) + 1) + column.codes + 1
        if len(columns) > 2:
            combined = np.unique(combined, return_inverse=True)[1].reshape(-1)
    chosen = np.arange(size) if rows is None else np.flatnonzero(rows)
    _, first, inverse = np.unique(combined[chosen], return_index=True, return_inverse=True)
    code = np.full(size, -1, dtype=np.int64)
    code[chosen] = inverse.reshape(-1)
    first = chosen[first]
    columns_of_keys = [
        [column.texts[c] if c >= 0 else None for c in column.codes[first]] for column in columns
    ]
    return Groups(code, tuple(zip(*columns_of_keys, strict=True)), first)


def spot_codes(table: pa.Table) -> tuple[IntArray, IntArray]:
    """A number 0..n-1 for the spot of every row, in order of table and row, and the first row of each spot.

    A spot is identified by its table and its row there, for labels may repeat between tables.
    """
    tables = labels(table, "table")
    rows = counts(table, "row")
    widest = int(rows.max(initial=0)) + 1
    _, first, inverse = np.unique(tables.codes * widest + rows, return_index=True, return_inverse=True)
    return inverse.reshape(-1), first
