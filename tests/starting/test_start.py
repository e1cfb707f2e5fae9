"""`tieline start`: what it sees in tables, what it asks, and that answering reproduces the demo's D."""

from __future__ import annotations

import re
import shutil
import tomllib
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from sessions import ROOT, demo_copy, result
from tieline import runner
from tieline.configuration import load, read
from tieline.errors import InputError
from tieline.reading.input_file import InputFile
from tieline.settings import SessionSettings
from tieline.starting import first_configuration
from tieline.starting.combined_labels import label_pattern
from tieline.starting.write import write_first_configuration
from tieline.terminal import show_start

# The demo's own answers to what no table tells.
ANSWERS = """
[[convert.internal_standard]]
technique = "laser"
element = "SiO2"
assumed = { olivine = 41.0, clinopyroxene = 53.0, plagioclase = 51.0, glass = 51.5 }

[calibrate]
relative_sd = { EPMA = 0.01, laser = 0.03 }

[partition]
prefer = ["laser", "EPMA"]
"""


def table(text: str, path: str = "t.csv") -> InputFile:
    return InputFile.from_bytes(path, text.encode())


def without_questions(text: str) -> str:
    return "".join(line for line in text.splitlines(keepends=True) if not line.startswith("# decide:"))


def questions(text: str) -> list[str]:
    return [line for line in text.splitlines() if line.startswith("# decide:")]


def test_answering_the_questions_reproduces_the_demo(tmp_path: Path):
    folder = tmp_path / "own"
    folder.mkdir()
    for name in ("probe.csv", "laser.csv", "accepted.csv"):
        shutil.copyfile(ROOT / "configs" / "ember" / name, folder / name)
    path, asked = write_first_configuration([folder / "probe.csv", folder / "laser.csv"], None)
    assert asked
    text = path.read_text(encoding="utf-8")
    with pytest.raises(InputError, match="not decided"):
        load(path)
    answered = without_questions(text).replace("names = { TWG-1", 'path = "accepted.csv"\nnames = { TWG-1')
    path.write_text(answered + ANSWERS, encoding="utf-8")
    session = load(path)
    runner.run(session)

    demo = demo_copy(tmp_path / "demo")
    original = demo.read_text(encoding="utf-8")
    # The demo's rulings and screening choices stand in no table; compare without them.
    plain = re.sub(r"\[screen\].*?(?=# --- pair)", "", original, flags=re.DOTALL)
    demo.write_text(re.sub(r"\[pair\].*?(?=\[partition\])", "", plain, flags=re.DOTALL), encoding="utf-8")
    reference = load(demo)
    runner.run(reference)
    keys = ["experiment", "alpha", "beta", "element"]
    ours, theirs = (
        result(one, "classify").sort_values(keys).reset_index(drop=True) for one in (session, reference)
    )
    assert len(ours) > 800
    pd.testing.assert_frame_equal(ours, theirs)


def test_every_question_is_refused_with_its_row(tmp_path: Path):
    shutil.copyfile(ROOT / "configs" / "ember" / "laser.csv", tmp_path / "laser.csv")
    path, asked = write_first_configuration([tmp_path / "laser.csv"], None)
    _, problems = read(path)
    assert len(problems) == len(asked)
    lines = path.read_text(encoding="utf-8").splitlines()
    assert all(lines[problem.row - 1].startswith("# decide:") for problem in problems)


def test_what_a_majors_table_shows_is_not_asked():
    text = first_configuration(
        [
            table(
                "Point,Run,Mineral,SiO2,Al2O3,MgO,CaO,FeO,Total\na,X,Ol,40,0,49,0.3,10,99.3\nb,X,liq,50,15,10,12,9,96\n"
            )
        ],
        "s",
    )
    settings = tomllib.loads(text)
    first = settings["ingest"]["tables"][0]
    assert first["unit"] == "wt%"
    assert first["columns"] == {"spot": "Point", "experiment": "Run", "phase": "Mineral", "ignore": ["Total"]}
    assert settings["ingest"]["phases"] == {"glass": ["liq"], "olivine": ["Ol"]}
    assert not [line for line in questions(text) if "unit" in line]
    SessionSettings.model_validate(settings)


def test_units_in_headers_are_not_asked_and_unknown_ones_are():
    known = first_configuration([table("Point,Run,Phase,Ni (ppm),Co (ppm)\na,X,ol,2,3\n")], "s")
    assert "unit =" not in known
    unknown = first_configuration([table("Point,Run,Phase,Ni,Co\na,X,ol,2,3\n")], "s")
    assert any("unit" in line for line in questions(unknown))


