"""What is fuzzed: one function per way in for strangers' bytes, with what must hold whatever the bytes are.

Each takes bytes. An exception other than InputError is a finding, and so is a broken promise. The corpus of a target
is the folder of its name in `tests/corpus/`; `test_fuzzing.py` runs all of it, `fuzz.py` searches on from there.
"""

from __future__ import annotations

import io
import json
import math
import os
import re
import tempfile
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from faults.workbooks import SHEET, workbook
from tieline.accepted import read_accepted_values
from tieline.chemistry.names import looks_like_analyte, recognise_analyte
from tieline.chemistry.phases import phase_name
from tieline.configuration import read
from tieline.errors import InputError
from tieline.ingest.stage import ingest
from tieline.lock import _holder
from tieline.provenance import content_digest
from tieline.reading.cell_text import LARGEST, SMALLEST, UNREADABLE, VALUE, CellStyle, read_text
from tieline.reading.cells import parse_cells
from tieline.reading.formats import read_grid
from tieline.reading.grid import ReadLimits
from tieline.reading.input_file import InputFile
from tieline.rulings import read_rulings
from tieline.settings.ingest import IngestSettings
from tieline.starting.configuration_text import first_configuration
from tieline.storage import read_record, read_table

LIMITS = ReadLimits(columns=200, cells=20_000, expanded_bytes=2_000_000)
STYLES = (
    CellStyle(below_limit=("bdl", "<dl"), not_measured=("", "-", "n.d.")),
    CellStyle(decimal=",", thousands=".", below_limit=("bdl",)),
    CellStyle(thousands=",", units=frozenset({"ppm", "%"}), zero_state=2),
    CellStyle(decimal=",", not_measured=("", "-99", "0")),
)
PLAIN = re.compile(r"[+-]?[0-9]+\.[0-9]+")
SCRATCH = Path(tempfile.gettempdir()) / f"tieline-fuzz-{os.getpid()}"


def text_of(data: bytes) -> str:
    return data.decode("utf-8", "replace")


def attempt(work: Callable[[], Any]) -> tuple[Any, InputError | None]:
    """What a function returned, or how it refused; any other exception comes through."""
    try:
        return work(), None
    except InputError as error:
        return None, error


def cells(data: bytes) -> None:
    """Lines as cells: in bounds, the same one by one as together, and a plain number is the number it shows."""
    if not data:
        return
    style = STYLES[data[0] % len(STYLES)]
    texts = text_of(data[1:]).split("\n")
    found = parse_cells(pa.array(texts, pa.string()), style)
    for numbers in (found.value, found.limit):
        known = np.abs(numbers[~np.isnan(numbers)])
        assert np.isfinite(known).all()
        assert ((known == 0) | ((known >= SMALLEST) & (known <= LARGEST))).all()
    assert ((found.state >= 0) & (found.state <= 3)).all()
    assert ((found.reason > 0) == (found.state == UNREADABLE)).all()
    assert (np.isnan(found.value) | (found.state == VALUE)).all()
    for place, text in enumerate(texts):
        alone = parse_cells(pa.array([text], pa.string()), style)
        assert alone.state[0] == found.state[place], text
        assert same(alone.value[0], found.value[place]), text
        slow = read_text(text, style)
        if found.state[place] == VALUE:
            assert slow.state == VALUE or style.zero_state != VALUE, text
            assert same(slow.value, found.value[place]), text
        if found.state[place] == VALUE and style.decimal == "." and PLAIN.fullmatch(text):
            assert found.value[place] == float(text), text


def same(one: float, other: float) -> bool:
    return bool(one == other) or (math.isnan(one) and math.isnan(other))


def headers(data: bytes) -> None:
    """Lines as headers and phase labels: recognised or not, the same every time, and never a factor that is none."""
    for text in text_of(data).split("\n"):
        analyte = recognise_analyte(text)
        assert recognise_analyte(text) == analyte
        looks_like_analyte(text)
        name = phase_name(text)
        assert name is None or phase_name(name) == name
        if analyte is not None:
            assert analyte.unit in (None, "wt%", "ppm", "ppb") or isinstance(analyte.unit, str)


