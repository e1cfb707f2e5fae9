"""Where it runs: odd paths and line ends, other locales and encodings, no home, no terminal, `-O`, little memory."""

from __future__ import annotations

import ast
import os
import subprocess
import sys
from collections import Counter
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path

import pytest

from faults.commands import tieline
from faults.small import change_settings, write_session
from tieline import runner
from tieline.columns import TABLES
from tieline.configuration import Session, load
from tieline.errors import InputError
from tieline.plan import read_records, table_path
from tieline.report.currency import FILES
from tieline.report.write import write_report
from tieline.stages import STAGES

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / "pipeline" / "tieline"
POSIX = os.name == "posix"


def contents(session: Session) -> dict[str, str]:
    """Content digest of every stage table."""
    records = {
        name: record for stage in STAGES for name, record in read_records(session.run_folder, stage).items()
    }
    return {name: record["content"] for name, record in records.items()}


def command(
    *arguments: str,
    environment: Mapping[str, str] | None = None,
    python: tuple[str, ...] = ("-W", "error"),
    **options: object,
) -> subprocess.CompletedProcess[bytes]:
    """`tieline` as a process of its own; `environment` replaces everything but what Python needs to start."""
    given = dict(os.environ) if environment is None else {"PYTHONPATH": str(ROOT / "pipeline"), **environment}
    call = [sys.executable, *python, "-m", "tieline", *arguments]
    return subprocess.run(
        call, env=given, capture_output="stdout" not in options, check=False, **{"timeout": 120, **options}
    )


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    """What the session gives where nothing is odd."""
    session = write_session(tmp_path_factory.mktemp("plain"))
    runner.run(session)
    return contents(session)


@pytest.mark.parametrize(
    "name", ["with space", "Ünï-ćödé 橄榄石", "quote's & [brackets] {x} $HOME %TEMP%", "-dash", "a" * 200]
)
def test_folders_of_any_name(name: str, tmp_path: Path, plain: dict[str, str]):
    session = write_session(tmp_path / name)
    for arguments in (
        ("run", str(session.path), "--report"),
        ("status", str(session.path)),
        ("audit", str(session.run_folder)),
    ):
        done = tieline(*arguments)
        assert done.status == 0, done.stderr
    assert contents(session) == plain


@pytest.mark.parametrize("end", ["\r\n", "\r"])
def test_line_ends_of_other_systems(end: str, tmp_path: Path, plain: dict[str, str]):
    session = write_session(tmp_path)
    for path in (*tmp_path.glob("*.csv"), *([session.path] if end == "\r\n" else [])):
        path.write_bytes(path.read_bytes().replace(b"\n", end.encode()))
    runner.run(load(session.path))
    found = contents(session)
    # The settings and digests of the input files differ, the results do not.
    assert found == plain


def test_names_differ_in_more_than_their_case(tmp_path: Path):
    """On many file systems `Report.html` is `report.html`: no two files of a run folder may differ by that alone."""
    names = [f"{name}.parquet" for name in TABLES] + [*FILES, "run.json", "effective.toml"]
    assert max(Counter(name.casefold() for name in names).values()) == 1
    sources = Counter(str(path.relative_to(ROOT)).casefold() for path in PACKAGE.rglob("*"))
    assert max(sources.values()) == 1


def test_phases_that_differ_in_case_only_get_pictures_of_their_own(tmp_path: Path):
    session = write_session(tmp_path)
    table = tmp_path / "probe.csv"
    text = table.read_text(encoding="utf-8")
    text = text.replace("X-1,olivine", "X-1,Phase q").replace("X-2,olivine", "X-2,phase-Q")
    table.write_text(text, encoding="utf-8")
    session = load(session.path)
    runner.run(session)
    written = write_report(session, tmp_path / "figures")
    names = [path.name.casefold() for path in written if path.parent.name == "figures"]
    assert len(set(names)) == len(names) == len(list((tmp_path / "figures").iterdir()))
    assert sum("budget" in name for name in names) == 2 * 2


