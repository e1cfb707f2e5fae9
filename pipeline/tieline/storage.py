"""Stage files on disk: Parquet with declared columns and recorded origins; nothing half-written is visible."""

from __future__ import annotations

import json
import os
import secrets
import stat
import time
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any, BinaryIO

import pyarrow as pa
import pyarrow.parquet as pq

from tieline.columns import TABLES
from tieline.errors import DefectError, InputError, Problem
from tieline.reading.input_file import InputFile
from tieline.tables import declared

# Raised when the meaning of a stage file changes; a file of another version is stale.
SCHEMA_VERSION = 1
ROWS_PER_ROW_GROUP = 1024 * 1024
# Tables that wait to be written hold memory that the next stage needs: beyond this a new one waits for those before it.
UNWRITTEN_BYTES = 250_000_000
METADATA_KEY = b"tieline"


def write_atomically(path: Path, write: Callable[[BinaryIO], None]) -> None:
    """Writes beside the target, flushes to disk, then renames: readers see the old file or the new one."""
    temporary = temporary_path(path)
    try:
        with temporary.open("xb") as stream:
            write(stream)
            stream.flush()
            os.fsync(stream.fileno())
        _show(temporary, path)
    except BaseException:
        with suppress(OSError):
            temporary.unlink()
        raise
    sync_folder(path.parent)


def write_text(path: Path, text: str) -> None:
    """A UTF-8 text file with `\\n` line ends, whole or not at all."""
    write_bytes(path, text.encode())


def write_bytes(path: Path, data: bytes) -> None:
    """A file of bytes, whole or not at all."""

    def write(stream: BinaryIO) -> None:
        stream.write(data)

    write_atomically(path, write)


class Pending:
    """Files written under temporary names, to be renamed together once everything has succeeded.

    They are written beside the computation that goes on; what goes wrong shows in `finish_writes`.
    """

    def __init__(self) -> None:
        self._moves: list[tuple[Path, Path]] = []
        self._writer = ThreadPoolExecutor(max_workers=1, thread_name_prefix="writer")
        self._writes: list[tuple[Future[None], int]] = []

    def __enter__(self) -> Pending:
        return self

    def __exit__(self, *_: object) -> None:
        self._writer.shutdown(wait=True, cancel_futures=True)
        for temporary, _target in self._moves:
            with suppress(OSError):
                temporary.unlink()

    def add(self, target: Path, name: str, table: pa.Table, record: Mapping[str, Any]) -> None:
        """Writes a stage table beside its target under a temporary name."""
        self._write(target, table.nbytes, lambda stream: _write_table(stream, name, table, record))

    def add_bytes(self, target: Path, data: bytes) -> None:
        """Writes bytes beside their target under a temporary name."""
        self._write(target, len(data), lambda stream: stream.write(data))

    def _write(self, target: Path, size: int, write: Callable[[BinaryIO], object]) -> None:
        self._make_room(size)
        temporary = temporary_path(target)
        self._moves.append((temporary, target))
        self._writes.append((self._writer.submit(self._write_whole, temporary, write), size))

    def _make_room(self, size: int) -> None:
        """Waits until what is not written yet leaves room for so many bytes, or all is written."""
        while self._writes and sum(each for _, each in self._writes) + size > UNWRITTEN_BYTES:
            written, _ = self._writes.pop(0)
            written.result()

    @staticmethod
    def _write_whole(temporary: Path, write: Callable[[BinaryIO], object]) -> None:
        with temporary.open("xb") as stream:
            write(stream)
            stream.flush()
            os.fsync(stream.fileno())

    def finish_writes(self) -> None:
        """Waits until everything is on disk under its temporary name, and raises what went wrong with it."""
        for written, _ in self._writes:
            written.result()
        self._writes.clear()

    def commit(self) -> None:
        """Renames all, side tables before the main table of their stage.

        Stopped half-way it leaves whole files of two runs, and their fingerprints tell which stages are stale.
        """
        self.finish_writes()
        for temporary, target in self._moves:
            _show(temporary, target)
        for folder in dict.fromkeys(target.parent for _, target in self._moves):
            sync_folder(folder)
        self._moves.clear()


def temporary_path(target: Path) -> Path:
    """A name beside the target that no other writer uses and no reader looks at."""
    return target.with_name(f".{target.name}.{os.getpid()}-{secrets.token_hex(4)}.tmp")


