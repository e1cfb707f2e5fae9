"""Parquet tables as text cells that read back to the same numbers."""

from __future__ import annotations

import io

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from reading.test_delimited import read, refusal, texts
from tieline.reading import parquet_table
from tieline.reading.cells import CellStyle, parse_cells
from tieline.reading.grid import ReadLimits


def parquet(table: pa.Table) -> bytes:
    stream = io.BytesIO()
    pq.write_table(table, stream)
    return stream.getvalue()


def test_types(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(parquet_table, "BLOCK_ROWS", 2)
    table = pa.table(
        {
            "text": ["a", None, "<0.1"],
            "number": [1.5, None, float("nan")],
            "whole": pa.array([1, None, 3], pa.int64()),
            "label": pa.array(["x", "x", None]).dictionary_encode(),
            "none": pa.nulls(3),
        }
    )
    grid = read(parquet(table), "t.parquet")
    assert texts(grid) == [["a", "1.5", "1", "x", ""], ["", "", "", "x", ""], ["<0.1", "", "3", "", ""]]
    assert grid.rows().tolist() == [2, 3, 4]


@settings(deadline=None)
@given(st.lists(st.floats(-1e11, 1e11).filter(lambda x: x == 0 or abs(x) > 1e-50), min_size=1, max_size=20))
def test_numbers_read_back_exactly(numbers: list[float]):
    grid = read(parquet(pa.table({"MgO": numbers})), "t.parquet")
    assert parse_cells(grid.blocks[0].cells[0], CellStyle()).value.tolist() == [
        pytest.approx(number, rel=0, abs=0) for number in numbers
    ]


def test_what_cannot_be_read():
    assert "not a readable Parquet file" in refusal(b"PAR1 nothing", "t.parquet")
    assert "neither text nor number" in refusal(parquet(pa.table({"a": [[1]]})), "t.parquet")
    data = parquet(pa.table({"a": [1] * 1000}))
    assert "larger than the limits" in refusal(data, "t.parquet", ReadLimits(cells=500))
