"""Content digests depend on values alone; fingerprints on everything that shapes a result."""

from __future__ import annotations

from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.provenance import content_digest, fingerprint

cells = st.lists(st.one_of(st.none(), st.text(max_size=3)), max_size=8)


def label_table(texts: list[str | None]) -> pa.Table:
    return pa.table(
        {"label": pa.array(texts, pa.string()).dictionary_encode(), "text": pa.array(texts, pa.string())}
    )


@given(cells)
@settings(deadline=None)
def test_digest_does_not_depend_on_chunks_or_dictionaries(texts: list[str | None]):
    table = label_table(texts)
    halves = pa.concat_tables([label_table(texts[:3]), label_table(texts[3:])])
    assert content_digest(halves) == content_digest(table)
    assert content_digest(pa.concat_tables([label_table(["unused"]), table]).slice(1)) == content_digest(
        table
    )


@given(
    st.lists(st.one_of(st.none(), st.floats(allow_nan=False)), max_size=8),
    st.lists(st.booleans(), max_size=8),
)
@settings(deadline=None)
def test_digest_survives_the_round_trip_through_parquet(numbers: list[float | None], flags: list[bool]):
    n = min(len(numbers), len(flags))
    table = pa.table({"x": pa.array(numbers[:n], pa.float64()), "f": pa.array(flags[:n], pa.bool_())})
    sink = pa.BufferOutputStream()
    pq.write_table(table, sink)
    assert content_digest(pq.read_table(pa.BufferReader(sink.getvalue()))) == content_digest(table)


@pytest.mark.parametrize(
    "other",
    [
        {"x": [1.0, 2.0, None]},
        {"x": [1.0, None, 2.5]},
        {"y": [1.0, None, 2.0]},
        {"x": [1.0, 0.0, 2.0]},
        {"x": [2.0, None, 1.0]},
        {"x": [1.0, None, 2.0, None]},
    ],
)
def test_digest_sees_every_difference(other: dict[str, list[float | None]]):
    table = pa.table({"x": pa.array([1.0, None, 2.0])})
    assert content_digest(table) != content_digest(
        pa.table({name: pa.array(x, pa.float64()) for name, x in other.items()})
    )


def test_digest_tells_texts_apart_that_join_to_the_same():
    assert content_digest(pa.table({"t": ["ab", "c"]})) != content_digest(pa.table({"t": ["a", "bc"]}))
    assert content_digest(pa.table({"t": ["", None]})) != content_digest(pa.table({"t": [None, ""]}))


def test_fingerprint_changes_with_each_part_and_not_with_order(tmp_path: Path):
    base = fingerprint("screen", 1, {"a": 1, "b": 2}, {"convert": "x"})
    assert base == fingerprint("screen", 1, {"b": 2, "a": 1}, {"convert": "x"})
    others = [
        fingerprint("pair", 1, {"a": 1, "b": 2}, {"convert": "x"}),
        fingerprint("screen", 2, {"a": 1, "b": 2}, {"convert": "x"}),
        fingerprint("screen", 1, {"a": 1}, {"convert": "x"}),
        fingerprint("screen", 1, {"a": 1, "b": 2}, {"convert": "y"}),
    ]
    assert len({base, *others}) == 5


def test_digest_does_not_depend_on_the_pieces_it_is_made_from(monkeypatch):
    table = pa.table(
        {
            "x": pa.array([1.0, None, 3.0, 4.0, None]),
            "flag": pa.array([True, None, False, True, True]),
            "text": pa.array(["a", "", None, "long", "b"]),
            "label": pa.array(["a", None, "b", "a", "b"]).dictionary_encode(),
        }
    )
    whole = content_digest(table)
    monkeypatch.setattr("tieline.provenance.ROWS_AT_ONCE", 2)
    assert content_digest(table) == whole
    assert content_digest(pa.concat_tables([table.slice(0, 3), table.slice(3)])) == whole
