"""Workbook files are zip archives of XML: how large they become, checked before anything is built from them."""

from __future__ import annotations

import re
import zipfile
import zlib
from collections.abc import Iterator

import pyarrow as pa

from tieline.errors import InputError, Problem
from tieline.reading.grid import ReadLimits
from tieline.reading.input_file import InputFile

CHUNK = 1 << 20
OVERLAP = 256  # an attribute that straddles two pieces is seen whole in one of them
_CELL = re.compile(rb'<(?:\w+:)?c\b[^>]{0,200}?\br="([A-Z]{1,3})([0-9]{1,7})"')
_REPEATED = re.compile(rb'number-(columns|rows)-repeated="([0-9]+)"')
_WORKSHEET = re.compile(r"xl/worksheets/[^/]+\.xml", re.IGNORECASE)
_SPREADSHEET_ROWS, _SPREADSHEET_COLUMNS = 1 << 20, 1 << 14


def check_workbook(file: InputFile, limits: ReadLimits) -> None:
    """Raises InputError for a file that is no zip archive, is damaged, or unpacks to more than allowed.

    Unpacks every member in pieces and counts, because the sizes an archive states may be lies; a sheet is
    refused where the rectangle its cells span has more cells than allowed, because it is built whole.
    """
    try:
        with zipfile.ZipFile(pa.BufferReader(file.data)) as archive:
            if any(info.flag_bits & 1 for info in archive.infolist()):
                raise InputError(
                    Problem("is protected by a password.", file.path, remedy="Save it without one.")
                )
            _check_members(file, archive, limits)
    except (zipfile.BadZipFile, zlib.error, EOFError, OSError, NotImplementedError, ValueError) as error:
        message = f"is not a readable workbook ({str(error)[:120]})."
        raise InputError(Problem(message, file.path, remedy="Save it again as .xlsx or .csv.")) from error


def _check_members(file: InputFile, archive: zipfile.ZipFile, limits: ReadLimits) -> None:
    total = 0
    for info in archive.infolist():
        is_sheet = _WORKSHEET.fullmatch(info.filename) is not None
        rows, columns = 1, 1
        for piece in _pieces(archive, info):
            total += len(piece)
            if total > limits.expanded_bytes:
                remedy = "If that is right, raise ingest.limits.expanded_mb."
                raise InputError(
                    Problem(f"unpacks to more than {limits.expanded_bytes} bytes.", file.path, remedy=remedy)
                )
            if is_sheet:
                rows, columns = _spanned(piece, rows, columns)
            elif info.filename == "content.xml":
                _check_repeats(file, piece, limits)
        if rows * columns > limits.cells:
            message = f"{info.filename} spans {rows} rows and {columns} columns; at most {limits.cells} cells are read."
            raise InputError(Problem(message, file.path, remedy="Delete stray cells far from the table."))


def _pieces(archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> Iterator[bytes]:
    """The member's bytes in pieces; each starts with the end of the one before."""
    with archive.open(info) as member:
        before = b""
        while piece := member.read(CHUNK):
            yield before + piece
            before = piece[-OVERLAP:]


def _spanned(piece: bytes, rows: int, columns: int) -> tuple[int, int]:
    references = set(_CELL.findall(piece))
    for letters, digits in references:
        rows = max(rows, int(digits))
        columns = max(columns, _column_number(letters))
    return rows, columns


def _column_number(letters: bytes) -> int:
    number = 0
    for letter in letters:
        number = number * 26 + letter - ord("A") + 1
    return number


def _check_repeats(file: InputFile, piece: bytes, limits: ReadLimits) -> None:
    """A repeated run is written once and read many times; blank runs to the sheet's edge are usual and harmless."""
    for axis, digits in set(_REPEATED.findall(piece)):
        edge = _SPREADSHEET_ROWS if axis == b"rows" else _SPREADSHEET_COLUMNS
        if int(digits[:12]) > edge:
            raise InputError(Problem(f"repeats a cell {digits[:12].decode()} times.", file.path))
