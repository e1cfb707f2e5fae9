"""Averages pasted between the spots, with the word in whichever label column the table puts it."""

import pytest

from sessions import result, small_session
from tieline import runner
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
