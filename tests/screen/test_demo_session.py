"""The demo session against what is true of each of its spots: every flaw found or explained, clean spots left alone."""

import csv
from functools import cache
from pathlib import Path

import pyarrow.parquet as pq
import pytest

from tieline.configuration import load
from tieline.runner import run
from tieline.screen import counts_by_test

CONFIGS = Path(__file__).parents[2] / "configs"
CODES = {
    "overlap": {"glass-overlap"},
    "crystal-in-glass": {"crystal-overlap"},
    "inclusion": {"glass-overlap", "ruling"},
    "bad-total": {"total"},
    "low-total": {"total", "ruling"},
    "mislabelled": {"identity", "cations"},
    "zoned": {"zoned"},
}


@cache
def truth():
    with (CONFIGS / "ember" / "truth" / "spots.csv").open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


@pytest.fixture(scope="module")
def tables(tmp_path_factory):
    session = load(CONFIGS / "ember.toml", out=tmp_path_factory.mktemp("runs"))
    run(session, until="screen")
    names = ("screen", "screen.findings", "screen.groups")
    return {name: pq.read_table(session.run_folder / f"{name}.parquet") for name in names}


@pytest.fixture(scope="module")
def codes(tables):
    found: dict[str, set[str]] = {}
    for row in tables["screen.findings"].to_pylist():
        if row["analyte"] is None:
            found.setdefault(row["spot"], set()).add(row["code"])
    return found


@pytest.fixture(scope="module")
def left_out(tables):
    table = tables["screen"]
    rows = zip(*(table.column(name).to_pylist() for name in ("spot", "use", "material")), strict=True)
    return {spot for spot, use, material in rows if material is None and not use}


def visible(tables, spot):
    """The smallest overlap the group of a spot of the truth table could have shown."""
    technique = "laser" if spot["table"] == "laser.csv" else "EPMA"
    (row,) = [
        row
        for row in tables["screen.groups"].to_pylist()
        if row["test"] == "glass-overlap"
        and (row["experiment"], row["phase"], row["technique"])
        == (spot["experiment"], spot["labelled"], technique)
    ]
    return row["statistic"]


def test_no_clean_spot_is_left_out(left_out):
    assert not {spot["spot"] for spot in truth() if spot["condition"] == "clean"} & left_out


@pytest.mark.parametrize("condition", sorted(set(CODES) - {"overlap"}))
def test_every_flaw_is_found_by_the_test_for_it(condition, codes):
    flawed = [spot["spot"] for spot in truth() if spot["condition"] == condition]
    assert flawed
    assert [spot for spot in flawed if not codes.get(spot, set()) & CODES[condition]] == []


def test_every_overlap_is_found_or_smaller_than_what_its_group_could_show(tables, codes):
    overlapped = [spot for spot in truth() if spot["condition"] == "overlap"]
    missed = [spot for spot in overlapped if "glass-overlap" not in codes.get(spot["spot"], set())]
    assert len(overlapped) - len(missed) >= 30
    for spot in missed:
        assert float(spot["overlap_fraction"]) < visible(tables, spot), spot


def test_laser_overlaps_are_all_found(codes):
    for spot in truth():
        if spot["condition"] == "overlap" and spot["table"] == "laser.csv":
            assert "glass-overlap" in codes.get(spot["spot"], set()), spot


def test_only_the_rim_of_zoned_crystals_is_used(left_out):
    zoned = {spot["spot"] for spot in truth() if spot["condition"] == "zoned"}
    assert zoned <= left_out


def test_a_spot_a_person_keeps_is_used_and_one_a_person_drops_is_not(left_out):
    assert "EM09-cpx-4" not in left_out
    assert "EM05-cpx-L3" in left_out


def test_counts_say_which_test_did_the_work(tables, codes):
    counts = {count.code: count for count in counts_by_test(tables["screen"], tables["screen.findings"])}
    for code, count in counts.items():
        spots = {spot for spot, found in codes.items() if code in found}
        assert count.caught >= len(spots)
        assert count.only_caught <= count.caught
    assert counts["total"].only_caught == 2
    assert counts["identity"].only_caught == 0
