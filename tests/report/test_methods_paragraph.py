"""The methods paragraph says what was done with these data, and nothing else."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from sessions import small_session
from tieline import runner
from tieline.columns import SCREEN_GROUPS
from tieline.report.methods import methods
from tieline.report.source import Source, read_source
from tieline.report.spots import spot_use
from tieline.tables import build

HEADER = ["Point", "Run", "Phase", "SiO2", "Al2O3", "FeO", "MgO", "CaO", "NiO"]
BODY = """
ingest.on_unreadable = "set-aside"

[[ingest.tables]]
path = "spots.csv"
technique = "EPMA"
batch = "day 1"
unit = "wt%"
columns = { spot = "Point", experiment = "Run", phase = "Phase" }
"""


def rows(n_spots: int) -> list[list[object]]:
    """Spots without uncertainties and without places in the crystal, averages pasted below, one cell unreadable."""
    found: list[list[object]] = []
    for number in range(n_spots):
        olivine = [40.5 + 0.1 * number, 0.04, 10.1, 49.0 - 0.1 * number, 0.2, 0.30]
        glass = [50.2 + 0.1 * number, 18.0, 9.0, 8.0 - 0.02 * number, 12.0, 0.02]
        found += [[f"ol-{number}", "R1", "olivine", *olivine], [f"gl-{number}", "R1", "glass", *glass]]
    found[0][-1] = "dirt"
    return [*found, ["Average", "", "olivine", *olivine], ["SD", "", "", *glass]]


def paragraph(source: Source) -> str:
    return methods(source, spot_use(source.tables)).paragraph()


def paragraph_of(folder: Path, n_spots: int) -> str:
    session = small_session(folder, {"spots.csv": (HEADER, rows(n_spots))}, BODY)
    runner.run(session)
    return paragraph(read_source(session))


def test_only_what_was_done_is_said(tmp_path: Path):
    text = paragraph_of(tmp_path, 6)
    assert "2 rows of the tables were set aside on reading: summary row between the spots (2)." in text
    assert "1 cell of the tables was set aside on reading: not a number and not a known word (1)." in text
    assert "No uncertainties of single values were reported by EPMA." in text
    not_done = (
        "zoning",
        "admixed",
        "uncertainties above",
        "weighted deviates",
        "Paule",
        "as reported",
        "internal-s",
    )
    assert not any(words in text for words in not_done)
    for done in ("oxide totals", "cation sums", "nearer to another phase", "outliers in many analytes"):
        assert done in text
    assert "taken over spots (n from 5 to 6, median 6), as arithmetic means. The standard error" in text
    assert "is not known, and not carried elsewhere" in text


def test_tests_that_need_more_spots_are_not_claimed(tmp_path: Path):
    text = paragraph_of(tmp_path, 2)
    assert "oxide totals" in text
    assert not any(words in text for words in ("nearer to another phase", "outliers in many analytes"))


def test_zoning_is_told_with_what_it_was_judged_by_and_where(ember_source: Source):
    assert "zoning with distance from the rim (p < 0.01; in zoned crystals only rims" in paragraph(
        ember_source
    )
    groups = ember_source.table("screen.groups").to_pylist()
    kept = [row for row in groups if row["test"] != "zoned" or row["experiment"] == "EM-02"]
    of_zoning = len([row for row in kept if row["test"] == "zoned"])
    text = paragraph(with_groups(ember_source, kept))
    assert f"zoning with distance from the rim, in {of_zoning} of 44 groups of crystal spots (p" in text


def test_what_could_not_be_tested_is_not_told(ember_source: Source):
    groups = ember_source.table("screen.groups").to_pylist()
    untested = [row | {"detail": "not tested: no uncertainties"} for row in groups]
    text = paragraph(with_groups(ember_source, untested))
    assert not any(words in text for words in ("zoning", "oxide totals", "cation sums", "admixed"))
    assert "nearer to another phase" in text


def test_only_elements_with_an_accepted_value_were_checked(ember_source: Source):
    calibrate = ember_source.table("calibrate")
    checked = sum(passed is not None for passed in calibrate.column("passed").to_pylist())
    assert f"of {checked} pairs of batch and element, " in paragraph(ember_source)
    assert checked <= calibrate.num_rows


def with_groups(source: Source, groups: list[dict[str, Any]]) -> Source:
    columns = {name: [row[name] for row in groups] for name in groups[0]}
    return replace(source, tables={**source.tables, "screen.groups": build(SCREEN_GROUPS, columns)})
