"""Tables from strangers: each is read rightly or refused in words, in bounded memory, and drives nothing."""

from __future__ import annotations

import gzip
import os
import subprocess
import sys
from pathlib import Path

import pytest

from faults.small import BODY, HEADER, rows, write_session
from faults.workbooks import HEADER_ROW, ONE_ROW, RELATIONS, SHEET, number_cell, text_cell, workbook
from sessions import small_session
from tieline import runner
from tieline.configuration import load
from tieline.errors import InputError
from tieline.reading.cells import UNREADABLE, VALUE, CellStyle, parse_cells
from tieline.reading.formats import read_grid
from tieline.reading.grid import Grid, ReadLimits
from tieline.reading.input_file import InputFile

SMALL = ReadLimits(columns=1000, cells=1_000_000, expanded_bytes=20_000_000)
MANY = "4000000000"


def read(data: bytes, name: str = "t.csv", limits: ReadLimits = SMALL) -> Grid:
    return read_grid(InputFile.from_bytes(name, data), limits=limits)


def texts(grid: Grid) -> list[list[str]]:
    return [grid.column(index).to_pylist() for index in range(grid.width)]


# Text tables ------------------------------------------------------------------------------------------------------

REFUSED_TEXTS = {
    "one endless line": (b"a" * 9_000_000, "first row is longer than 4096 kB"),
    "one endless row of cells": (b"1," * 5_000_000, "first row is longer than 4096 kB"),
    "a quotation mark never closed": (
        b'Point,MgO\n"' + b"a" * 20_000_000,
        "a single row is longer than 8 MB",
    ),
    "a hundred thousand columns": (
        b",".join([b"c%d" % i for i in range(100_000)]) + b"\n",
        "100000 columns; at most 1000",
    ),
    "NUL bytes": (b"Point,MgO\np1,\x002\n", "contains NUL bytes"),
    "nothing but line ends": (
        b"Point,MgO\n" + b"\n" * 2_000_000,
        "2000000 rows of 2 columns; at most 1000000 cells",
    ),
    "every row of another length": (
        b"Point,MgO\n" + b'"\n' * 300_000,
        "more than 100000 rows have another number",
    ),
    "only separators": (b",,,,\n" * 1000, "no header was found"),
    "only carriage returns": (b"\r" * 100_000, "no header was found"),
    "nothing": (b"", "the file is empty"),
    "broken UTF-16": (b"\xff\xfeP\x00,\x00\x00\xd8", "does not fit the encoding"),
}


@pytest.mark.parametrize("name", REFUSED_TEXTS)
def test_text_that_is_no_table_is_refused_in_words(name: str):
    data, expected = REFUSED_TEXTS[name]
    with pytest.raises(InputError, match=expected):
        read(data)