def remove_left_overs(folder: Path) -> None:
    """Removes the temporary files of writers that are gone; only for who holds the folder's lock."""
    for path in folder.glob(".*.tmp"):
        with suppress(OSError):
            path.unlink()


def sync_folder(folder: Path) -> None:
    """Makes renames in a folder outlast a loss of power, where the file system can."""
    if os.name == "nt":
        return
    with suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def _show(temporary: Path, target: Path) -> None:
    """Renames; on Windows a reader or a virus scanner may hold the target for a moment."""
    for wait_s in (0.05, 0.2, 1.0) if os.name == "nt" else ():
        try:
            os.replace(temporary, target)
        except PermissionError:
            time.sleep(wait_s)
        else:
            return
    os.replace(temporary, target)


@contextmanager
def run_folder_for_writing(folder: Path) -> Iterator[None]:
    """Makes the run folder, and takes it away again where the run fails before anything lies in it.

    Raises InputError where it cannot be made, or is a link that leads out of the folder of run folders.
    """
    _refuse_link_out(folder)
    new = [path for path in (folder, *folder.parents) if not path.exists()]
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(
            Problem(f"cannot be made: {reason}.", str(folder), remedy="Choose another --out folder.")
        ) from None
    try:
        yield
    except BaseException:
        with suppress(OSError):
            for path in new:
                path.rmdir()
        raise


def _refuse_link_out(folder: Path) -> None:
    try:
        outside = folder.is_symlink() and not folder.resolve().is_relative_to(folder.parent.resolve())
    except (OSError, ValueError, RuntimeError):  # a link to itself
        outside = True
    if outside:
        raise InputError(
            Problem(
                "is a symbolic link out of the folder of run folders; nothing is written through it.",
                str(folder),
                remedy="Name the folder it leads to with out or --out.",
            )
        )


def read_input(path: Path, name: str, largest: int) -> InputFile:
    """Reads an input file whole; `name` is what messages call it.

    Raises OSError, ValueError where it is no regular file, and InputError where it is larger than `largest` bytes.
    """
    found = path.stat()
    if stat.S_ISDIR(found.st_mode):
        raise ValueError("it is a folder")
    if not stat.S_ISREG(found.st_mode):
        raise ValueError("it is a device or a pipe, not a file")
    if found.st_size > largest:
        remedy = "If that is right, raise ingest.limits.expanded_mb."
        message = f"has {found.st_size / 1e6:.0f} MB; at most {largest / 1e6:g} MB are read."
        raise InputError(Problem(message, name, remedy=remedy))
    with pa.OSFile(str(path), "rb") as stream:
        return InputFile(name, stream.read_buffer())


def _write_table(stream: BinaryIO, name: str, table: pa.Table, record: Mapping[str, Any]) -> None:
    """One stage table with its field metadata, and `record` in the schema metadata."""
    spec = TABLES[name]
    text = json.dumps(record, ensure_ascii=False)
    schema = spec.schema().with_metadata({METADATA_KEY: text.encode()})
    # Measured numbers have few digits and repeat: a dictionary makes files smaller by a third at no cost. The
    # smallest and largest text of a column is of no use and takes longer than writing it.
    texts = (pa.types.is_dictionary, pa.types.is_string)
    numbers = [field.name for field in schema if not any(is_text(field.type) for is_text in texts)]
    with pq.ParquetWriter(
        stream,
        schema,
        compression="zstd",
        compression_level=1,
        use_dictionary=True,
        write_statistics=numbers,
        write_page_checksum=True,
    ) as writer:
        # The declared label codes are wider than those in memory: one row group at a time is cast to them.
        for start in range(0, max(table.num_rows, 1), ROWS_PER_ROW_GROUP):
            rows = declared(table.slice(start, ROWS_PER_ROW_GROUP), spec)
            writer.write_table(rows.replace_schema_metadata(schema.metadata), ROWS_PER_ROW_GROUP)


def read_table(path: Path, name: str) -> pa.Table:
    """Reads one stage table.

    Raises InputError for a damaged file, and for one whose columns are not the declared ones: checksums cover the
    pages of a file, but not the names of its columns.
    """
    try:
        table = pq.read_table(path, page_checksum_verification=True)
        return declared(table.replace_schema_metadata(None), TABLES[name])
    except (OSError, ValueError, pa.ArrowException, DefectError) as error:
        raise InputError(damaged(path, str(error).splitlines()[0] if str(error) else "unreadable")) from None


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