def configuration(data: bytes) -> None:
    """A configuration is loaded or refused in words, and its run folder lies where it should."""
    path = scratch("session.toml", data)
    found, refused = attempt(lambda: read(path))
    if refused is not None:
        assert refused.problems
        assert all(str(problem) for problem in refused.problems)
        return
    session, problems = found
    assert all(str(problem) for problem in problems)
    assert session.run_folder.name == session.settings.session
    assert not {"/", "\\", "\0"} & set(session.settings.session)
    json.dumps(session.settings.model_dump(mode="json"), allow_nan=False)


def override(data: bytes) -> None:
    """`--set`: applied or refused in words."""
    path = scratch("session.toml", b'session = "x"\n[[ingest.tables]]\npath = "t.csv"\n')
    try:
        read(path, overrides=text_of(data).split("\n"))
    except InputError:
        return


def delimited(data: bytes) -> None:
    """Any bytes as a text table, plain and packed: every cell comes back, in rows that are counted rightly."""
    for name in ("t.csv", "t.tsv.gz"):
        try:
            grid = read_grid(InputFile.from_bytes(name, data), limits=LIMITS)
        except InputError:
            continue
        rows = grid.rows()
        assert (np.diff(rows) > 0).all()
        assert all(len(block.cells) == grid.width for block in grid.blocks)
        assert all(len(column) == len(block.rows) for block in grid.blocks for column in block.cells)


def table(data: bytes) -> None:
    """A whole spot table through `ingest`: what goes in is accounted for."""
    settings = IngestSettings.model_validate(
        {
            "tables": (
                {
                    "path": "t.csv",
                    "unit": "wt%",
                    "columns": {"spot": "Point", "experiment": "Run", "phase": "Phase"},
                    "sigma": {"pattern": "{analyte} 1s"},
                    "limit": {"pattern": "{analyte} DL"},
                },
            ),
            "on_unreadable": "set-aside",
            "on_duplicate_spot": "number",
            "limits": {"columns": 200, "cells": 20_000, "expanded_mb": 2},
        }
    )
    try:
        result = ingest({"t.csv": InputFile.from_bytes("t.csv", data)}, settings=settings)
    except InputError:
        return
    result.ledger.check("ingest")
    values = result.tables["ingest"].column("value").to_numpy()
    assert np.isfinite(values[~np.isnan(values)]).all()
    for one in result.tables.values():
        content_digest(one)


def started(data: bytes) -> None:
    """A first configuration from any table is valid TOML of this program's keys."""
    try:
        text = first_configuration([InputFile.from_bytes("t.csv", data)], "x")
    except InputError:
        return
    import tomllib

    settings = tomllib.loads(text)
    assert settings["session"] == "x"
    assert set(settings) <= {"session", "ingest", "convert"}


SHEET_NAME = "xl/worksheets/sheet1.xml"
PARTS = (
    SHEET_NAME,
    "xl/sharedStrings.xml",
    "xl/workbook.xml",
    "xl/_rels/workbook.xml.rels",
    "xl/styles.xml",
    "content.xml",
)


def spreadsheet(data: bytes) -> None:
    """Workbooks with one part replaced, and any bytes as one: read or refused, never more memory than allowed."""
    if not data:
        return
    kind, rest = data[0] % (len(PARTS) + 2), data[1:]
    if kind == len(PARTS):
        made = rest
    elif kind == len(PARTS) + 1:
        made = workbook(text_of(rest))
    elif PARTS[kind] == "content.xml":
        made = ods(rest)
    else:
        made = workbook(more={PARTS[kind]: rest})
    try:
        grid = read_grid(InputFile.from_bytes("t.ods" if kind == 5 else "t.xlsx", made), limits=LIMITS)
    except InputError:
        return
    assert grid.width * grid.row_count <= LIMITS.cells


def ods(content: bytes) -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w") as archive:
        archive.writestr("mimetype", "application/vnd.oasis.opendocument.spreadsheet")
        archive.writestr("META-INF/manifest.xml", '<?xml version="1.0"?><manifest:manifest/>')
        archive.writestr("content.xml", content)
    return stream.getvalue()


