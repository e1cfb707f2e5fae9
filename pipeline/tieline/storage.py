"""Stage files on disk: Parquet with declared columns and recorded origins; nothing half-written is visible."""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, BinaryIO

import pyarrow as pa
import pyarrow.parquet as pq

from tieline.columns import TABLES
from tieline.errors import InputError, Problem
from tieline.tables import declared

# Raised when the meaning of a stage file changes; a file of another version is stale.
SCHEMA_VERSION = 1
METADATA_KEY = b"tieline"


def write_atomically(path: Path, write: Callable[[BinaryIO], None]) -> None:
    """Writes beside the target, flushes to disk, then renames: readers see the old file or the new one."""
    temporary = _temporary(path)
    try:
        with temporary.open("wb") as stream:
            write(stream)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise


def write_text(path: Path, text: str) -> None:
    """A UTF-8 text file with `\\n` line ends, whole or not at all."""

    def write(stream: BinaryIO) -> None:
        stream.write(text.encode())

    write_atomically(path, write)


class Pending:
    """Files written under temporary names, to be renamed together once everything has succeeded."""

    def __init__(self) -> None:
        self._moves: list[tuple[Path, Path]] = []

    def __enter__(self) -> Pending:
        return self

    def __exit__(self, *_: object) -> None:
        for temporary, _target in self._moves:
            temporary.unlink(missing_ok=True)

    def add(self, target: Path, name: str, table: pa.Table, record: Mapping[str, Any]) -> None:
        """Writes a stage table beside its target under a temporary name."""
        temporary = _temporary(target)
        self._moves.append((temporary, target))
        with temporary.open("wb") as stream:
            _write_table(stream, name, table, record)
            stream.flush()
            os.fsync(stream.fileno())

    def commit(self) -> None:
        """Renames all, side tables before the main table of their stage."""
        for temporary, target in self._moves:
            os.replace(temporary, target)
        self._moves.clear()


def _temporary(target: Path) -> Path:
    return target.with_name(f".{target.name}.{os.getpid()}.tmp")


def _write_table(stream: BinaryIO, name: str, table: pa.Table, record: Mapping[str, Any]) -> None:
    """One stage table with its field metadata, and `record` in the schema metadata."""
    table = declared(table, TABLES[name])
    text = json.dumps(record, ensure_ascii=False)
    table = table.replace_schema_metadata({METADATA_KEY: text.encode()})
    labels = [field.name for field in table.schema if pa.types.is_dictionary(field.type)]
    pq.write_table(
        table,
        stream,
        compression="zstd",
        compression_level=1,
        use_dictionary=labels,
        write_page_checksum=True,
    )


def read_table(path: Path, name: str) -> pa.Table:
    """Reads one stage table.

    Raises InputError for a damaged file, DefectError when its columns are not the declared ones.
    """
    try:
        table = pq.read_table(path, page_checksum_verification=True)
    except (OSError, ValueError, pa.ArrowException) as error:
        raise InputError(damaged(path, str(error).splitlines()[0] if str(error) else "unreadable")) from None
    return declared(table.replace_schema_metadata(None), TABLES[name])


def damaged(path: Path, what: str) -> Problem:
    """How a stage file that cannot be trusted is reported."""
    return Problem(
        f"is damaged: {what}.",
        str(path),
        remedy="Delete it, and the next run makes it anew; `tieline audit` tells what else changed.",
    )


def read_record(path: Path) -> dict[str, Any] | None:
    """What a stage file says of its origin; None where there is no readable stage file."""
    try:
        metadata = pq.read_schema(path).metadata or {}
        record = json.loads(metadata[METADATA_KEY])
    except (OSError, KeyError, ValueError, pa.ArrowException):
        return None
    return record if isinstance(record, dict) else None
