"""The hand-over files hold the numbers of the stage files, and their labels stay labels."""

from __future__ import annotations

import csv
import io
import math
import shutil
import subprocess
from pathlib import Path

import numpy as np
import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from report.conftest import FORMULAS, SCRIPT
from test_audit import short_session
from tieline import runner
from tieline.columns import CLASSIFY
from tieline.configuration import Session, load
from tieline.report.csv_files import csv_bytes, defused
from tieline.report.latex import escaped, partition_document
from tieline.report.left_out import by_person, by_reason
from tieline.report.methods import methods
from tieline.report.sheets import Heading, Sheet, partition_sheet
from tieline.report.source import Source, read_source
from tieline.report.spots import spot_use
from tieline.report.values_sheet import spots_sheet
from tieline.report.workbook import workbook_bytes
from tieline.report.write import report_files


def records(data: bytes) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(data.decode(), newline="")))


def number(text: str) -> float | None:
    return float(text) if text else None


def test_csv_holds_every_number_of_the_stage_file(ember_source: Source, ember_files: dict[str, bytes]):
    table = ember_source.table("classify")
    rows = records(ember_files["partition_coefficients.csv"])
    assert len(rows) == table.num_rows
    for column in CLASSIFY.columns:
        if column.kind in ("number", "count"):
            assert [number(row[column.name]) for row in rows] == table.column(column.name).to_pylist(), (
                column.name
            )


def test_csv_states_the_convention_on_every_row(ember_files: dict[str, bytes]):
    for name in ("partition_coefficients.csv", "left_out.csv"):
        rows = records(ember_files[name])
        assert rows
        for row in rows:
            assert "one standard uncertainty" in row["convention"]
            assert "95 %" in row["convention"]
            assert "n: spots" in row["convention"]


def test_written_notation_agrees_with_the_numbers_beside_it(ember_source: Source):
    sheet = partition_sheet(ember_source)
    column = {heading.name: sheet.columns[place] for place, heading in enumerate(sheet.headings)}
    checked = 0
    for text, D, sd, kind in zip(column["written"], column["D"], column["D_sd"], column["kind"], strict=True):
        if kind != "value" or sd is None or "e" in text:
            continue
        mantissa, digits = text.rstrip(")").split("(")
        places = len(mantissa.partition(".")[2])
        uncertainty = float(digits) if "." in digits else int(digits) * 10.0**-places
        assert float(mantissa) == pytest.approx(D, abs=0.5001 * 10.0**-places)
        assert uncertainty == pytest.approx(sd, rel=0.06)  # two digits: half a unit of 10 at most
        checked += 1
    assert checked > 100


def test_workbook_is_read_back_equal(ember_source: Source, ember_files: dict[str, bytes]):
    book = openpyxl.load_workbook(io.BytesIO(ember_files["partition_coefficients.xlsx"]))
    expected = {"readme", "runs", "D", "phase means", "spots", "left out", "reference materials", "settings"}
    assert expected <= set(book.sheetnames)
    for name, table in (
        ("D", "classify"),
        ("phase means", "pair"),
        ("reference materials", "calibrate.materials"),
    ):
        header, *rows = book[name].iter_rows(values_only=True)
        for column in ember_source.table(table).column_names:
            place = next(at for at, title in enumerate(header) if title.split(" [")[0] == column)
            want = [
                None if value == "" else value
                for value in ember_source.table(table).column(column).to_pylist()
            ]
            assert [row[place] for row in rows] == want, (name, column)


def test_workbook_spots_equal_the_converted_values(ember_source: Source, ember_files: dict[str, bytes]):
    book = openpyxl.load_workbook(io.BytesIO(ember_files["partition_coefficients.xlsx"]))
    header, *rows = book["spots"].iter_rows(values_only=True)
    found = {}
    for row in rows:
        cells = dict(zip(header, row, strict=True))
        for title, value in cells.items():
            if title.endswith(" value_ppm [ug/g]") and value is not None:
                found[cells["table"], cells["row"], title.split(" ")[0]] = value
    convert = ember_source.table("convert").select(["table", "row", "analyte", "value_ppm"]).to_pylist()
    want = {
        (r["table"], r["row"], r["analyte"]): r["value_ppm"] for r in convert if r["value_ppm"] is not None
    }
    assert found == want


