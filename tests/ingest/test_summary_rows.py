"""Averages pasted between the spots, with the word in whichever label column the table puts it."""

import pytest

from sessions import result, small_session
from tieline import runner
from tieline.errors import InputError
from tieline.starting.write import write_first_configuration

HEADER = ("Spot", "Charge", "Mineral", "MgO", "NiO")
SPOTS = [(f"{phase}{n}", "A1", phase, 40 + n, 0.3) for phase in ("ol", "gl") for n in (1, 2, 3)]
BODY = """
[[ingest.tables]]
path = "probe.csv"
unit = "wt%"
columns = { spot = "Spot", experiment = "Charge", phase = "Mineral" }
"""


@pytest.mark.parametrize(
    "row", [("Average", "", "", 42, 0.3), ("", "Average", "", 42, 0.3), ("", "A1", "Mean", 42, 0.3)]
)
def test_a_summary_row_is_set_aside(tmp_path, row):
    session = small_session(tmp_path, {"probe.csv": (HEADER, [*SPOTS[:3], row, *SPOTS[3:]])}, BODY)
    runner.run(session, until="ingest")
    assert set(result(session, "ingest")["spot"]) == {spot for spot, *_ in SPOTS}
    aside = result(session, "ingest.set_aside")
    assert aside["row"].tolist() == [5]
    assert aside["reason"].tolist() == ["summary row between the spots"]


@pytest.mark.parametrize("line", ["SD,,,0.2", '"1 s.d.",,,0.2', "averages,,,41,0.3,,,"])
def test_a_summary_row_of_another_length_is_set_aside_and_stops_nothing(tmp_path, line):
    session = small_session(tmp_path, {"probe.csv": (HEADER, SPOTS)}, BODY)
    path = tmp_path / "probe.csv"
    path.write_text(path.read_text(encoding="utf-8") + line + "\n", encoding="utf-8")
    runner.run(session, until="ingest")
    assert len(set(result(session, "ingest")["spot"])) == len(SPOTS)
    (aside,) = result(session, "ingest.set_aside").to_dict("records")
    assert (aside["row"], aside["raw"], aside["reason"]) == (8, line, "summary row between the spots")


def test_a_spot_of_another_length_still_stops(tmp_path):
    session = small_session(tmp_path, {"probe.csv": (HEADER, SPOTS)}, BODY)
    path = tmp_path / "probe.csv"
    path.write_text(path.read_text(encoding="utf-8") + "sd-7,A1,ol,0.2\n", encoding="utf-8")
    with pytest.raises(InputError, match="the row has 4 cells, the header 5"):
        runner.run(session, until="ingest")


def test_a_named_spot_on_a_phase_called_like_a_summary_stays(tmp_path):
    rows = [*SPOTS, ("x1", "A1", "mean", 42, 0.3)]
    session = small_session(
        tmp_path, {"probe.csv": (HEADER, rows)}, BODY + '\n[ingest.phases]\nmean = ["mean"]\n'
    )
    runner.run(session, until="ingest")
    assert "x1" in set(result(session, "ingest")["spot"])


def test_start_asks_nothing_about_them(tmp_path):
    rows = [*SPOTS, ("", "A1", "Average", 42, 0.3)]
    small_session(tmp_path, {"probe.csv": (HEADER, rows)}, BODY)
    _, questions = write_first_configuration([tmp_path / "probe.csv"], tmp_path / "made.toml")
    assert not [question for question in questions if "Average" in question]