@pytest.mark.parametrize("repeats", [1, 40])
def test_a_gzip_bomb_is_refused_even_when_it_comes_in_pieces(repeats: int):
    bomb = gzip.compress(b"\0" * (30_000_000 // repeats), 9) * repeats
    assert len(bomb) < 100_000
    with pytest.raises(InputError, match="unpacks to more than 20000000 bytes"):
        read(bomb, "t.csv.gz")


PEAK = """
import resource, sys
from pathlib import Path
from tieline.configuration import load
from tieline.errors import InputError
from tieline import runner
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
try:
    runner.check(load(Path(sys.argv[1])))
except InputError as error:
    print(str(error)[:300].replace(chr(10), " "))
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before)
"""


def peak_mb(config: Path) -> tuple[str, float]:
    """What `check` says of a session, and the memory in MB that it took beyond its imports."""
    done = subprocess.run([sys.executable, "-c", PEAK, config], capture_output=True, text=True, check=True)
    *said, kilobytes = done.stdout.splitlines()
    return " ".join(said), int(kilobytes) / 1024


@pytest.mark.skipif(sys.platform == "win32", reason="Windows does not tell the memory in this way")
def test_memory_is_bounded_by_the_size_of_the_file(tmp_path: Path):
    """100 MB in one line; `TIELINE_HUGE=1` makes it the 1 GB that was measured."""
    size = 1_000_000_000 if os.environ.get("TIELINE_HUGE") else 100_000_000
    session = write_session(tmp_path)
    with (tmp_path / "probe.csv").open("wb") as stream:
        for _ in range(size // 1_000_000):
            stream.write(b"1," * 500_000)
    said, used = peak_mb(session.path)
    assert "first row is longer than" in said
    assert used < size / 1e6 + 150


def test_a_file_beyond_the_limit_is_not_even_read(tmp_path: Path):
    session = write_session(tmp_path)
    with (tmp_path / "probe.csv").open("r+b") as stream:
        stream.truncate(5_000_000_000)  # a sparse file: it takes no room on disk
    said, used = peak_mb(session.path)
    assert "probe.csv: has 5000 MB; at most 2000 MB are read" in said
    assert "ingest.limits.expanded_mb" in said
    assert used < 150


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="named pipes")
@pytest.mark.parametrize("kind", ["pipe", "device", "folder", "loop", "dangling"])
def test_what_is_no_regular_file_is_not_waited_for(tmp_path: Path, kind: str):
    session = write_session(tmp_path)
    table = tmp_path / "probe.csv"
    table.unlink()
    if kind == "pipe":
        os.mkfifo(table)
    elif kind == "device":
        table.symlink_to("/dev/zero")
    elif kind == "folder":
        table.mkdir()
    elif kind == "loop":
        table.symlink_to(table)
    else:
        table.symlink_to(tmp_path / "nowhere.csv")
    expected = "no such file" if kind == "dangling" else "cannot be read"
    with pytest.raises(InputError, match=expected):
        runner.run(session)
    assert not session.run_folder.exists()


# Cells ------------------------------------------------------------------------------------------------------------

CELLS = {
    "1e308": UNREADABLE, "-1e308": UNREADABLE, "1e309": UNREADABLE, "1e-400": UNREADABLE, "inf": UNREADABLE,
    "-Infinity": UNREADABLE, "NaN(1)": UNREADABLE, "1" * 400: UNREADABLE, "0." + "3" * 400: UNREADABLE,
    "1_000": UNREADABLE, "0x10": UNREADABLE, "\uff11\uff12": UNREADABLE, "\u0661\u0662": UNREADABLE,
    "1\u0301": UNREADABLE, "4\ufe0f5": UNREADABLE, "\u00bd": UNREADABLE, "12\u202e34": UNREADABLE,
    "\x1b[31m5": UNREADABLE, "5\x00": UNREADABLE, "O.5": UNREADABLE, "l0": UNREADABLE, "1e1e1": UNREADABLE,
    "\u22125.5": VALUE, "\u00a05.5 ": VALUE, "5.5\u200b": VALUE, "1" * 12: VALUE, "0" * 63 + "1": VALUE,
}  # fmt: skip


@pytest.mark.parametrize("decimal", [".", ","])
@pytest.mark.parametrize("text", CELLS)
def test_absurd_numbers_and_look_alikes(text: str, decimal: str):
    import pyarrow as pa

    shown = text.replace(".", decimal)
    cells = parse_cells(pa.array([shown, "1"], pa.string()), CellStyle(decimal=decimal))
    assert cells.state[0] == CELLS[text], repr(text)
    assert cells.value[1] == 1
    if CELLS[text] == UNREADABLE:
        assert cells.reason[0] > 0


def test_look_alikes_in_headers_are_told_not_taken(tmp_path: Path):
    """A Cyrillic letter in an oxide: the column is not silently another one, nor silently left out."""
    header = [name.replace("MgO", "\u041cgO") for name in HEADER]
    session = small_session(tmp_path, {"probe.csv": (header, rows())}, BODY.split("[ingest.experiments]")[0])
    remarks = [str(remark) for remark in runner.check(session)[0].remarks]
    assert any("columns not read" in remark and "\u041cgO" in remark for remark in remarks)


def test_two_labels_that_only_look_alike_are_not_joined(tmp_path: Path):
    session = write_session(tmp_path)
    table = tmp_path / "probe.csv"
    text = table.read_text(encoding="utf-8").replace("X-1-ol-2,X-1", "X-1-ol-2,\u0425-1")
    table.write_text(text, encoding="utf-8")
    runner.run(load(session.path))
    from sessions import result

    assert set(result(session, "ingest.spots")["experiment"].dropna()) >= {"X-1", "\u0425-1"}


# Workbooks --------------------------------------------------------------------------------------------------------

BIG = 'xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main"'
BOMB = '<!DOCTYPE x [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;"><!ENTITY c "&b;&b;&b;&b;&b;">]>'
OUTSIDE = '<!DOCTYPE x [<!ENTITY c SYSTEM "file:///etc/passwd">]>'
ENTITY_ROWS = HEADER_ROW + f'<row r="2">{text_cell("A2", "&c;")}{number_cell("B2", 1)}</row>'
FAR_CELLS = {
    "as programs write it": '<c r="XFD1048576"><v>1</v></c>',
    "in single quotes": "<c r='XFD1048576'><v>1</v></c>",
    "after a tab": '<c\tr="XFD1048576"><v>1</v></c>',
    "after a line end": '<c\n\nr="XFD1048576"><v>1</v></c>',
    "with a coded letter": '<c r="&#88;FD1048576"><v>1</v></c>',
    "with spaces": '<c r = "XFD1048576"><v>1</v></c>',
    "after other attributes": "<c "
    + " ".join(f'a{i}="{"y" * 30}"' for i in range(40))
    + ' r="XFD1048576"><v>1</v></c>',
    "disguised": """<c x='r="A1"' r='XFD1048576'><v>1</v></c>""",
    "with a prefix": '<x:c xmlns:x="y" r="XFD1048576"><x:v>1</x:v></x:c>',
    "in small letters": '<c r="xfd1048576"><v>1</v></c>',
    "without a place": "<c><v>1</v></c>" * 16384,
}
REFUSED_WORKBOOKS = {
    **{
        f"a far cell {how}": (workbook(f'{HEADER_ROW}{ONE_ROW}<row r="1048576">{cell}</row>'), "cells are read")
        for how, cell in FAR_CELLS.items()
    },
    "a far sheet elsewhere in the archive": (
        workbook(
            more={
                "xl/_rels/workbook.xml.rels": RELATIONS.format(kind="worksheet", target="/elsewhere/x.bin"),
                "elsewhere/x.bin": SHEET.format(
                    before="", rows=f'<row r="1048576">{FAR_CELLS["in single quotes"]}</row>', after=""
                ),
            }
        ),
        "cells are read",
    ),
    "no proper XML, though a reader might not mind": (
        workbook(more={"xl/worksheets/sheet1.xml": "<<<<sheetData><row r='1'><c r='XFD1048576'/></row>"}),
        "damaged XML",
    ),
    "entities that multiply": (workbook(ENTITY_ROWS, before=BOMB), "document type declaration"),
    "an entity that is another file": (workbook(ENTITY_ROWS, before=OUTSIDE), "document type declaration"),
    "more texts stated than there are": (
        workbook(more={"xl/sharedStrings.xml": f'<sst {BIG} uniqueCount="{MANY}"><si><t>a</t></si></sst>'}),
        f"states {MANY} different texts",
    ),
    "the same in other letters": (
        workbook(more={"xl/SharedStrings.XML": f"<sst {BIG} uniqueCount = '{MANY}'><si><t>a</t></si></sst>"}),
        f"states {MANY} different texts",
    ),
    "a text that is not there": (
        workbook(HEADER_ROW + f'<row r="2"><c r="A2" t="s"><v>{MANY}</v></c></row>'),
        "not a readable workbook",
    ),
    "a bomb": (workbook(more={"xl/media/picture.png": b"\0" * 30_000_000}), "unpacks to more than"),
    "a bomb in a bomb": (workbook(more={f"xl/{i}.zip": workbook(after=" " * 9_000_000) + b"\0" * 9_000_000 for i in range(3)}),
                         "unpacks to more than"),
    "a sheet outside": (
        workbook(more={"xl/_rels/workbook.xml.rels": RELATIONS.format(kind="worksheet", target="../../../etc/passwd")}),
        "not a readable workbook",
    ),
    "a binary workbook": (workbook(more={"xl/workbook.bin": b"\x83\x01\0"}), "binary workbook"),
    "a cell nowhere": (workbook(HEADER_ROW + '<row r="2"><c r="2A"><v>1</v></c></row>'), "a cell "),
    "a row without end": (workbook(f'<row r="{"9" * 300}"><c><v>1</v></c></row>'), "a cell in row"),
    "cut off": (workbook()[:-60], "not a readable workbook"),
    "no archive": (b"PK\x03\x04" + b"x" * 200, "not a readable workbook"),
    "text": (b"Point,MgO\np1,2\n", "not a readable workbook"),
    "merged over and over": (
        workbook(after="<mergeCells>" + '<mergeCell ref="A1:A1048576"/>' * 1000 + "</mergeCells>"),
        "merged areas cover one another",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED_WORKBOOKS)
def test_workbooks_that_would_harm_are_refused_in_words(name: str):
    data, expected = REFUSED_WORKBOOKS[name]
    with pytest.raises(InputError, match=expected):
        read(data, "t.xlsx")


READ_WORKBOOKS = {
    "macros and links to other workbooks": workbook(
        more={
            "xl/vbaProject.bin": b"\xd0\xcf\x11\xe0" + bytes(range(256)),
            "xl/externalLinks/externalLink1.xml": "<externalLink/>",
            "xl/externalLinks/_rels/externalLink1.xml.rels": RELATIONS.format(
                kind="externalLinkPath", target="http://192.0.2.1/x.xlsx"
            ),
        }
    ),
    "members with paths": workbook(
        more={"../../outside.txt": "x", "/absolute.txt": "y", "C:\\windows.txt": "z"}
    ),
    "a dimension that lies": workbook(
        more={
            "xl/worksheets/sheet1.xml": SHEET.format(before="", rows=HEADER_ROW + ONE_ROW, after="").replace(
                "<sheetData>", '<dimension ref="A1:XFD1048576"/><sheetData>'
            )
        }
    ),
    "deep nesting": workbook(after="<a>" * 50_000 + "</a>" * 50_000),
    "a formula that fetches, with the value last shown": workbook(
        f'{HEADER_ROW}<row r="2">{text_cell("A2", "p1")}<c r="B2"><f>WEBSERVICE("http://192.0.2.1/")</f><v>48.5</v></c></row>'
    ),
}


@pytest.mark.parametrize("name", READ_WORKBOOKS)
def test_what_else_a_workbook_carries_is_neither_followed_nor_run(name: str, monkeypatch: pytest.MonkeyPatch):
    import socket

    def refuse(*_: object) -> None:
        raise AssertionError("a connection was tried")

    monkeypatch.setattr(socket.socket, "connect", refuse)
    assert texts(read(READ_WORKBOOKS[name], "t.xlsm")) == [["p1"], ["48.5"]]


@pytest.mark.parametrize("quote", ['"', "'"])
def test_lost_cells_are_found_however_the_sheet_is_written(quote: str):
    """An error cell must not become a blank because its attributes stand in another order or other quotes."""
    cell = '<c t="e" r="B2"><v>#DIV/0!</v></c>'.replace('"', quote)
    bare = '<row r="3"><c t="inlineStr"><is><t>p2</t></is></c><c t="e"><v>#REF!</v></c></row>'.replace(
        '"', quote
    )
    grid = read(workbook(f'{HEADER_ROW}<row r="2">{text_cell("A2", "p1")}{cell}</row>{bare}'), "t.xlsx")
    assert texts(grid) == [["p1", "p2"], ["#DIV/0!", "#REF!"]]


# Parquet ----------------------------------------------------------------------------------------------------------


def test_parquet_that_is_none_is_refused():
    for data in (b"PAR1", b"PAR1" + b"\xff" * 100 + b"PAR1", b"PAR1\x00\x00\x00\x00PAR1"):
        with pytest.raises(InputError, match="not a readable Parquet file"):
            read(data, "t.parquet")


# Names that are paths, and links ------------------------------------------------------------------------------------


def test_labels_that_are_paths_reach_no_file(tmp_path: Path):
    session = write_session(tmp_path / "in")
    table = tmp_path / "in" / "probe.csv"
    text = table.read_text(encoding="utf-8").replace("X-1", "../../x").replace("X-2", "C:\\con")
    table.write_text(text, encoding="utf-8")
    (tmp_path / "in" / "rulings.csv").write_text(
        "spot,analyte,verdict,analyst,date,reason\n", encoding="utf-8"
    )
    (tmp_path / "in" / "experiments.csv").write_text(
        "Run,T,P\n../../x,1250,1\nC:\\con,1300,1\n", encoding="utf-8"
    )
    from tieline.report.write import write_report

    runner.run(load(session.path))
    write_report(load(session.path), tmp_path / "in" / "figures")
    assert {path.name for path in tmp_path.iterdir()} == {"in"}
    assert all(
        path.name.isascii() and "con" not in path.name.lower()
        for path in (tmp_path / "in" / "figures").iterdir()
    )


@pytest.mark.skipif(sys.platform == "win32", reason="links need rights there")
class TestLinks:
    def test_a_run_folder_that_leads_elsewhere_is_refused(self, tmp_path: Path):
        session = write_session(tmp_path / "in")
        (tmp_path / "elsewhere").mkdir()
        session.run_folder.parent.mkdir()
        session.run_folder.symlink_to(tmp_path / "elsewhere")
        with pytest.raises(InputError, match="symbolic link out of the folder"):
            runner.run(session)
        assert not list((tmp_path / "elsewhere").iterdir())

    def test_a_result_that_is_a_link_is_replaced_and_not_followed(self, tmp_path: Path):
        session = write_session(tmp_path / "in")
        precious = tmp_path / "precious"
        precious.write_text("keep")
        session.run_folder.mkdir(parents=True)
        for name in ("ingest.parquet", "run.json", ".tieline.lock.1.tmp", ".ingest.parquet.1.tmp"):
            (session.run_folder / name).symlink_to(precious)
        runner.run(session)
        assert precious.read_text() == "keep"
        assert not any(path.is_symlink() for path in session.run_folder.iterdir())

    def test_a_lock_that_is_a_link_is_not_written_through(self, tmp_path: Path):
        session = write_session(tmp_path / "in")
        precious = tmp_path / "precious"
        precious.write_text("keep")
        os.utime(precious, (1e9, 1e9))
        session.run_folder.mkdir(parents=True)
        (session.run_folder / ".tieline.lock").symlink_to(precious)
        runner.run(session)
        assert precious.read_text() == "keep"
