"""Many sessions below one folder: found, reduced by worker processes, gathered; deaths of workers lose nothing."""

from __future__ import annotations

import json
import os
import signal
from collections.abc import Iterator
from pathlib import Path

import pandas as pd
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

from benchmarks.big_session import write_session
from sessions import result
from tieline import runner
from tieline.archive.command import Summary, reduce_archive
from tieline.archive.dataset import SESSIONS_FILE, kept_parts, left_over_parts
from tieline.archive.find import find_units
from tieline.archive.unit import CURRENT, FAILED, REDUCED, Outcome, reduce_unit
from tieline.cli import app
from tieline.configuration import load
from tieline.errors import InputError
from tieline.lock import SEAL_NAME
from tieline.plan import table_path
from tieline.stages import STAGES

distributed = pytest.importorskip("distributed")

SPOTS = 40  # one experiment
SESSIONS = [("north", "n1"), ("north", "n2"), ("south", "s1"), ("south", "s2")]
BROKEN = "south/broken/session.toml"


def write_archive(root: Path) -> Path:
    """Four sessions of two laboratories and one whose table has an unreadable cell."""
    for number, (laboratory, name) in enumerate([*SESSIONS, ("south", "broken")]):
        write_session(root / laboratory / name, SPOTS, name=name, seed=number)
    table = root / "south" / "broken" / "spots.csv"
    header, first, rest = table.read_text(encoding="utf-8").split("\n", 2)
    cells = first.split(",")
    cells[6] = "forty"
    table.write_text("\n".join([header, ",".join(cells), rest]), encoding="utf-8")
    return root


@pytest.fixture(scope="module")
def cluster() -> Iterator[distributed.LocalCluster]:
    """Two workers with a scheduler at an address on the loopback."""
    options = {"host": "127.0.0.1", "dashboard_address": "127.0.0.1:0", "silence_logs": 50}
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, processes=True, **options) as cluster:
        yield cluster


@pytest.fixture(scope="module")
def reduced(tmp_path_factory: pytest.TempPathFactory, cluster: distributed.LocalCluster) -> Summary:
    root = write_archive(tmp_path_factory.mktemp("archive"))
    return reduce_archive(root, scheduler=cluster.scheduler_address)


def states(summary: Summary) -> dict[str, str]:
    return {outcome.unit.session: outcome.state for outcome in summary.outcomes}


def parts(dataset: Path) -> dict[str, bytes]:
    return {path.relative_to(dataset).as_posix(): path.read_bytes() for path in dataset.glob("*/*/*.parquet")}


def assert_as_single_runs(root: Path, folder: Path) -> None:
    """Every stage file and the dataset's part of every session are those of a run on its own, byte by byte."""
    for laboratory, name in SESSIONS:
        own = load(root / laboratory / name / "session.toml")
        alone = load(own.path, out=folder)
        runner.run(alone)
        for table in (table for stage in STAGES for table in stage.outputs):
            paths = (table_path(session.run_folder, table) for session in (own, alone))
            first, second = (path.read_bytes() for path in paths)
            assert first == second, f"{name}: {table}"
        part = root / "archive" / f"lab={laboratory}" / f"session={name}" / "classify.parquet"
        assert part.read_bytes() == table_path(alone.run_folder, "classify").read_bytes()


def test_one_that_fails_is_told_and_stops_no_other(reduced: Summary):
    assert states(reduced) == {"n1": REDUCED, "n2": REDUCED, "s1": REDUCED, "s2": REDUCED, "broken": FAILED}
    (failure,) = reduced.failures
    assert failure.unit.name == BROKEN
    assert "forty" in failure.message
    assert 'spots.csv, row 2, column "SiO2 (wt%)"' in failure.message


def test_results_are_those_of_single_runs(reduced: Summary, tmp_path: Path):
    assert_as_single_runs(reduced.dataset.parent, tmp_path)


def test_the_dataset_is_read_as_one_table(reduced: Summary):
    frame = pd.read_parquet(reduced.dataset)
    assert sorted(set(zip(frame["lab"].astype(str), frame["session"].astype(str), strict=True))) == SESSIONS
    root = reduced.dataset.parent
    own = result(load(root / "south" / "s1" / "session.toml"), "classify")
    part = frame[frame["session"].astype(str) == "s1"]
    assert part["D"].tolist() == pytest.approx(own["D"].tolist(), nan_ok=True)


def test_the_table_of_sessions(reduced: Summary):
    table = pq.read_table(reduced.sessions).to_pandas().set_index("session")
    assert list(table.index) == ["n1", "n2", "broken", "s1", "s2"]
    own = result(load(reduced.dataset.parent / "north" / "n1" / "session.toml"), "classify")
    row = table.loc["n1"]
    assert (row["n_spots"], row["n_experiments"], row["n_D"]) == (SPOTS, 1, len(own))
    assert row["n_values"] == (own["kind"] == "value").sum()
    assert row["n_values"] + row["n_limits"] + row["n_undetermined"] == len(own)
    assert row["materials"] == "BRG-1"
    assert pd.isna(row["problem"])
    assert "forty" in table.loc["broken", "problem"]


def test_current_sessions_are_skipped_and_nothing_changes(
    reduced: Summary, cluster: distributed.LocalCluster
):
    before = parts(reduced.dataset), reduced.sessions.read_bytes()
    again = reduce_archive(reduced.dataset.parent, scheduler=cluster.scheduler_address)
    assert set(states(again).values()) == {CURRENT, FAILED}
    assert (parts(again.dataset), again.sessions.read_bytes()) == before


