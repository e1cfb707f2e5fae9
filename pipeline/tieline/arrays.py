"""From Arrow tables to NumPy arrays and group codes, in an order that does not depend on the order of rows."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
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
DENSE_KEYS_PER_ROW = 1
LARGEST_KEY = 2**62
# Rows worked on at a time where an array of the size of the table would only pass through memory.
ROWS_AT_ONCE = 2**17


@dataclass(frozen=True)
class Labels:
    """A label column as codes into its sorted texts; -1 is null. `codes` has one entry per row.

    Codes may be narrow, as those of `narrow_labels`: arithmetic on them may overflow then, indexing does not.
    """

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
    column = table.column(name)
    if column.null_count == len(column):
        return np.full(len(column), np.nan)
    array = one_array(column)
    known = _with_nan_under_nulls(array)
    return np.asarray(array.to_numpy(zero_copy_only=False), dtype=np.float64) if known is None else known


def _with_nan_under_nulls(array: pa.Array) -> FloatArray | None:
    """The array's own memory where that already says NaN for null, as it does once a stage has built it."""
    if array.type != pa.float64() or not array.null_count:
        return None
    values = np.frombuffer(array.buffers()[1], np.float64)[array.offset : array.offset + len(array)]
    if not np.array_equal(np.isnan(values), array.is_null().to_numpy(zero_copy_only=False)):
        return None
    values = values.view()
    values.flags.writeable = False
    return values


def counts(table: pa.Table, name: str) -> IntArray:
    """A count column without nulls."""
    return np.asarray(table.column(name).to_numpy(), dtype=np.int64)


def flags(table: pa.Table, name: str) -> BoolArray:
    """A flag column without nulls."""
    return np.asarray(table.column(name).to_numpy(), dtype=np.bool_)


def labels(table: pa.Table, name: str) -> Labels:
    """A label column as codes into its sorted texts in use."""
    return label_codes(one_array(table.column(name)))


def narrow_labels(table: pa.Table, name: str) -> Labels:
    """The same with codes as narrow as those of the column."""
    return narrow_codes(one_array(table.column(name)))


def label_codes(array: pa.DictionaryArray) -> Labels:
    """A label array as codes into its sorted texts in use, whatever the order of its dictionary."""
    narrow = narrow_codes(array)
    return Labels(narrow.codes.astype(np.int64), narrow.texts)


def narrow_codes(array: pa.DictionaryArray) -> Labels:
    """The same with codes as narrow as the array's own."""
    texts = array.dictionary.to_pylist()
    indices = array.indices.fill_null(-1) if array.indices.null_count else array.indices
    codes = indices.to_numpy()
    used = _number_of_each(codes, len(texts))
    in_use = sorted(set(compress(texts, used)))
    if in_use == texts:
        return Labels(codes, tuple(texts))
    place = {text: position for position, text in enumerate(in_use)}
    places = np.array([*(place.get(text, -1) for text in texts), -1], dtype=codes.dtype)
    return Labels(places[codes], tuple(in_use))


def _number_of_each(codes: IntArray, n_codes: int) -> IntArray:
    """How often each of the codes 0 .. n_codes - 1 occurs among codes >= -1."""
    number = np.zeros(n_codes + 1, dtype=np.int64)
    for rows in portions(len(codes), max(ROWS_AT_ONCE, n_codes)):
        number += np.bincount(codes[rows] + np.int64(1), minlength=n_codes + 1)
    return number[1:]


def portions(size: int, at_once: int = ROWS_AT_ONCE) -> Iterator[slice]:
    """Slices that together are 0 .. size - 1, so that what is made of each stays in the processor's cache."""
    return (slice(start, min(start + at_once, size)) for start in range(0, size, at_once))


def is_labelled(table: pa.Table, name: str) -> BoolArray:
    """Rows that have a label."""
    return np.asarray(one_array(table.column(name)).is_valid().to_numpy(zero_copy_only=False))