def test_every_unused_value_is_shaded_and_no_other(ember_source: Source):
    spots = spot_use(ember_source.tables)
    sheet = spots_sheet(ember_source, spots)
    names = [heading.name for heading in sheet.headings]
    screen = ember_source.table("screen")
    want = {
        (int(place), names.index(f"{analyte} value_ppm"))
        for place, analyte, use in zip(
            spots.of_row, screen.column("analyte").to_pylist(), screen.column("use").to_pylist(), strict=True
        )
        if not use
    }
    assert sheet.shaded == want


def test_left_out_accounts_for_every_value_left_out(ember_source: Source, ember_files: dict[str, bytes]):
    why = ember_source.table("screen").column("why").to_pylist()
    left_out = sum(reason not in ("", "reference-material", "not-measured") for reason in why)
    rows = [row for row in records(ember_files["left_out.csv"]) if row["why"] != "set-aside"]
    assert sum(int(row["n_values"]) for row in rows) == left_out
    assert left_out > 0
    ruled = [row for row in rows if "ruling" in row["why"].split(", ")]
    assert [(row["spot"], row["decided_by"], row["date"]) for row in ruled] == [
        ("EM05-cpx-L3", "K.V.", "2026-03-12")
    ]
    assert all(row["detail"] for row in rows)


def test_same_tables_give_the_same_bytes(ember_source: Source, ember_files: dict[str, bytes]):
    assert report_files(ember_source) == ember_files


def test_hostile_labels_stay_text_in_csv_and_workbook(hostile: Session):
    files = report_files(read_source(hostile))
    for name in ("partition_coefficients.csv", "left_out.csv"):
        for line in csv.reader(io.StringIO(files[name].decode(), newline="")):
            for cell in line:
                assert not cell.startswith(("=", "+", "@", "\t", "\r"))
                assert not cell.startswith("-") or float(cell) <= 0
    assert SCRIPT in files["partition_coefficients.csv"].decode()
    book = openpyxl.load_workbook(io.BytesIO(files["partition_coefficients.xlsx"]))
    cells = [cell for sheet in book for row in sheet.iter_rows() for cell in row if cell.value is not None]
    assert not [cell.coordinate for cell in cells if cell.data_type == "f"]
    assert set(FORMULAS) | {SCRIPT, "=probe"} <= {cell.value for cell in cells}


@given(st.text())
def test_defused_text_never_starts_a_formula_and_keeps_the_label(text: str):
    safe = defused(text)
    assert safe in (text, f"'{text}")
    assert not safe.lstrip(" \n").startswith(("=", "+", "-", "@", "\t", "\r"))


def test_numbers_are_not_defused():
    sheet = Sheet("x", (Heading("a"), Heading("b")), ([-1.5, 2, True], ["-1.5", "x", None]))
    assert csv_bytes(sheet).decode().splitlines() == ["a,b", "-1.5,'-1.5", "2,x", "true,"]


def test_infinite_limit_is_written_as_text_in_the_workbook():
    data = workbook_bytes([Sheet("x", (Heading("a"),), ([math.inf, 1.0],))], "t")
    rows = list(openpyxl.load_workbook(io.BytesIO(data))["x"].iter_rows(values_only=True))
    assert rows == [("a",), ("inf",), (1.0,)]


# --- LaTeX ---


def test_latex_holds_every_written_value(ember_source: Source):
    document = partition_document(ember_source)
    body = [line for line in document.splitlines() if line.endswith(r"\\")]
    sheet = partition_sheet(ember_source)
    written = sheet.columns[[heading.name for heading in sheet.headings].index("written")]
    cells = [cell.strip() for line in body for cell in line.removesuffix(r"\\").split("&")]
    for text in written:
        assert escaped(text).replace("{-}", "$-$") in cells


