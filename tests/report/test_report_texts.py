"""The methods paragraph, what needs attention, the screen after a run, the pictures, and when a report is renewed."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ElementTree
from collections import Counter
from dataclasses import replace

import pyarrow as pa
import pyarrow.compute as pc
import pytest
from rich.console import Console
from typer.testing import CliRunner

from tieline import runner, terminal_summary
from tieline.cli import app
from tieline.columns import ASSESS, CALIBRATE, CLASSIFY
from tieline.configuration import Session, load
from tieline.errors import InputError
from tieline.report.attention import attention
from tieline.report.currency import FILES
from tieline.report.figures import figure_files
from tieline.report.methods import methods
from tieline.report.references import REFERENCES
from tieline.report.sheets import settings_rows
from tieline.report.source import Source, read_source
from tieline.report.spots import spot_use
from tieline.report.write import refresh_report, write_report
from tieline.tables import build
from tieline.terminal_results import brief_lines


def changed(table: pa.Table, spec, **columns) -> pa.Table:
    """The table with some columns replaced, one value for all rows or a function of the row."""
    rows = table.to_pylist()
    data = {name: [row[name] for row in rows] for name in spec.names()}
    for name, value in columns.items():
        data[name] = [value(row) if callable(value) else value for row in rows]
    return build(spec, data)


# --- methods ---


def test_numbers_of_the_paragraph_are_counted(ember_source: Source):
    text = methods(ember_source, spot_use(ember_source.tables)).paragraph()
    classify = ember_source.table("classify").to_pylist()
    kinds = Counter(row["kind"] for row in classify)
    assert f"{len(classify)} D were formed, of which {kinds['upper-limit']} are upper limits" in text
    assert "95 % confidence intervals" in text
    assert "EPMA: 217 spots" in text
    assert "K.V. 1 spot (33 values)" in text
    assert "Paule and Mandel 1982" in text
    assert "[[" not in text


def test_paragraph_follows_the_settings(ember_source: Source):
    settings = ember_source.settings
    screen = settings.screen.model_copy(
        update={"total": settings.screen.total.model_copy(update={"enabled": False})}
    )
    classify = settings.classify.model_copy(update={"highly_incompatible_below": 0.1})
    other = settings.model_copy(update={"screen": screen, "classify": classify})
    source = Source(ember_source.tables, ember_source.records, other, ember_source.rulings)
    text = methods(source, spot_use(source.tables)).paragraph()
    assert "oxide totals" not in text
    assert "D < 0.1 (a convention)" in text


def test_every_work_cited_is_in_the_bibliography(ember_source: Source, ember_files: dict[str, bytes]):
    cited = {
        key
        for keys in re.findall(r"\\cite\{([^}]*)\}", ember_files["methods.tex"].decode())
        for key in keys.split(",")
    }
    held = set(re.findall(r"^@\w+\{(\w+),", ember_files["references.bib"].decode(), re.MULTILINE))
    assert cited == held
    assert cited <= set(REFERENCES)
    assert len(cited) > 5


def test_settings_that_differ_are_told_with_their_default(ember_source: Source):
    rows = {key: (value, default) for key, value, default, differs in settings_rows(ember_source) if differs}
    assert rows["screen.zoning.represent"] == ("rim", "all")
    assert "partition.confidence" not in rows  # given in the file, but the same as the default


# --- attention ---


def test_failed_reference_material_comes_first(ember_source: Source):
    bad = changed(
        ember_source.table("calibrate"), CALIBRATE,
        passed=lambda row: row["element"] != "Ni", bias=lambda row: 1.25 if row["element"] == "Ni" else row["bias"],
    )  # fmt: skip
    found = attention({**ember_source.tables, "calibrate": bad})
    text = next(one.text for one in found if one.kind == "reference")
    assert "Ni" in text
    assert "25 % off" in text
    assert not [one for one in attention(ember_source.tables) if one.kind == "reference"]


def test_few_spots_and_differing_evidence_are_told(ember_source: Source):
    few = changed(ember_source.table("classify"), CLASSIFY, n_alpha=2)
    check = {name: [None] for name in ASSESS.names()}
    check |= {
        "check": ["exchange"],
        "subject": ["Fe-Mg"],
        "verdict": ["differs"],
        "detail": [""],
        "experiment": ["EM-01"],
    }
    kinds = {
        one.kind: one
        for one in attention({**ember_source.tables, "classify": few, "assess": build(ASSESS, check)})
    }
    assert kinds["few"].n_affected == few.num_rows
    assert "exchange EM-01" in kinds["evidence"].text


def test_order_is_by_weight(ember_source: Source):
    weights = [one.weight for one in attention(ember_source.tables)]
    assert weights == sorted(weights, reverse=True)
    assert len(weights) >= 3


# --- the screen after a run ---


def screen_of(session: Session, source: Source, width: int, **options) -> str:
    console = Console(width=width, record=True, file=open_nothing(), highlight=False, **options)
    terminal_summary.show_summary(console, session, source.tables, FILES)
    return console.export_text()


def open_nothing():
    import io

    return io.StringIO()


def test_run_fits_one_screen_and_names_every_element_of_every_pair(ember: Session, ember_source: Source):
    text = screen_of(ember, ember_source, 100)
    assert len(text.splitlines()) <= 50
    for row in ember_source.table("classify").select(["alpha", "element"]).to_pylist():
        block = text.split(f"D {row['alpha']}/glass")[1].split("\nD ")[0]
        assert re.search(rf"\b{row['element']} [0-9<>–]", block), row
    assert "Left out" in text
    assert "report.html" in text
    things = re.sub(r"\n\d+ more things?", "\n", text)
    assert things.count("\n1 ") == things.count("\n3 ") == 1


@pytest.mark.parametrize("width", [40, 80])
def test_narrow_windows_hold_every_line(ember_source: Source, width: int):
    lines = [line.plain for line in brief_lines(ember_source.table("classify"), width)]
    assert max(len(line) for line in lines if line.startswith(" ")) <= width


def test_no_colour_when_told_so(ember: Session, ember_source: Source, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setenv("NO_COLOR", "1")
    stream = open_nothing()
    console = Console(width=80, file=stream, force_terminal=True)
    terminal_summary.show_summary(console, ember, ember_source.tables, FILES)
    assert not re.search(r"\x1b\[[0-9;]*3[0-7]m", stream.getvalue())


def test_class_of_the_brief_table_is_that_of_the_rows(ember_source: Source):
    rows = ember_source.table("classify").to_pylist()
    lines = [line.plain for line in brief_lines(ember_source.table("classify"), 10_000)]
    start = lines.index(next(line for line in lines if line.startswith("D plagioclase")))
    classes = {}
    for row in rows:
        if row["alpha"] == "plagioclase":
            classes.setdefault(row["element"], set()).add(row["class"])
    compatible = {element for element, names in classes.items() if names == {"compatible"}}
    line = next(line for line in lines[start:] if line.startswith(" c "))
    assert set(re.findall(r"([A-Z][a-z]?) [0-9]", line)) == compatible
    assert compatible


def test_hostile_labels_cannot_drive_the_terminal(hostile: Session):
    assert "<script>" in screen_of(hostile, read_source(hostile), 80)


# --- pictures ---


def test_pictures_are_vector_files_of_journal_width(ember_source: Source):
    classify = ember_source.table("classify")
    one_pair = classify.filter(pc.equal(classify.column("alpha").cast("string"), "plagioclase"))
    some_points = ember_source.table("assess.trend_points").slice(0, 40)
    tables = {**ember_source.tables, "classify": one_pair, "assess.trend_points": some_points}
    files = figure_files(replace(ember_source, tables=tables))
    own = [
        name
        for name in sorted(files)
        if not name.startswith(("D_against", "bulk_D", "exchange", "mass_balance"))
    ]
    assert own == [
        f"{stem}_plagioclase_glass.{ending}"
        for stem in ("D_elements", "D_radius", "budget")
        for ending in ("pdf", "svg")
    ]
    for name, data in files.items():
        if name.endswith(".svg"):
            width = float(ElementTree.fromstring(data).get("width", "").removesuffix("pt")) / 72 * 25.4
            assert min(abs(width - 90), abs(width - 190)) < 0.5
        else:
            assert data.startswith(b"%PDF")


def test_pictures_of_hostile_labels_are_the_same_every_time(hostile: Session):
    first = figure_files(read_source(hostile))
    assert all(re.fullmatch(r"[A-Za-z0-9_.-]+", name) for name in first)
    assert first == figure_files(read_source(hostile))


# --- when a report is written ---


def test_report_is_refused_for_stale_results(hostile: Session):
    session = load(hostile.path, overrides=["partition.confidence=0.9"])
    with pytest.raises(InputError, match=r"partition is stale.*tieline run"):
        write_report(session)


def test_report_is_renewed_only_when_something_changed(ember: Session, tmp_path):
    session = load(ember.path, overrides=['session="other"'], out=tmp_path)
    runner.run(session)
    refresh_report(session)
    paths = [session.run_folder / name for name in FILES]
    first = [path.stat().st_mtime_ns for path in paths]
    refresh_report(session)
    assert [path.stat().st_mtime_ns for path in paths] == first
    renamed = load(ember.path, overrides=['session="other"', 'report.title="A <b> title"'], out=tmp_path)
    refresh_report(renamed)
    assert all(path.stat().st_mtime_ns > before for path, before in zip(paths, first, strict=True))
    assert "A &lt;b&gt; title" in (session.run_folder / "report.html").read_text(encoding="utf-8")


def test_command_writes_every_file_and_the_pictures(hostile: Session, tmp_path):
    result = CliRunner().invoke(app, ["report", str(hostile.path), "--figures", str(tmp_path / "pictures")])
    assert result.exit_code == 0, result.output
    assert {path.name for path in hostile.run_folder.iterdir()} >= set(FILES)
    assert len(list((tmp_path / "pictures").glob("*.svg"))) == 3
