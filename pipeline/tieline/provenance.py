"""Digests and fingerprints: what makes two tables, or two computations, the same."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Hashable, Iterable, Mapping
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import ROWS_AT_ONCE, narrow_codes, one_array
from tieline.narrowing import code_type, place_in_memory
from tieline.statistics.threads import side_by_side
from tieline.tables import declared_type

# Below this a thread costs more than it saves.
ROWS_FOR_THREADS = 100_000


def bytes_digest(data: bytes | memoryview | pa.Buffer) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def json_text(value: Any) -> str:
    """JSON with one spelling for one value: sorted keys, no spaces that vary."""
    return json.dumps(value, sort_keys=True, ensure_ascii=False, separators=(",", ":"), allow_nan=False)


def fingerprint(stage: str, revision: int, settings: Mapping[str, Any], inputs: Mapping[str, str]) -> str:
    """The identity of one stage's computation.

    Stage and revision, its settings in effect, and the content digests of its inputs by name: if all
    are the same, so is the result.
    """
    identity = {"stage": stage, "revision": revision, "settings": settings, "inputs": inputs}
    return bytes_digest(json_text(identity).encode())


class ColumnDigests:
    """Digests of columns in memory, so that one which several tables share is digested once."""

    def __init__(self) -> None:
        self._known: dict[Hashable, tuple[pa.ChunkedArray, str]] = {}

    def of(self, column: pa.ChunkedArray) -> str:
        """The column's digest. The column is kept in memory, for its place there is what it is known by."""
        key = _place(column)
        if key not in self._known:
            self._known[key] = column, column_digest(column)
        return self._known[key][1]

    def keep(self, tables: Iterable[pa.Table]) -> None:
        """Forgets all columns but those of some tables."""
        places = {_place(column) for table in tables for column in table.columns}
        self._known = {place: known for place, known in self._known.items() if place in places}


def _place(column: pa.ChunkedArray) -> Hashable:
    """Where a column lies in memory."""
    return tuple(place_in_memory(part) for chunk in column.chunks for part in _parts(chunk))


def _parts(array: pa.Array) -> list[pa.Array]:
    return [array.indices, array.dictionary] if pa.types.is_dictionary(array.type) else [array]


def content_digest(table: pa.Table, known: ColumnDigests | None = None) -> str:
    """SHA-256 of a table's names, types and values, whatever its chunks, dictionaries and metadata.

    The same for a table in memory and read back from its Parquet file. Values hidden under nulls and
    unused dictionary entries do not count.
    """
    known = known or ColumnDigests()
    digests = (
        side_by_side(known.of, table.columns)
        if table.num_rows > ROWS_FOR_THREADS
        else [known.of(column) for column in table.columns]
    )
    columns = [
        [field.name, str(declared_type(field.type)), digest]
        for field, digest in zip(table.schema, digests, strict=True)
    ]
    return bytes_digest(json_text([table.num_rows, columns]).encode())


def column_digest(column: pa.ChunkedArray) -> str:
    """SHA-256 of a column's values and nulls."""
    digest = hashlib.sha256()
    if pa.types.is_dictionary(column.type):
        labels = narrow_codes(one_array(column))
        digest.update(json_text(labels.texts).encode())
        digest.update(labels.codes.astype(code_type(len(labels.texts)).to_pandas_dtype(), copy=False).data)
        return digest.hexdigest()
    # Piece by piece, for nulls are filled in a copy.
    pieces = [chunk.slice(start, ROWS_AT_ONCE) for chunk in column.chunks for start in _starts(len(chunk))]
    if column.null_count:
        valid = [piece.is_valid().to_numpy(zero_copy_only=False) for piece in pieces]
        digest.update(np.packbits(np.concatenate(valid)).data)
    if pa.types.is_string(column.type):
        for piece in pieces:
            digest.update(pc.binary_length(_without_nulls(piece, "")).to_numpy(zero_copy_only=False))
        for piece in pieces:
            digest.update(_text_bytes(_without_nulls(piece, "")))
        return digest.hexdigest()
    nothing = False if pa.types.is_boolean(column.type) else 0
    for piece in pieces:
        values = _without_nulls(piece, nothing).to_numpy(zero_copy_only=False)
        digest.update(np.ascontiguousarray(values).data)
    return digest.hexdigest()


def _starts(size: int) -> range:
    return range(0, size, ROWS_AT_ONCE)


def _without_nulls(array: pa.Array, instead: str | bool | int) -> pa.Array:
    return array.fill_null(pa.scalar(instead, array.type)) if array.null_count else array


def _text_bytes(array: pa.StringArray) -> bytes | memoryview:
    _, offsets, data = array.buffers()
    if data is None or len(array) == 0:
        return b""
    ends = np.frombuffer(offsets, dtype=np.int32)
    return memoryview(data)[int(ends[array.offset]) : int(ends[array.offset + len(array)])]