def test_latex_text_cannot_act():
    assert escaped(r"\input{x} 50% a_b $1$ ~^#&") == (
        r"\textbackslash{}input\{x\} 50\% a\_b \$1\$ \textasciitilde{}\textasciicircum{}\#\&"
    )
    assert escaped("Mössbauer µ 中\x07") == r"Mössbauer $\mu$ \texttt{U+4E2D}"


@pytest.mark.parametrize("which", ["ember", "hostile"])
def test_latex_compiles(which: str, request: pytest.FixtureRequest, tmp_path):
    engine = shutil.which("pdflatex")
    if engine is None:
        pytest.skip("pdflatex (Debian: texlive-latex-base, texlive-latex-recommended) is not installed")
    files = report_files(read_source(request.getfixturevalue(which)))
    for name in ("partition_coefficients.tex", "methods.tex", "references.bib"):
        (tmp_path / name).write_bytes(files[name])
    for stem in ("partition_coefficients", "methods"):
        command = [engine, "-interaction=nonstopmode", "-halt-on-error", "-no-shell-escape", f"{stem}.tex"]
        result = subprocess.run(
            command, cwd=tmp_path, capture_output=True, text=True, check=False, errors="replace"
        )
        assert result.returncode == 0, result.stdout[-2000:]
        assert (tmp_path / f"{stem}.pdf").stat().st_size > 5000
    if shutil.which("bibtex"):
        result = subprocess.run(
            ["bibtex", "methods"], cwd=tmp_path, capture_output=True, text=True, check=False
        )
        assert result.returncode == 0, result.stdout
        assert "Warning" not in result.stdout.replace("Warning--empty number", "")


def test_mean_of_written_intervals_is_inside(ember_source: Source):
    table = ember_source.table("classify")
    D, low, high = (np.array(table.column(name).to_pylist(), dtype=float) for name in ("D", "D_lo", "D_hi"))
    known = np.isfinite(D)
    assert known.sum() > 100
    assert np.all((low[known] <= D[known]) & (D[known] <= high[known]))


def test_values_of_a_reference_spot_ruled_out_stand_in_the_list_and_in_the_words(tmp_path: Path):
    config = short_session(tmp_path)
    with (config.parent / "ember" / "rulings.csv").open("a", encoding="utf-8") as file:
        file.write("TWG-1-L01,*,drop,A.N.,2026-03-14,bubble\nTWG-1-L01,Ni60,keep,M.T.,2026-03-15,not here\n")
        file.write("TWG-1-L02,Ni60,drop,M.T.,2026-03-15,spike\nTWG-1-L03,*,drop,M.T.,2026-03-15,edge\n")
    session = load(config)
    runner.run(session)
    source = read_source(session)
    files = dict(report_files(source))
    rows = {row["spot"]: row for row in records(files["left_out.csv"]) if row["spot"].startswith("TWG-1")}
    assert {
        spot: (row["why"], row["decided_by"], row["date"], row["detail"]) for spot, row in rows.items()
    } == {
        "TWG-1-L01": ("ruling", "A.N.", "2026-03-14", "bubble (A.N., 2026-03-14)"),
        "TWG-1-L02": ("ruling", "M.T.", "2026-03-15", "spike (M.T., 2026-03-15)"),
        "TWG-1-L03": ("ruling", "M.T.", "2026-03-15", "edge (M.T., 2026-03-15)"),
    }
    assert (rows["TWG-1-L02"]["analyte"], rows["TWG-1-L02"]["n_values"]) == ("Ni60", "1")
    assert rows["TWG-1-L03"]["analyte"] == "*"
    n_all = int(rows["TWG-1-L03"]["n_values"])
    assert int(rows["TWG-1-L01"]["n_values"]) == n_all - 1
    spots = spot_use(source.tables)
    text = methods(source, spots).paragraph()
    assert (
        "Analyses of reference materials left out by hand, with a recorded reason: "
        f"M.T. 2 spots ({n_all + 1} values), A.N. 1 spot ({n_all - 1} values)."
    ) in text
    assert {reason.name for reason in by_person(source, spots)} == {"K.V."}
    assert {reason.name: reason.n_spots for reason in by_reason(spots)}["ruling"] == 1
    assert "M.T., reference materials" in files["report.html"].decode()