def test_a_part_that_was_lost_is_put_back_without_reducing_again(reduced: Summary):
    part = reduced.dataset / "lab=north" / "session=n1" / "classify.parquet"
    data = part.read_bytes()
    part.unlink()
    unit = next(outcome.unit for outcome in reduced.outcomes if outcome.unit.session == "n1")
    session = load(unit.path)
    stamp = table_path(session.run_folder, "ingest").stat().st_mtime_ns
    assert reduce_unit(unit, reduced.dataset).state == REDUCED
    assert part.read_bytes() == data
    assert table_path(session.run_folder, "ingest").stat().st_mtime_ns == stamp


def test_killed_workers_lose_nothing(tmp_path: Path):
    """Both workers are killed while sessions are under way; others take over what they had."""
    root = write_archive(tmp_path / "archive")
    options = {"host": "127.0.0.1", "dashboard_address": "127.0.0.1:0", "silence_logs": 50}
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, processes=True, **options) as cluster:
        victims = [worker.pid for worker in cluster.workers.values()]

        def kill(outcome: Outcome) -> None:
            while victims:
                os.kill(victims.pop(), signal.SIGKILL)

        summary = reduce_archive(root, scheduler=cluster.scheduler_address, finished=kill)
        assert not victims
    assert states(summary) == {
        "n1": REDUCED,
        "n2": REDUCED,
        "s1": REDUCED,
        "s2": REDUCED,
        "broken": FAILED,
    } or (
        # A worker may die after the last rename and before it could tell: its session is then found current.
        set(states(summary).values()) <= {REDUCED, CURRENT, FAILED} and len(summary.failures) == 1
    )
    assert_as_single_runs(root, tmp_path / "alone")
    assert not list(root.rglob(".*.tmp"))


def test_the_command_with_own_workers(tmp_path: Path):
    root = tmp_path / "sessions"
    write_session(root / "s1", SPOTS, name="s1")
    done = CliRunner().invoke(
        app, ["archive", str(root), "--workers", "1", "--json", "--out", str(tmp_path / "D")]
    )
    assert done.exit_code == 0, done.output
    told = json.loads(done.stdout)
    assert told["counts"] == {REDUCED: 1, CURRENT: 0, FAILED: 0}
    assert (tmp_path / "D" / "lab=s1" / "session=s1" / "classify.parquet").is_file()
    assert (tmp_path / "D" / SESSIONS_FILE).is_file()


def test_what_counts_as_a_session(tmp_path: Path):
    root = tmp_path / "root"
    write_session(root / "north" / "a", SPOTS, name="a")
    write_session(root / "north" / "again", SPOTS, name="a")
    write_session(root / "c", SPOTS, name="c")
    with (root / "c" / "session.toml").open("a", encoding="utf-8") as stream:
        stream.write('\n[about]\nlaboratory = "south"\n')
    (root / "north" / "other.toml").write_text('title = "no session"\n', encoding="utf-8")
    (root / "north" / "bad.toml").write_text("session = \n", encoding="utf-8")
    (root / ".hidden").mkdir()
    (root / ".hidden" / "x.toml").write_text('session = "x"\ningest = {}\n', encoding="utf-8")
    runner.run(load(root / "c" / "session.toml"))  # leaves effective.toml in its run folder
    units = {unit.name: unit for unit in find_units(root, root / "archive")}
    assert set(units) == {
        "c/session.toml",
        "north/a/session.toml",
        "north/again/session.toml",
        "north/bad.toml",
    }
    assert (units["c/session.toml"].laboratory, units["c/session.toml"].session) == ("south", "c")
    assert units["north/a/session.toml"].problem == ""
    assert "north/a/session.toml" in units["north/again/session.toml"].problem
    assert "cannot be read" in units["north/bad.toml"].problem


def test_a_sealed_session_that_is_stale_keeps_what_was_published(tmp_path: Path):
    dataset = tmp_path / "archive"
    write_session(tmp_path / "north" / "a", SPOTS, name="a")
    (unit,) = find_units(tmp_path, dataset)
    first = reduce_unit(unit, dataset)
    (part,) = parts(dataset)
    assert kept_parts(dataset, [first]) == []
    (load(unit.path).run_folder / SEAL_NAME).write_text("", encoding="utf-8")
    assert reduce_unit(unit, dataset).state == CURRENT
    with unit.path.open("a", encoding="utf-8") as stream:
        stream.write("\n[partition]\nconfidence = 0.9\n")
    outcome = reduce_unit(unit, dataset)
    assert outcome.state == FAILED
    assert "sealed, and partition is stale: confidence 0.95 → 0.9." in outcome.message
    assert kept_parts(dataset, [outcome]) == [str(Path(part).parent.as_posix())]
    assert left_over_parts(dataset, [outcome]) == []


def test_what_is_wrong_with_the_request_is_told_before_anything_is_done(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr("tieline.archive.workers.CONNECT_TIMEOUT_S", 0.5)
    with pytest.raises(InputError, match="no such folder"):
        reduce_archive(tmp_path / "nowhere")
    (tmp_path / "session.txt").write_text("", encoding="utf-8")
    with pytest.raises(InputError, match="is a file, not a folder"):
        reduce_archive(tmp_path / "session.txt")
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError, match=r"^\.: there is no session configuration"):
        reduce_archive(Path())
    write_session(tmp_path / "a", SPOTS, name="a")
    with pytest.raises(InputError, match="no scheduler answers"):
        reduce_archive(tmp_path, scheduler="tcp://127.0.0.1:9")
    assert not (tmp_path / "archive").exists()
