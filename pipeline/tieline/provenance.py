"""Digests and fingerprints: what makes two tables, or two computations, the same."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import label_codes, one_array


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


def content_digest(table: pa.Table) -> str:
    """SHA-256 of a table's names, types and values, whatever its chunks, dictionaries and metadata.

    The same for a table in memory and read back from its Parquet file. Values hidden under nulls and
    unused dictionary entries do not count.
    """
    columns = [
        [field.name, str(field.type), column_digest(column)]
        for field, column in zip(table.schema, table.columns, strict=True)
    ]
    return bytes_digest(json_text([table.num_rows, columns]).encode())


def column_digest(column: pa.ChunkedArray) -> str:
    """SHA-256 of a column's values and nulls."""
    array = one_array(column)
    digest = hashlib.sha256()
    if pa.types.is_dictionary(array.type):
        labels = label_codes(array)
        digest.update(json_text(labels.texts).encode())
        digest.update(labels.codes.astype(_narrow_type(len(labels.texts))).data)
        return digest.hexdigest()
    if array.null_count:
        digest.update(np.packbits(array.is_valid().to_numpy(zero_copy_only=False)).data)
    if pa.types.is_string(array.type):
        filled = array.fill_null("") if array.null_count else array
        digest.update(pc.binary_length(filled).to_numpy(zero_copy_only=False))
        digest.update(_text_bytes(filled))
        return digest.hexdigest()
    if array.null_count:
        array = array.fill_null(pa.scalar(False if pa.types.is_boolean(array.type) else 0, array.type))
    digest.update(np.ascontiguousarray(array.to_numpy(zero_copy_only=False)).data)
    return digest.hexdigest()


def _narrow_type(count: int) -> type[np.signedinteger[Any]]:
    """The smallest integer type for the codes -1 .. count - 1: most label columns have few texts."""
    return np.int8 if count < 2**7 else np.int16 if count < 2**15 else np.int32


def _text_bytes(array: pa.StringArray) -> bytes | memoryview:
    _, offsets, data = array.buffers()
    if data is None or len(array) == 0:
        return b""
    ends = np.frombuffer(offsets, dtype=np.int32)
    return memoryview(data)[int(ends[array.offset]) : int(ends[array.offset + len(array)])]