def test_the_locale_is_never_asked():
    """A decimal comma of the system must not reach a number: nothing sets or uses the locale."""
    for path in PACKAGE.rglob("*.py"):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        for node in ast.walk(tree):
            if isinstance(node, ast.Import | ast.ImportFrom):
                names = {alias.name for alias in node.names} | {getattr(node, "module", None)}
                assert "locale" not in names, path
            if isinstance(node, ast.FormattedValue) and isinstance(node.format_spec, ast.JoinedStr):
                spec = "".join(
                    part.value for part in node.format_spec.values if isinstance(part, ast.Constant)
                )
                assert not spec.endswith("n"), f"{path}: {spec}"


@pytest.mark.parametrize("encoding", ["ascii", "cp1252"])
def test_outputs_of_any_encoding(encoding: str, tmp_path: Path):
    import json

    session = write_session(tmp_path)
    for arguments in (
        ("run", str(session.path)),
        ("run", str(session.path), "--all"),
        ("status", str(session.path)),
    ):
        done = tieline(*arguments, encoding=encoding)
        assert done.status == 0, done.stderr
    done = tieline("run", str(session.path), "--json", encoding=encoding)
    assert json.loads(done.stdout)["session"] == "small"
    assert tieline("check", str(tmp_path / "µ±橄.toml"), encoding=encoding).status == 2


class TestAsAProcess:
    """What only shows in a process of its own."""

    @pytest.fixture
    def session(self, tmp_path: Path) -> Session:
        return write_session(tmp_path / "s")

    def test_without_home_or_anything_else_in_the_environment(self, session: Session, plain: dict[str, str]):
        environment = (
            {"HOME": "/nonexistent", "LC_ALL": "C", "PYTHONUTF8": "0"} if POSIX else dict(os.environ)
        )
        arguments = ("run", str(session.path), "--report")
        done = command(*arguments, environment=environment, stdin=subprocess.DEVNULL)
        assert done.returncode == 0, done.stderr.decode()
        assert done.stderr == b""
        assert contents(session) == plain
        done = command(
            "report", str(session.path), "--figures", str(session.path.parent / "f"), environment=environment
        )
        assert done.returncode == 0, done.stderr.decode()

    def test_optimised_and_with_every_warning_an_error(self, session: Session, plain: dict[str, str]):
        environment = dict(os.environ, PYTHONWARNINGS="error", PYTHONOPTIMIZE="2", PYTHONDEVMODE="1")
        done = command("run", str(session.path), "--report", environment=environment, python=())
        assert done.returncode == 0, done.stderr.decode()
        assert contents(session) == plain

    @pytest.mark.skipif(not POSIX, reason="descriptors are closed otherwise there")
    @pytest.mark.parametrize("closed", [(1,), (0, 1, 2)])
    def test_without_standard_streams(self, session: Session, closed: tuple[int, ...]):
        def close() -> None:
            for descriptor in closed:
                os.close(descriptor)

        done = command("run", str(session.path), preexec_fn=close)
        assert done.returncode == 0, done.stderr.decode()
        assert table_path(session.run_folder, "classify").exists()

    @pytest.mark.skipif(not POSIX, reason="pipes end otherwise there")
    def test_output_into_a_pipe_that_is_closed(self, session: Session):
        read, write = os.pipe()
        os.close(read)
        done = command("run", str(session.path), stdout=write, stderr=subprocess.PIPE)
        os.close(write)
        assert done.returncode == 1
        assert done.stderr == b""
        assert table_path(session.run_folder, "classify").exists()

    @pytest.mark.skipif("TIELINE_HUGE" not in os.environ, reason="`make faults`: may wait twenty seconds")
    def test_with_too_little_memory(self, session: Session, plain: dict[str, str]):
        import resource

        runner.run(session)
        before = {path.name: path.read_bytes() for path in session.run_folder.iterdir()}
        changed = change_settings(session)

        def limit() -> None:
            resource.setrlimit(resource.RLIMIT_AS, (550 << 20, 550 << 20))

        # Where memory ends inside a linear-algebra library, that may end the process or try for ever: it is killed then.
        environment = dict(os.environ, OPENBLAS_NUM_THREADS="1", OMP_NUM_THREADS="1")
        with suppress(subprocess.TimeoutExpired):
            done = command("run", str(changed.path), environment=environment, timeout=20, preexec_fn=limit)
            assert done.returncode != 0
            assert b"Traceback" not in done.stderr
        visible = {
            path.name: path.read_bytes() for path in session.run_folder.iterdir() if path.name[0] != "."
        }
        assert visible == before
        runner.run(changed)
        assert not [path for path in session.run_folder.iterdir() if path.name[0] == "."]