def test_uncertainties_that_say_what_they_are_are_not_asked():
    text = first_configuration([table("Point,Run,Phase,MgO wt%,MgO 2SE%\na,X,ol,40,2\n")], "s")
    sigma = tomllib.loads(text)["ingest"]["tables"][0]["sigma"]
    assert sigma["pattern"] == "{analyte} 2SE%"
    assert sigma["level"] == 2
    assert sigma["relative"] is True
    assert not any("absolute" in line or "standard uncertainties" in line for line in questions(text))


@pytest.mark.parametrize("header", ["45Sc (ppm)", "45Sc_ppm", "45Sc ppm", "45Sc [ppm]"])
def test_the_pattern_of_uncertainties_leaves_the_unit_of_the_values_out(header: str):
    other = header.replace("45Sc", "51V")
    text = first_configuration(
        [table(f"Point,Run,Phase,{header},45Sc 2SE,{other},51V 2SE\na,X,ol,2,1,3,1\n")], "s"
    )
    assert tomllib.loads(text)["ingest"]["tables"][0]["sigma"]["pattern"] == "{analyte} 2SE"


def test_a_table_without_uncertainties_is_asked_about():
    text = first_configuration([table("Point,Run,Phase,Ni ppm\na,X,ol,2\n")], "s")
    assert any("no uncertainty columns" in line for line in questions(text))


def test_unknown_phases_are_asked_with_the_nearest_name():
    text = first_configuration([table("Point,Run,Phase,Ni ppm\na,X,olivne,2\nb,X,gl,3\n")], "s")
    assert any("olivne" in line and "olivine" in line for line in questions(text))


MAJORS = "SiO2,MgO,FeO,CaO,Al2O3"


def first_table(text: str) -> dict[str, Any]:
    return tomllib.loads(first_configuration([table(text)], "s"))["ingest"]["tables"][0]


def test_of_several_tables_every_question_names_its_own():
    spots = f"Label,{MAJORS},Ni\nA1_ol_1,40,49,10,0.2,0,0.3\nA1_gl_2,50,8,9,12,15,0.02\n"
    one = questions(first_configuration([table(spots, "probe.csv")], "s"))
    assert one
    assert not any("probe.csv" in line for line in one)
    two = questions(first_configuration([table(spots, "probe.csv"), table(spots, "laser.csv")], "s"))
    assert [line for line in two if "split rightly" in line] == [
        f"# decide: {name}: is the label (such as A1_ol_1) split rightly: experiment, phase, grain?"
        for name in ("probe.csv", "laser.csv")
    ]
    assert [line.count(".csv: ") for line in two] == [1] * 2 * len(one)


def test_a_zone_is_known_by_what_stands_in_its_column():
    rows = ["a,X,ol,Rim,40,49,10,0.2,0", "b,X,ol,core,40,49,10,0.2,0", "c,X,gl,,50,8,9,12,15"]
    text = "\n".join([f"Point,Run,Phase,Where about,{MAJORS}", *rows])
    assert first_table(text)["columns"]["zone"] == "Where about"
    assert "Where about" not in str(questions(first_configuration([table(text)], "s")))


def test_columns_that_are_not_known_are_asked_about_with_what_they_hold():
    rows = ["a,X,ol,Rand,40,49,10,0.2,0,3", "b,X,ol,Kern,40,49,10,0.2,0,7", "c,X,gl,,50,8,9,12,15,"]
    text = first_configuration([table("\n".join([f"Point,Run,Phase,Ort,{MAJORS},Gap", *rows]))], "s")
    (asked,) = [line for line in questions(text) if "not read" in line]
    assert "Ort (Rand, Kern); Gap (3, 7)" in asked
    assert "zone" in asked
    assert tomllib.loads(text)["ingest"]["tables"][0]["columns"]["ignore"] == ["Ort", "Gap"]


def test_the_first_column_names_the_spots_where_no_two_are_alike():
    rows = ["1,X,ol,40,49,10,0.2,0", "2,X,ol,40,49,10,0.2,0", "3,X,gl,50,8,9,12,15"]
    assert first_table("\n".join([f"Punkt,Run,Phase,{MAJORS}", *rows]))["columns"]["spot"] == "Punkt"
    again = "\n".join([f"Punkt,Run,Phase,{MAJORS}", *rows, rows[0]])
    assert "spot" not in first_table(again)["columns"]


