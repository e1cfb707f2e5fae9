"""Labels, numbers and groups from Arrow tables: the same whatever the width of codes and the size of portions."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline import arrays
from tieline.arrays import group_table, labels, narrow_codes, numbers, one_array, portions, ranked, spot_codes
from tieline.narrowing import compact

texts = st.lists(st.sampled_from(["b", "a", "c", None]), min_size=1, max_size=12)


@given(texts, st.sampled_from([pa.int8(), pa.int16(), pa.int32()]))
def test_labels_do_not_depend_on_the_width_of_codes(cells, width):
    column = pa.array(["unused", *cells], pa.string()).dictionary_encode().slice(1)
    column = column.cast(pa.dictionary(width, pa.string()))
    found = labels(pa.table({"x": column}), "x")
    assert found.text().tolist() == cells
    assert list(found.texts) == sorted({cell for cell in cells if cell is not None})
    narrow = narrow_codes(column)
    assert narrow.texts == found.texts
    assert narrow.codes.tolist() == found.codes.tolist()
    assert found.codes.dtype == np.int64


def test_numbers_take_no_memory_where_nan_stands_under_nulls():
    values = np.array([1.0, np.nan, 3.0])
    built = pa.array(values, from_pandas=True)
    seen = numbers(pa.table({"x": built}), "x")
    assert np.shares_memory(seen, values)
    assert not seen.flags.writeable
    np.testing.assert_array_equal(seen, values)


@pytest.mark.parametrize("under", [0.0, 7.5])
def test_what_stands_under_a_null_is_never_a_number(under):
    data = pa.array([1.0, under, 3.0]).buffers()[1]
    column = pa.Array.from_buffers(pa.float64(), 3, [pa.py_buffer(b"\x05"), data])
    np.testing.assert_array_equal(numbers(pa.table({"x": column}), "x"), [1.0, np.nan, 3.0])
    # As many NaN as nulls, but elsewhere.
    data = pa.array([np.nan, under, 3.0], from_pandas=False).buffers()[1]
    column = pa.Array.from_buffers(pa.float64(), 3, [pa.py_buffer(b"\x05"), data])
    np.testing.assert_array_equal(numbers(pa.table({"x": column}), "x"), [np.nan, np.nan, 3.0])


def test_numbers_of_a_column_without_any():
    assert np.isnan(numbers(pa.table({"x": pa.nulls(3, pa.float64())}), "x")).tolist() == [True] * 3


@given(st.lists(st.integers(0, 6), max_size=30), st.sampled_from([7, 1000]))
def test_ranks_are_those_of_the_sorted_keys(keys, size):
    rank, first = ranked(np.array(keys, dtype=np.int64), size)
    different = sorted(set(keys))
    assert rank.tolist() == [different.index(key) for key in keys]
    assert first.tolist() == [keys.index(key) for key in different]


def _table(rows: int, seed: int) -> pa.Table:
    random = np.random.default_rng(seed)
    names = {name: random.choice(["x", "y", "z", "w"], rows) for name in ("a", "b", "c")}
    table = {name: pa.array(values).dictionary_encode() for name, values in names.items()}
    table["table"] = table["a"]
    table["row"] = pa.array(random.integers(1, 5, rows), pa.int32())
    return pa.table(table)


@pytest.mark.parametrize("at_once", [1, 7, 1000])
@pytest.mark.parametrize("some", [False, True])
def test_groups_do_not_depend_on_the_size_of_portions(monkeypatch, at_once, some):
    table = _table(100, 4)
    rows = np.arange(100) % 3 > 0 if some else None
    expected = group_table(table, ("a", "b", "c"), rows)
    expected_spots = spot_codes(table)
    monkeypatch.setattr(arrays.portions, "__defaults__", (at_once,))
    monkeypatch.setattr(arrays, "ROWS_AT_ONCE", at_once)
    found = group_table(compact(table), ("a", "b", "c"), rows)
    np.testing.assert_array_equal(found.code, expected.code)
    np.testing.assert_array_equal(found.first, expected.first)
    assert found.keys == expected.keys
    assert list(found.keys) == sorted(set(found.keys))
    for found_part, expected_part in zip(spot_codes(table), expected_spots, strict=True):
        np.testing.assert_array_equal(found_part, expected_part)


def test_a_column_that_follows_from_others_makes_no_groups_of_its_own():
    table = _table(200, 5).append_column("d", _table(200, 5).column("a"))
    alone, together = (group_table(table, names) for names in (("a", "b", "c"), ("a", "b", "c", "d")))
    np.testing.assert_array_equal(alone.code, together.code)


def test_portions_cover_everything_once():
    assert [(part.start, part.stop) for part in portions(7, 3)] == [(0, 3), (3, 6), (6, 7)]
    assert list(portions(0)) == []


def test_one_array_of_a_column_in_pieces():
    assert one_array(pa.chunked_array([[1], [2, 3]])).to_pylist() == [1, 2, 3]
