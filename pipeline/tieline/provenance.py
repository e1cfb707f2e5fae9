"""Digests and fingerprints: what makes two tables, or two computations, the same."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc


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
    digest = hashlib.sha256(json_text([[field.name, str(field.type)] for field in table.schema]).encode())
    digest.update(str(table.num_rows).encode())
    for column in table.columns:
        array = column.combine_chunks()
        if isinstance(array, pa.ChunkedArray):  # pyarrow keeps a chunked array when it would not fit one
            array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
        for part in _canonical(array):
            digest.update(part)
    return digest.hexdigest()


def _canonical(array: pa.Array) -> list[bytes | memoryview]:
    if pa.types.is_dictionary(array.type):
        return _canonical_labels(array)
    parts: list[bytes | memoryview] = []
    numbers: np.ndarray[Any, Any]
    if array.null_count:
        parts.append(np.packbits(array.is_valid().to_numpy(zero_copy_only=False)).tobytes())
    if pa.types.is_string(array.type):
        filled = array.fill_null("")
        lengths: np.ndarray[Any, Any] = pc.binary_length(filled).to_numpy(zero_copy_only=False)
        parts.append(lengths.tobytes())
        parts.append(_text_bytes(filled))
        return parts
    zero = pa.scalar(False if pa.types.is_boolean(array.type) else 0, array.type)
    numbers = array.fill_null(zero).to_numpy(zero_copy_only=False)
    if len(numbers):
        parts.append(numbers.tobytes())
    return parts


def _canonical_labels(array: pa.DictionaryArray) -> list[bytes | memoryview]:
    """Codes into the sorted list of the texts in use; null is -1."""
    texts = array.dictionary.to_pylist()
    codes = array.indices.fill_null(-1).to_numpy(zero_copy_only=False)
    used = np.bincount(codes[codes >= 0], minlength=len(texts)) > 0
    in_use = sorted({text for text, is_used in zip(texts, used, strict=True) if is_used})
    rank = {text: position for position, text in enumerate(in_use)}
    mapping = np.array([*(rank.get(text, -1) for text in texts), -1], dtype=np.int32)
    parts: list[bytes | memoryview] = [json_text(in_use).encode()]
    if len(codes):
        parts.append(mapping[codes].tobytes())
    return parts


def _text_bytes(array: pa.StringArray) -> bytes | memoryview:
    _, offsets, data = array.buffers()
    if data is None or len(array) == 0:
        return b""
    ends = np.frombuffer(offsets, dtype=np.int32)
    return memoryview(data)[int(ends[array.offset]) : int(ends[array.offset + len(array)])]