def test_out_of_memory_is_said_and_changes_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    session = write_session(tmp_path)
    runner.run(session)
    before = {path.name: path.read_bytes() for path in session.run_folder.iterdir()}
    change_settings(session)

    def exhausted(*_: object, **__: object) -> None:
        raise MemoryError

    monkeypatch.setattr("tieline.partition.propagate", exhausted)
    done = tieline("run", str(session.path))
    assert done.status == 1
    assert "stopped: out of memory" in done.stderr
    assert {path.name: path.read_bytes() for path in session.run_folder.iterdir()} == before


@pytest.mark.skipif(
    sys.platform != "linux", reason="a folder that nobody can write to, not even an administrator"
)
def test_a_folder_that_cannot_be_written_to(tmp_path: Path):
    session = write_session(tmp_path)
    done = tieline("run", str(session.path), "--out", "/proc/self/results")
    assert done.status == 2
    assert "cannot be made" in done.stderr
    done = tieline("start", str(tmp_path / "probe.csv"), "--to", "/proc/self/x.toml")
    assert done.status in (1, 2)
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize(
    "name", ["probe.csv", "accepted.csv", "rulings.csv", "experiments.csv", "session.toml"]
)
def test_a_file_that_vanishes(name: str, tmp_path: Path):
    session = write_session(tmp_path)
    runner.run(session)
    (tmp_path / name).unlink()
    for arguments in (("run",), ("status",), ("check",), ("report",)):
        done = tieline(*arguments, str(session.path))
        assert done.status == 2
        assert name in done.stderr
        assert "Traceback" not in done.stderr


@pytest.mark.parametrize("table", ["convert", "screen.findings", "partition.covariance"])
def test_a_stage_file_that_vanishes_mid_run(table: str, tmp_path: Path):
    """Another program tidies up while a run needs the file: said, nothing changed, and the next run makes it anew."""
    session = write_session(tmp_path)
    runner.run(session)
    whole = contents(session)
    text = session.path.read_text(encoding="utf-8")
    session.path.write_text(text + "[classify]\ncompatible_above = 2.0\n", encoding="utf-8")

    def vanish(stage: str, state: str) -> None:
        table_path(session.run_folder, table).unlink(missing_ok=True)

    with suppress(InputError):  # only where a later stage needed the file
        runner.run(load(session.path), progress=vanish)
    runner.run(load(session.path))
    now = contents(session)
    assert {name for name in now if now[name] != whole[name]} <= {
        "classify",
        "assess",
        "assess.fits",
        "assess.curves",
    }


def test_the_run_folder_vanishes_mid_run(tmp_path: Path):
    import shutil

    session = write_session(tmp_path)

    def vanish(stage: str, state: str) -> None:
        if (stage, state) == ("pair", "done"):
            shutil.rmtree(session.run_folder)

    with pytest.raises((OSError, InputError)):
        runner.run(session, progress=vanish)
    runner.run(session)
    assert contents(session)