def test_one_question_is_told_as_one(capsys):
    show_start(Path("session.toml"), ["which unit?"])
    show_start(Path("session.toml"), ["which unit?", "which session?"])
    shown = capsys.readouterr().out
    assert "1 question is left; it is a line `# decide:` there:" in shown
    assert "2 questions are left; each is a line" in shown


@pytest.mark.parametrize(
    ("headers", "technique", "asked"),
    [
        ("SiO2 [wt%],MgO [wt%],FeO [wt%],CaO [wt%]", "EPMA", False),
        ("Ni (ppm),Li (ppb),Zr (ppm),Co (ppm)", "laser", True),
        ("Ni,Li,Zr,Co", "EPMA", True),
        ("Ni60 ppm,Li7 ppm,Zr90 ppm,Co59 ppm", "laser", False),
    ],
)
def test_the_technique_is_asked_unless_the_columns_tell(headers: str, technique: str, asked: bool):
    text = first_configuration([table(f"Point,Run,Phase,{headers}\na,X,ol,40,49,10,0.2\n")], "s")
    assert tomllib.loads(text)["ingest"]["tables"][0]["technique"] == technique
    assert any("which technique" in line for line in questions(text)) is asked


def test_only_spots_are_counted():
    header = f"Point,Run,Mineral,{MAJORS}"
    rows = [
        "a,X,Ol,40,49,10,0.2,0", "b,X,Ol,40,49,10,0.2,0", "Average,,olv,40,49,10,0.2,0", ",X,SD,1,1,1,1,1",
        ",,,,,,,", header, "mean,X,gl,50,8,9,12,15", "c,X,gl,50,8,9,12,15",
    ]  # fmt: skip
    text = first_configuration([table("\n".join([header, *rows]))], "s")
    assert "# 3 spots, 5 analytes" in text
    assert "; rows not counted: 3 of averages and the like and 1 of repeated headers" in text
    assert tomllib.loads(text)["ingest"]["phases"] == {"glass": ["gl"], "olivine": ["Ol"]}


def test_a_zone_in_a_label_is_found_and_asked_about():
    labels = ["X7-ol3-a-rim-2", "X7-cpx1-b-Core-1", "X8-gl-4"]
    pattern = label_pattern(labels)
    assert pattern is not None
    zones = [re.fullmatch(pattern, label)["zone"] for label in labels]
    assert zones == ["rim", "Core", None]
    text = "\n".join([f"Label,{MAJORS}", *(f"{label},40,49,10,0.2,0" for label in labels)])
    assert any("grain, zone?" in line for line in questions(first_configuration([table(text)], "s")))


@pytest.mark.parametrize(
    ("labels", "experiment", "phase"),
    [
        (["TX07-ol3-rim-2", "TX07-cpx1-core-1", "TX08-gl-4"], "TX07", "ol"),
        (["A_1_glass_3", "A_1_ol2_1", "A_2_ol_5"], "A_1", "glass"),
        (["R12.opx4", "R12.gl1", "R13.opx2"], "R12", "opx"),
    ],
)
def test_combined_labels(labels: list[str], experiment: str, phase: str):
    pattern = label_pattern(labels)
    assert pattern is not None
    for label in labels:
        assert re.fullmatch(pattern, label)["spot"] == label
    match = re.fullmatch(pattern, labels[0])
    assert match["experiment"] == experiment
    assert match["phase"] == phase


def test_labels_without_an_order_are_not_guessed():
    assert label_pattern(["12", "13", "spot seven"]) is None


def test_nothing_is_overwritten_and_missing_tables_are_named(tmp_path: Path):
    with pytest.raises(InputError, match=r"none\.csv"):
        write_first_configuration([tmp_path / "none.csv"], None)
    (tmp_path / "session.toml").write_text("x = 1")
    (tmp_path / "t.csv").write_text("Point,Run,Phase,Ni ppm\na,X,ol,2\n")
    with pytest.raises(InputError, match="exists already"):
        write_first_configuration([tmp_path / "t.csv"], None)
    assert (tmp_path / "session.toml").read_text() == "x = 1"


def test_a_hostile_header_stays_inside_its_string():
    text = first_configuration([table('Point,Run,Phase,Ni ppm,"x""]\nevil = 1"\na,X,ol,2,3\n')], "s")
    assert "evil" not in tomllib.loads(text)