def one_array(column: pa.ChunkedArray) -> pa.Array:
    """A column as one array, without a copy where it already is one."""
    if column.num_chunks == 1:
        return column.chunk(0)  # combine_chunks would copy it
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):  # Arrow keeps chunks where one array could not hold them
        array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
    return array


def group_rows(columns: Sequence[Labels], rows: BoolArray | None = None) -> Groups:
    """Groups rows by label columns; only `rows` where given. A null label is a label of its own, sorted first."""
    code, first = _grouped(columns, len(columns[0].codes), rows)
    return Groups(code, tuple(column.take(first) for column in columns), first)


def group_table(table: pa.Table, names: Sequence[str], rows: BoolArray | None = None) -> Groups:
    """The same for columns of a table."""
    columns = (narrow_labels(table, name) for name in names)
    code, first = _grouped(columns, table.num_rows, rows)
    keys = table.select(names).take(pa.array(first))
    return Groups(code, tuple(labels(keys, name) for name in names), first)


def _grouped(columns: Iterable[Labels], size: int, rows: BoolArray | None) -> tuple[IntArray, IntArray]:
    """The group of every row, -1 for none, and the first row of each group."""
    chosen = None if rows is None or rows.all() else rows
    n_rows = size if chosen is None else int(np.count_nonzero(chosen))
    rank, first = ranked(*_combined(columns, n_rows, chosen))
    if chosen is None:
        return rank, first
    code = np.full(size, -1, dtype=np.int64)
    code[chosen] = rank
    return code, np.flatnonzero(chosen)[first]


def _combined(columns: Iterable[Labels], size: int, chosen: BoolArray | None) -> tuple[IntArray, int]:
    """One key per chosen row in the order of the labels, and a number that all keys are below."""
    keys, n_keys = np.zeros(size, dtype=np.int64), 1
    for column in columns:
        choices = len(column.texts) + 1
        codes = column.codes if chosen is None else column.codes[chosen]
        if n_keys * choices > DENSE_KEYS_PER_ROW * len(keys):
            keys, first = ranked(keys, n_keys)
            n_keys = len(first)
            # Often a batch follows from the experiment, or an analyte from the element: such a column is passed over.
            if _follows(codes, keys, first):
                continue
        keys *= choices
        keys += codes
        keys += 1
        n_keys *= choices
    return keys, n_keys


def _follows(codes: IntArray, keys: IntArray, first: IntArray) -> bool:
    """Whether every code is that of the first row with the same key."""
    of_key = codes[first]
    return all(np.array_equal(of_key[keys[rows]], codes[rows]) for rows in portions(len(codes)))


def ranked(keys: IntArray, size: int) -> tuple[IntArray, IntArray]:
    """The place of every key, 0 <= key < size, among the different keys, and the first row of each of these."""
    if size > DENSE_KEYS_PER_ROW * len(keys):
        _, first, rank = np.unique(keys, return_index=True, return_inverse=True)
        return rank.reshape(-1), first
    row: IntArray = np.full(size, -1, dtype=np.int32 if len(keys) < 2**31 else np.int64)
    # Of the rows with one key the last written, which is the first, stays.
    for rows in reversed(list(portions(len(keys)))):
        row[keys[rows][::-1]] = np.arange(rows.stop - 1, rows.start - 1, -1)
    present = np.flatnonzero(row >= 0)
    first = row[present].astype(np.int64)
    row[present] = np.arange(len(present))
    rank = np.empty(len(keys), dtype=np.int64)
    for rows in portions(len(keys)):
        rank[rows] = row[keys[rows]]
    return rank, first


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
    tables = narrow_labels(table, "table")
    rows = one_array(table.column("row")).to_numpy()
    widest = int(rows.max(initial=0)) + 1
    keys = tables.codes.astype(np.int64)
    keys *= widest
    keys += rows
    return ranked(keys, len(tables.texts) * widest)


def grain_codes(table: pa.Table) -> IntArray:
    """A number for the grain of every row; a spot without a grain label counts as a grain of its own."""
    grain = labels(table, "grain")
    spot, _ = spot_codes(table)
    return np.where(grain.codes >= 0, grain.codes, len(grain.texts) + spot)
