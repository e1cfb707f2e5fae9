"""Workbook files are zip archives of XML: checked for size and damage before anything is built from them."""

from __future__ import annotations

import re
import zipfile
import zlib
from collections.abc import Callable, Iterator

import pyarrow as pa

from tieline.errors import InputError, Problem
from tieline.reading.grid import ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.sheet_scan import OdsScan, Places, XlsxScan, elements

CHUNK = 1 << 20
_ODS_CONTENT = "content.xml"
_BINARY_WORKBOOK = "xl/workbook.bin"  # its sheets are no XML and could not be measured
_SHEET_WORD = b"sheetData"  # without it no member is read as a sheet
_TEXTS = "xl/sharedstrings.xml"
_TEXT_COUNT = re.compile(rb"uniqueCount\s*=\s*[\"']([0-9]+)")
_SHORTEST_TEXT = len("<si/>")


class Scans:
    """What the scan of a workbook's members found."""

    def __init__(self) -> None:
        self.members: dict[str, XlsxScan | OdsScan] = {}
        self.sheet_members: dict[str, str] = {}

    def lost_cells(self, sheet: str) -> Places:
        """(row, column), from 0, -> text of the cells of a sheet that the reading library leaves out."""
        member = self.sheet_members.get(sheet, _ODS_CONTENT)
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
        name = _member_name(info.filename)
        if name == _BINARY_WORKBOOK:
            raise InputError(Problem("is a binary workbook.", file.path, remedy="Save it as .xlsx or .csv."))
        member, texts = _Member(name), _StatedTexts() if name == _TEXTS else None
        for piece in _pieces(archive, info):
            total += len(piece)
            if total > limits.expanded_bytes:
                message = f"unpacks to more than {limits.expanded_bytes} bytes."
                remedy = "If that is right, raise ingest.limits.expanded_mb."
                raise InputError(Problem(message, file.path, remedy=remedy))
            if texts is not None:
                texts.see(piece)
            member.see(piece)
        scan = member.end()
        if texts is not None and texts.stated * _SHORTEST_TEXT > texts.size:
            message = (
                f"is damaged: it states {texts.stated} different texts and has {texts.size} bytes of them."
            )
            raise InputError(Problem(message, file.path, remedy="Save it again as .xlsx or .csv."))
        if scan is not None:
            _check_reach(file, info.filename, scan, limits)
            scans.members[name] = scan
    scans.sheet_members = _sheet_members(archive)
    return scans


def _member_name(name: str) -> str:
    """How the reading library looks for members: without regard to case."""
    return name.replace("\\", "/").lower()


class _Member:
    """One member of the archive, scanned as a sheet for as long as it is XML.

    What is no XML (pictures, macros) is only asked whether it could be read as a sheet all the same.
    """

    def __init__(self, name: str) -> None:
        self._scan: XlsxScan | OdsScan | None = OdsScan() if name == _ODS_CONTENT else XlsxScan()
        self._why: ValueError | None = None
        self._is_sheet, self._rest = name == _ODS_CONTENT, b""

    def see(self, piece: bytes) -> None:
        text = self._rest + piece
        self._is_sheet |= _SHEET_WORD in text
        self._rest = text[-len(_SHEET_WORD) :]
        self._try(lambda scan: scan.see(piece))

    def end(self) -> XlsxScan | OdsScan | None:
        """The scan of a sheet, None for anything else; raises ValueError for a sheet that is no proper XML."""
        self._try(lambda scan: scan.end())
        if self._why is not None and self._is_sheet:
            raise self._why
        return self._scan if self._is_sheet else None

    def _try(self, step: Callable[[XlsxScan | OdsScan], None]) -> None:
        if self._scan is not None:
            try:
                step(self._scan)
            except ValueError as error:
                self._scan, self._why = None, error


class _StatedTexts:
    """How many texts the list of texts says it holds: the reading library believes it and makes room for them."""

    def __init__(self) -> None:
        self.stated, self.size = 0, 0
        self._rest = b""

    def see(self, piece: bytes) -> None:
        self.size += len(piece)
        text = self._rest + piece
        for digits in _TEXT_COUNT.findall(text):
            self.stated = max(self.stated, int(digits[:18]))
        self._rest = text[-100:]


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
    names = {_member_name(name): name for name in archive.namelist()}
    if not {"xl/workbook.xml", "xl/_rels/workbook.xml.rels"} <= set(names):
        return {}
    targets = {}
    for relation in elements(archive.read(names["xl/_rels/workbook.xml.rels"]), "Relationship"):
        target = _member_name(relation.get("Target", "")).removeprefix("/")
        targets[relation.get("Id", "")] = target if target.startswith("xl/") else f"xl/{target}"
    members = {}
    for sheet in elements(archive.read(names["xl/workbook.xml"]), "sheet"):
        identity = next((value for key, value in sheet.items() if key.endswith(":id")), "")
        if identity in targets:
            members[sheet.get("name", "")] = targets[identity]
    return members
