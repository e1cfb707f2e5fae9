"""Nothing is lost: set-aside cells and rows, the ledger, and every problem at once."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.layouts import ALL, Layout
from ingest.tables import lines, problems, remarks, run
from tieline.columns import INGEST, INGEST_SET_ASIDE, INGEST_SPOTS
from tieline.errors import InputError
from tieline.ingest import ingest
from tieline.reading import delimited
from tieline.reading.input_file import InputFile
from tieline.settings.ingest import IngestSettings
from tieline.tables import check

MESSY = """Point,Run,Phase,SiO2,MgO,Ni ppm,Note
1,A,gl,50.1,#DIV/0!,5,fine
2,A,gl,"1,234",8,12-Mar,
3,A,gl,49
,,,,,,
4,A,gl,48,7,<2,
Mean,A,gl,49,7.5,4,
Point,Run,Phase,SiO2,MgO,Ni ppm,Note
5,A,gl,,n.d.,6,
6,,gl,50,8,5,
"""


def test_every_unusable_cell_and_row_stops_the_run_with_its_place():
    assert [(problem.row, problem.column) for problem in problems(MESSY)] == [
        (2, "MgO"),
        (3, "SiO2"),
        (3, "Ni ppm"),
        (4, None),
        (10, None),
    ]
    assert problems(MESSY)[-1].remedy.startswith("Correct them")
    assert '"#DIV/0!": a spreadsheet error word.' in str(problems(MESSY)[0])


def test_or_is_set_aside_with_raw_text_and_reason():
    result = run(MESSY, on_unreadable="set-aside")
    aside = [tuple(line.values()) for line in result.tables["ingest.set_aside"].to_pylist()]
    assert [(row, column, cells) for _, row, column, _, cells, _ in aside] == [
        (2, "MgO", 1),
        (3, "SiO2", 1),
        (3, "Ni ppm", 1),
        (4, None, 4),
        (7, None, 7),
        (8, None, 7),
        (10, None, 7),
    ]
    assert aside[3][3] == "3,A,gl,49"
    assert aside[1][3] == "1,234"
    assert aside[3][5] == "the row has 4 cells, the header 7"
    assert lines(result, "spot", "analyte", "value") == [
        ("1", "SiO2", 50.1), ("1", "Ni", 5.0),
        ("2", "MgO", 8.0),
        ("4", "SiO2", 48.0), ("4", "MgO", 7.0), ("4", "Ni", None),
        ("5", "SiO2", None), ("5", "MgO", None), ("5", "Ni", 6.0),
    ]  # fmt: skip
    assert dict(result.ledger.outcomes) == {
        "values": 6, "below limit only": 1, "not measured": 2, "set aside": 28, "labels": 12, "sigma": 0, "limit": 0,
        "not read": 4,
    }  # fmt: skip
    assert result.ledger.entered == 4 + 7 * 7


def test_problems_of_all_files_are_told_together():
    texts = {
        "a.csv": "Point,Run,Phase,MgO\n1,A,gl,x\n",
        "b.csv": "Point,Run,Phase,MgO\n1,A,gl,y\n",
        "c.csv": "",
    }
    config = IngestSettings.model_validate(
        {
            "tables": [{"path": path, "unit": "wt%", "columns": {"spot": "Point", "experiment": "Run", "phase": "Phase"}}
                       for path in (*texts, "d.csv")],
            "experiments": {"path": "e.csv", "columns": {"experiment": "Run"}},
        }
    )  # fmt: skip
    files = {path: InputFile.from_bytes(path, text.encode()) for path, text in texts.items()}
    with pytest.raises(InputError) as caught:
        ingest(files, settings=config)
    assert {problem.file for problem in caught.value.problems} == {
        "a.csv",
        "b.csv",
        "c.csv",
        "d.csv",
        "e.csv",
    }


def test_problems_of_columns_and_cells_are_told_together():
    found = problems("Punkt,Run,Phase,MgO,Ni\n1,A,gl,x,5\n", {"unit": None})
    assert {(problem.row, problem.column) for problem in found} == {
        (1, "Point"),
        (1, "MgO"),
        (1, "Ni"),
        (2, "MgO"),
    }


def test_a_header_without_rows():
    assert "the header has no rows below it" in str(problems("Point,Run,Phase,MgO\n")[0])


def test_thousands_of_problems_are_counted_not_listed():
    text = "Point,Run,Phase,MgO\n" + "".join(f"{i},A,gl,x\n" for i in range(1000))
    found = problems(text)
    assert len(found) == 201
    assert "800 more cells or rows" in found[-1].message


def test_far_more_problems_than_are_kept_are_counted():
    text = "Point,Run,Phase,MgO,CaO\n" + "".join(f"{i},A,gl,x,y\n" for i in range(3000))
    assert "5800 more cells or rows" in problems(text)[-1].message
    assert run(text, on_unreadable="set-aside").tables["ingest.set_aside"].num_rows == 6000


def test_a_wrong_phase_column_gives_few_remarks():
    text = "Point,Run,Phase,MgO\n" + "".join(f"{i},A,note number {i},1\n" for i in range(500))
    told = run(text).remarks
    assert len(told) == 21
    assert "480 more phase labels" in str(told[-1])


def test_control_characters_do_not_reach_messages():
    found = problems("Point,Run,Phase,MgO\n1,A,gl,\x1b[31mred\n")
    assert "\x1b" not in str(found[0])
    assert "\\x1b[31mred" in str(found[0])


def test_tables_are_as_declared_and_labels_share_their_dictionary():
    text = "Point,Run,Phase,MgO\n1,A,gl,5\n2,B,ol,6\n"
    result = run({"a.csv": text, "b.csv": text.replace("B", "C")})
    check(result.tables["ingest"], INGEST)
    check(result.tables["ingest.spots"], INGEST_SPOTS)
    check(result.tables["ingest.set_aside"], INGEST_SET_ASIDE)
    assert lines(result, "table", "experiment") == [
        ("a.csv", "A"),
        ("a.csv", "B"),
        ("b.csv", "A"),
        ("b.csv", "C"),
    ]
    chunks = result.tables["ingest"].column("experiment").chunks
    assert all(chunk.dictionary.equals(chunks[0].dictionary) for chunk in chunks)


def test_blocks_do_not_change_the_result(monkeypatch: pytest.MonkeyPatch):
    rng = np.random.default_rng(5)
    rows = [f"s{i},A,gl,{rng.normal():.4f},{rng.normal():.3f}" for i in range(600)]
    rows[100] = "s100,A,gl,x,1"
    rows[200] = "s200,A"
    text = "Point,Run,Phase,MgO,CaO\n" + "\n".join(rows)
    whole = run(text, on_unreadable="set-aside")
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 1 << 10)
    parts = run(text, on_unreadable="set-aside")
    assert parts.tables["ingest"].column("raw").num_chunks > 5
    for name, table in whole.tables.items():
        assert table.to_pylist() == parts.tables[name].to_pylist()
    assert whole.ledger == parts.ledger


def test_conditions():
    files = {
        "t.csv": InputFile.from_bytes("t.csv", b"Point,Run,Phase,MgO\n1,A,gl,5\n"),
        "e.csv": InputFile.from_bytes("e.csv", b"Run,T,Capsule,Note\nA,1300,Pt,\n\nB,-,Re,dry\n"),
    }
    table = {
        "path": "t.csv",
        "unit": "wt%",
        "columns": {"spot": "Point", "experiment": "Run", "phase": "Phase"},
    }
    columns = {"experiment": "Run", "temperature_C": "T", "capsule": "Capsule"}
    config = IngestSettings.model_validate(
        {"tables": [table], "experiments": {"path": "e.csv", "columns": columns}}
    )
    found = ingest(files, settings=config).tables["ingest.experiments"].to_pylist()
    assert [tuple(line.values()) for line in found] == [
        ("A", "temperature_C", 1300.0, "1300"),
        ("A", "capsule", None, "Pt"),
        ("B", "temperature_C", None, "-"),
        ("B", "capsule", None, "Re"),
    ]
    files["e.csv"] = InputFile.from_bytes("e.csv", b"Run,T,Capsule\nA,1300,Pt\nA,1,x\n,2,y\n")
    with pytest.raises(InputError) as caught:
        ingest(files, settings=config)
    assert [problem.row for problem in caught.value.problems] == [3, 4]


CELL_CHANGES = st.sampled_from(
    ["", "x", "#N/A", "1e400", "\x00", '"', "\n", ",", ";", "\u0661", "<", "-", "nan", "12-Mar"]
)


@settings(max_examples=150, deadline=None)
@given(st.sampled_from(sorted(ALL)), st.data())
def test_destroyed_tables_are_read_or_refused_with_a_place(name: str, data: st.DataObject):
    """Some bytes of an accepted table are replaced; what still reads must be a number that the table shows."""
    layout = _layout(name)
    raw = bytearray(layout.data)
    for _ in range(data.draw(st.integers(1, 4))):
        place = data.draw(st.integers(0, len(raw) - 1))
        piece = data.draw(CELL_CHANGES | st.text(max_size=3)).encode("utf-8", "replace")
        raw[place : place + data.draw(st.integers(0, 4))] = piece
    broken = Layout(layout.path, bytes(raw), layout.table)
    try:
        result = broken.read(on_unreadable=data.draw(st.sampled_from(["stop", "set-aside"])))
    except InputError as error:
        found = error.problems
        assert found
        assert all(problem.file == layout.path for problem in found)
        return
    result.ledger.check("ingest")


_LAYOUTS: dict[str, Layout] = {}


def _layout(name: str) -> Layout:
    return _LAYOUTS.setdefault(name, ALL[name]())


CELLS = st.sampled_from(
    ["1.5", "-0.25", "<0.01", "< 3", "bdl", "n.d.", "", "-", "0", "12 wt%", " 7 ", "\u22121", "1e-3"]
)


@settings(deadline=None)
@given(st.lists(st.lists(CELLS, min_size=2, max_size=2), min_size=1, max_size=6))
def test_accepted_cells_keep_their_text_and_their_account(cells: list[list[str]]):
    text = "Point,Run,Phase,MgO,CaO\n" + "".join(f"s{i},A,gl,{a},{b}\n" for i, (a, b) in enumerate(cells))
    result = run(text)
    flat = [cell for row in cells for cell in row]
    assert [raw for (raw,) in lines(result, "raw")] == flat
    outcomes = result.ledger.outcomes
    assert outcomes["values"] + outcomes["below limit only"] + outcomes["not measured"] == len(flat)
    assert outcomes["set aside"] == 0


def test_sliced_buffers_are_read():
    text = b"xxPoint,Run,Phase,MgO\n1,A,gl,5\n"
    config = IngestSettings.model_validate(
        {
            "tables": [
                {
                    "path": "t.csv",
                    "unit": "wt%",
                    "columns": {"spot": "Point", "experiment": "Run", "phase": "Phase"},
                }
            ]
        }
    )
    result = ingest({"t.csv": InputFile("t.csv", pa.py_buffer(text).slice(2))}, settings=config)
    assert result.tables["ingest"].column("value").to_pylist() == [5.0]


def test_remarks_say_how_much_was_set_aside():
    assert "1 line set aside: repeated header line" in remarks(run(MESSY, on_unreadable="set-aside"))
