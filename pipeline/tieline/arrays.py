"""From Arrow tables to NumPy arrays and group codes, in an order that does not depend on the order of rows."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import compress

import numpy as np
import numpy.typing as npt
import pyarrow as pa

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
TextArray = npt.NDArray[np.object_]

# Keys are ranked by a table of all possible ones while it stays of the size of the rows, else by sorting.
DENSE_KEYS_PER_ROW = 4
LARGEST_KEY = 2**62


@dataclass(frozen=True)
class Labels:
    """A label column as codes into its sorted texts; -1 is null. `codes` has one entry per row."""

    codes: IntArray
    texts: tuple[str, ...]

    def text(self) -> TextArray:
        """The texts row by row, None for null."""
        return np.array([*self.texts, None], dtype=object)[self.codes]

    def take(self, rows: IntArray) -> Labels:
        """The labels of some rows."""
        return Labels(self.codes[rows], self.texts)

    def array(self) -> pa.DictionaryArray:
        """The labels as an Arrow column."""
        codes = pa.array(self.codes.astype(np.int32), mask=self.codes < 0)
        return pa.DictionaryArray.from_arrays(codes, pa.array(self.texts, pa.string()))

    def is_one_of(self, wanted: Sequence[str]) -> BoolArray:
        """Rows whose label is among `wanted`."""
        among = np.array([text in wanted for text in self.texts] + [False])
        return among[self.codes]


@dataclass(frozen=True)
class Groups:
    """Rows sorted into groups by several label columns.

    `code` has one entry per row (-1: in no group), `labels` one entry per group, in sorted order, for every
    column, `first` the first row of each group.
    """

    code: IntArray
    labels: tuple[Labels, ...]
    first: IntArray

    @property
    def count(self) -> int:
        return len(self.first)

    @cached_property
    def keys(self) -> tuple[tuple[str | None, ...], ...]:
        """One tuple of texts per group."""
        return tuple(zip(*(self.key(position) for position in range(len(self.labels))), strict=True))

    def key(self, position: int) -> list[str | None]:
        """One key column, one entry per group."""
        texts: list[str | None] = self.labels[position].text().tolist()
        return texts


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
    return label_codes(one_array(table.column(name)))


def label_codes(array: pa.DictionaryArray) -> Labels:
    """A label array as codes into its sorted texts in use, whatever the order of its dictionary."""
    texts = array.dictionary.to_pylist()
    # One above the code, 0 for null, while counting which are in use.
    codes = _codes_from_one(array.indices)
    used = np.bincount(codes, minlength=len(texts) + 1)[1:]
    codes -= 1
    in_use = sorted(set(compress(texts, used)))
    if in_use == texts:
        return Labels(codes, tuple(texts))
    place = {text: position for position, text in enumerate(in_use)}
    places = np.array([*(place.get(text, -1) for text in texts), -1], dtype=np.int64)
    return Labels(places[codes], tuple(in_use))


def _codes_from_one(indices: pa.Array) -> IntArray:
    known = indices.fill_null(-1) if indices.null_count else indices
    return np.asarray(known.to_numpy() + np.int64(1))


def one_array(column: pa.ChunkedArray) -> pa.Array:
    """A column as one array, without a copy where it already is one."""
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):  # Arrow keeps chunks where one array could not hold them
        array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
    return array


def group_rows(columns: Sequence[Labels], rows: BoolArray | None = None) -> Groups:
    """Groups rows by label columns; only `rows` where given. A null label is a label of its own, sorted first."""
    code, first = _grouped(columns, len(columns[0].codes), rows)
    return Groups(code, tuple(column.take(first) for column in columns), first)


def group_table(table: pa.Table, names: Sequence[str], rows: BoolArray | None = None) -> Groups:
    """The same for columns of a table, of which only one at a time is unpacked."""
    code, first = _grouped((labels(table, name) for name in names), table.num_rows, rows)
    keys = table.select(names).take(pa.array(first))
    return Groups(code, tuple(labels(keys, name) for name in names), first)


def _grouped(columns: Iterable[Labels], size: int, rows: BoolArray | None) -> tuple[IntArray, IntArray]:
    """The group of every row, -1 for none, and the first row of each group."""
    chosen = None if rows is None or rows.all() else np.flatnonzero(rows)
    keys, n_keys = np.zeros(size if chosen is None else len(chosen), dtype=np.int64), 1
    for column in columns:
        choices = len(column.texts) + 1
        codes = column.codes if chosen is None else column.codes[chosen]
        if n_keys * choices > DENSE_KEYS_PER_ROW * len(keys):
            keys, first = ranked(keys, n_keys)
            n_keys = len(first)
            # Often a batch follows from the experiment, or an analyte from the element: such a column is passed over.
            if np.array_equal(codes[first][keys], codes):
                continue
        keys *= choices
        keys += codes
        keys += 1
        n_keys *= choices
    rank, first = ranked(keys, n_keys)
    if chosen is None:
        return rank, first
    code = np.full(size, -1, dtype=np.int64)
    code[chosen] = rank
    return code, chosen[first]


def ranked(keys: IntArray, size: int) -> tuple[IntArray, IntArray]:
    """The place of every key, 0 <= key < size, among the different keys, and the first row of each of these."""
    if size > DENSE_KEYS_PER_ROW * len(keys):
        _, first, rank = np.unique(keys, return_index=True, return_inverse=True)
        return rank.reshape(-1), first
    row = np.full(size, -1, dtype=np.int64)
    # Of the rows with one key the last written, which is the first, stays.
    row[keys[::-1]] = np.arange(len(keys) - 1, -1, -1)
    present = row >= 0
    place: IntArray = np.cumsum(present) - 1
    return place[keys], row[present]


def common_keys(tables: Sequence[pa.Table], names: Sequence[Sequence[str]]) -> list[IntArray]:
    """One key per row of every table, equal where the labels of the named columns are equal.

    names: the label columns of each table, in the same order of meaning.
    """
    keys, size = [np.zeros(table.num_rows, dtype=np.int64) for table in tables], 1
    for columns in zip(*names, strict=True):
        found = [labels(table, name) for table, name in zip(tables, columns, strict=True)]
        texts = sorted({text for column in found for text in column.texts})
        place = {text: position for position, text in enumerate(texts, start=1)}
        if size * (len(texts) + 1) > LARGEST_KEY:
            keys, size = _ranked_together(keys, size)
        size *= len(texts) + 1
        for position, column in enumerate(found):
            places = np.array([*(place[text] for text in column.texts), 0], dtype=np.int64)
            keys[position] = keys[position] * (len(texts) + 1) + places[column.codes]
    return keys


def _ranked_together(keys: Sequence[IntArray], size: int) -> tuple[list[IntArray], int]:
    rank, first = ranked(np.concatenate(keys), size)
    return np.split(rank, np.cumsum([len(key) for key in keys])[:-1]), len(first)


def matches(wanted: IntArray, keys: IntArray) -> tuple[IntArray, IntArray]:
    """All pairs of positions (i, j) with wanted[i] == keys[j], in the order of i, then j."""
    order = np.argsort(keys, kind="stable")
    ordered = keys[order]
    start, end = (np.searchsorted(ordered, wanted, side=side) for side in ("left", "right"))
    count = end - start
    first = np.repeat(np.arange(len(wanted)), count)
    offset = np.arange(len(first)) - np.repeat(np.cumsum(count) - count, count)
    return first, order[start[first] + offset]


def spot_codes(table: pa.Table) -> tuple[IntArray, IntArray]:
    """A number 0..n-1 for the spot of every row, in order of table and row, and the first row of each spot.

    A spot is identified by its table and its row there, for labels may repeat between tables.
    """
    tables = labels(table, "table")
    rows = counts(table, "row")
    widest = int(rows.max(initial=0)) + 1
    return ranked(tables.codes * widest + rows, len(tables.texts) * widest)
