"""Workbook files are zip archives of XML: checked for size and damage before anything is built from them."""

from __future__ import annotations

import re
import zipfile
import zlib
from collections.abc import Iterator

import pyarrow as pa

from tieline.errors import InputError, Problem
from tieline.reading.grid import ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.sheet_scan import OdsScan, Places, XlsxScan, unescaped

CHUNK = 1 << 20
_WORKSHEET = re.compile(r"xl/worksheets/[^/]+\.xml", re.IGNORECASE)
_SHEET = re.compile(rb"<(?:\w+:)?sheet\b([^>]*)>")
_RELATION = re.compile(rb"<(?:\w+:)?Relationship\b([^>]*)>")
_ATTRIBUTE = re.compile(rb'([\w:]+)="([^"]*)"')


class Scans:
    """What the scan of a workbook's members found."""

    def __init__(self) -> None:
        self.members: dict[str, XlsxScan | OdsScan] = {}
        self.sheet_members: dict[str, str] = {}

    def lost_cells(self, sheet: str) -> Places:
        """(row, column), from 0, -> text of the cells of a sheet that the reading library leaves out."""
        member = self.sheet_members.get(sheet, "content.xml")
        return self.members[member].lost_in(sheet) if member in self.members else {}


def scan_workbook(file: InputFile, limits: ReadLimits) -> Scans:
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
            return _scan_members(file, archive, limits)
    except (zipfile.BadZipFile, zlib.error, EOFError, OSError, NotImplementedError, ValueError) as error:
        raise InputError(unreadable(file, error)) from error


def unreadable(file: InputFile, error: BaseException) -> Problem:
    """The problem of a workbook that cannot be opened."""
    message = f"is not a readable workbook ({str(error)[:120]})."
    return Problem(message, file.path, remedy="Save it again as .xlsx or .csv.")


def _scan_members(file: InputFile, archive: zipfile.ZipFile, limits: ReadLimits) -> Scans:
    scans, total = Scans(), 0
    for info in archive.infolist():
        scan = _scan_of(info.filename)
        for piece in _pieces(archive, info):
            total += len(piece)
            if total > limits.expanded_bytes:
                message = f"unpacks to more than {limits.expanded_bytes} bytes."
                remedy = "If that is right, raise ingest.limits.expanded_mb."
                raise InputError(Problem(message, file.path, remedy=remedy))
            if scan is not None:
                scan.see(piece)
        if scan is not None:
            scan.end()
            _check_reach(file, info.filename, scan, limits)
            scans.members[info.filename] = scan
    scans.sheet_members = _sheet_members(archive)
    return scans


def _scan_of(name: str) -> XlsxScan | OdsScan | None:
    if _WORKSHEET.fullmatch(name):
        return XlsxScan()
    return OdsScan() if name == "content.xml" else None


def _pieces(archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> Iterator[bytes]:
    with archive.open(info) as member:
        while piece := member.read(CHUNK):
            yield piece


def _check_reach(file: InputFile, name: str, scan: XlsxScan | OdsScan, limits: ReadLimits) -> None:
    if scan.rows * scan.columns > limits.cells:
        message = f"{name} spans {scan.rows} rows and {scan.columns} columns; at most {limits.cells} cells are read."
        raise InputError(Problem(message, file.path, remedy="Delete stray cells far from the table."))


def _sheet_members(archive: zipfile.ZipFile) -> dict[str, str]:
    """Sheet name -> member of an XLSX archive; empty for others."""
    names = set(archive.namelist())
    if not {"xl/workbook.xml", "xl/_rels/workbook.xml.rels"} <= names:
        return {}
    targets = {}
    for tag in _RELATION.findall(archive.read("xl/_rels/workbook.xml.rels")):
        attributes = dict(_ATTRIBUTE.findall(tag))
        target = unescaped(attributes.get(b"Target", b"")).removeprefix("/")
        targets[attributes.get(b"Id", b"")] = target if target.startswith("xl/") else f"xl/{target}"
    members = {}
    for tag in _SHEET.findall(archive.read("xl/workbook.xml")):
        attributes = dict(_ATTRIBUTE.findall(tag))
        identity = next((value for key, value in attributes.items() if key.endswith(b":id")), b"")
        if identity in targets:
            members[unescaped(attributes.get(b"name", b""))] = targets[identity]
    return members