def small_tables(data: bytes) -> None:
    """Rulings and accepted values."""
    for name, function in (("r.csv", read_rulings), ("a.csv", read_accepted_values)):
        try:
            function({name: InputFile.from_bytes(name, data)})
        except InputError:
            continue


def damaged_files(data: bytes) -> None:
    """A stage file, lock or manifest that was damaged: told, or as good as new, never believed by half."""
    path = scratch("classify.parquet", data)
    record = read_record(path)
    assert record is None or isinstance(record, dict)
    _, refused = attempt(lambda: read_table(path, "classify"))
    assert refused is None or "is damaged" in str(refused)
    assert isinstance(_holder(text_of(data)), dict)


def scratch(name: str, data: bytes) -> Path:
    SCRATCH.mkdir(exist_ok=True)
    path = SCRATCH / name
    path.write_bytes(data)
    return path


TARGETS: dict[str, Callable[[bytes], None]] = {
    function.__name__: function
    for function in (
        cells, headers, configuration, override, delimited, table, started, spreadsheet, small_tables, damaged_files,
    )
}  # fmt: skip
CORPUS = Path(__file__).resolve().parents[1] / "corpus"


def tiny_parquet(rows: int = 3) -> bytes:
    """A small Parquet file with the metadata of a stage file."""
    one = pa.table({"a": [1.0] * rows, "b": pa.array(["x"] * rows).dictionary_encode()})
    one = one.replace_schema_metadata({"tieline": json.dumps({"stage": "x", "fingerprint": "0" * 64})})
    sink = io.BytesIO()
    pq.write_table(one, sink, compression="zstd", write_page_checksum=True)
    return sink.getvalue()


def seeds() -> dict[str, list[bytes]]:
    """Ordinary input for every target, from which a search sets out."""
    probe = (CORPUS.parents[1] / "configs" / "ember" / "probe.csv").read_bytes()
    laser = (CORPUS.parents[1] / "configs" / "ember" / "laser.csv").read_bytes()
    session = (CORPUS.parents[1] / "configs" / "ember.toml").read_bytes()
    head = b"\n".join(probe.splitlines()[:6]) + b"\n"
    rulings = b"spot,analyte,verdict,analyst,date,reason\na,*,drop,A,2024-05-01,crack\nb,Ni,keep,A,2024-05-01,fine\n"
    accepted = b"material,analyte,value,unit,sd,source\nG,SiO2,50.0,wt%,0.1,x\nG,Ni,200,ppm,5,x\n"
    sheet = SHEET.format(
        before="", rows='<row r="1"><c r="A1" t="inlineStr"><is><t>Point</t></is></c></row>', after=""
    )
    words = b"48.5\n<0.013\nbdl\n\n-\n1,234.5\n12 ppm\n1e5\n3.5(2)\n12/05/2020\n#DIV/0!\n\xe2\x88\x925\n<1e3 %\n1.234,5\n0\n-99\n"
    names = probe.splitlines()[0].replace(b",", b"\n") + b"\n" + laser.splitlines()[0].replace(b",", b"\n")
    more = b"\nNi60 (ppm)\n60Ni/29Si\nFeOT\nSiO2 wt% 2s\nK2O_LOD\nMg#\nol\nopx\nglass\nquenched melt\nREE2O3\nNi_ppm_m60_Int2SE\n"
    return {
        "cells": [bytes([i]) + words for i in range(len(STYLES))],
        "headers": [names, more],
        "configuration": [
            session,
            session[:900],
            b'session = "x"\n[[ingest.tables]]\npath = "t.csv"\nskip_rows = 3\n',
        ],
        "override": [b"screen.total.sigmas=3\npartition.confidence = 0.9", b'session = "a/b"\nout="x"'],
        "delimited": [head, laser[:1500], "Point;MgO\np1;48,5\n".encode("utf-16")],
        "table": [head, head.replace(b",", b";").replace(b".", b",")],
        "started": [head, laser[:1500]],
        "spreadsheet": [
            bytes([0]) + sheet.encode(),
            bytes([len(PARTS)]) + workbook(),
            bytes([len(PARTS) + 1]) + b'<row r="1"/>',
        ],
        "small_tables": [rulings, accepted],
        "damaged_files": [tiny_parquet(), b'{"host": "a", "pid": 12}'],
    }
