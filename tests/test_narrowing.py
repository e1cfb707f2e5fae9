"""Tables in memory are as narrow as they can be; in digests and files nothing of it shows."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from tieline.columns import FINDINGS, SCREEN
from tieline.narrowing import code_type, compact, no_numbers
from tieline.provenance import content_digest
from tieline.storage import Pending, read_table
from tieline.tables import ARROW_TYPES, build, declared, empty


@pytest.mark.parametrize(
    ("n_texts", "expected"), [(0, "int8"), (127, "int8"), (128, "int16"), (32767, "int16"), (32768, "int32")]
)
def test_codes_are_as_narrow_as_the_number_of_texts_allows(n_texts: int, expected: str):
    texts = [str(number) for number in range(n_texts)]
    table = pa.table({"label": pa.array(texts, pa.string()).dictionary_encode()})
    narrow = compact(table)
    assert str(code_type(n_texts)) == expected
    assert str(narrow.schema.field("label").type.index_type) == expected
    assert narrow.column("label").to_pylist() == texts


def test_pieces_are_joined_and_their_texts_put_together():
    pieces = [pa.array(texts).dictionary_encode() for texts in (["b", None, "a"], ["c", "a"])]
    counts, numbers = pa.chunked_array([[1, 2], [3, 4, 5]]), pa.chunked_array([[1.0, None], [2.0, 3.0, 4.0]])
    table = pa.table({"label": pa.chunked_array(pieces), "count": counts, "number": numbers})
    narrow = compact(table)
    assert narrow.to_pydict() == table.to_pydict()
    assert [narrow.column(name).num_chunks for name in narrow.column_names] == [1, 1, 2]
    assert content_digest(narrow.select(["count", "number"])) == content_digest(
        table.select(["count", "number"])
    )


def test_columns_that_share_their_codes_still_share_them():
    codes = pa.array(np.zeros(10, dtype=np.int32))
    columns = [pa.DictionaryArray.from_arrays(codes, pa.array([text])) for text in ("one", "other")]
    narrow = compact(pa.table(columns, names=["one", "other"]))
    places = {column.chunk(0).indices.buffers()[1].address for column in narrow.columns}
    assert len(places) == 1


def test_a_column_without_numbers_takes_the_memory_of_one_piece():
    nothing = no_numbers(5_000_000)
    assert len(nothing) == nothing.null_count == 5_000_000
    assert len({chunk.buffers()[1].address for chunk in nothing.chunks}) == 1
    assert compact(pa.table({"x": nothing})).column("x").num_chunks == nothing.num_chunks


def _findings(n_rows: int) -> pa.Table:
    columns = {column.name: ["a"] * n_rows for column in FINDINGS.columns if column.kind in ("label", "text")}
    columns |= {name: [1] * n_rows for name in ("row", "statistic", "threshold", "p_value")}
    return build(FINDINGS, columns)


@pytest.mark.parametrize("n_rows", [0, 3])
def test_files_hold_the_declared_types(tmp_path, n_rows):
    table = _findings(n_rows)
    path = tmp_path / "screen.findings.parquet"
    with Pending() as pending:
        pending.add(path, "screen.findings", table, {})
        pending.commit()
    assert {field.type for field in pq.read_schema(path)} <= set(ARROW_TYPES.values())
    back = read_table(path, "screen.findings")
    assert back.schema.equals(FINDINGS.schema())
    assert content_digest(back) == content_digest(table)


def test_row_groups_written_one_by_one_are_those_of_the_whole_table(tmp_path, monkeypatch):
    table = _findings(10)
    path = tmp_path / "screen.findings.parquet"
    monkeypatch.setattr("tieline.storage.ROWS_PER_ROW_GROUP", 4)
    with Pending() as pending:
        pending.add(path, "screen.findings", table, {})
        pending.commit()
    assert pq.ParquetFile(path).metadata.num_row_groups == 3
    assert read_table(path, "screen.findings").equals(declared(table, FINDINGS))


def test_an_empty_declared_table_has_the_declared_types():
    assert empty(SCREEN).schema.equals(SCREEN.schema())


def test_a_table_waits_until_those_before_it_leave_room(tmp_path, monkeypatch):
    table = _findings(10)
    monkeypatch.setattr("tieline.storage.UNWRITTEN_BYTES", 2 * table.nbytes)
    most = 0
    with Pending() as pending:
        for number in range(6):
            pending.add(tmp_path / f"{number}.parquet", "screen.findings", table, {})
            most = max(most, len(pending._writes))
        pending.commit()
    assert most == 2
    assert len(list(tmp_path.iterdir())) == 6
