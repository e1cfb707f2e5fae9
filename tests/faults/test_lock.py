"""One writer at a time: who holds a folder is said, dead and silent holders are recognised, half a lock is never seen."""

from __future__ import annotations

import json
import os
import socket
import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from faults.small import change_settings, write_session
from tieline import lock, runner
from tieline.errors import InputError
from tieline.lock import LOCK_NAME, SILENT_S, TURN_NAME, locked
from tieline.plan import table_path
from tieline.storage import read_record, temporary_path

ME = {"host": socket.gethostname(), "token": "of another"}


def dead_pid() -> int:
    """The number of a process that has just ended."""
    child = subprocess.Popen([sys.executable, "-c", ""])
    child.wait()
    return child.pid


def write_lock(folder: Path, age_s: float = 0.0, **holder: object) -> Path:
    path = folder / LOCK_NAME
    path.write_text(json.dumps(holder), encoding="utf-8")
    then = time.time() - age_s
    os.utime(path, (then, then))
    return path


def test_a_second_run_is_told_who_holds_the_folder(tmp_path: Path):
    with locked(tmp_path):
        code = f"from pathlib import Path; from tieline.lock import locked\nwith locked(Path({str(tmp_path)!r})): pass"
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
        assert f"is being written by process {os.getpid()} on {socket.gethostname()}" in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_the_holder_may_lock_once_more_and_still_holds_it_afterwards(tmp_path: Path):
    with locked(tmp_path) as outer:
        with locked(tmp_path) as inner:
            assert inner is outer
        assert outer.ours()
    assert not (tmp_path / LOCK_NAME).exists()


def test_the_lock_of_a_dead_process_is_taken_over_at_once(tmp_path: Path):
    write_lock(tmp_path, pid=dead_pid(), **ME)
    with locked(tmp_path) as hold:
        assert hold.ours()


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="only Linux tells when a process began")
def test_a_number_given_to_another_process_since_is_no_live_holder(tmp_path: Path):
    write_lock(tmp_path, pid=os.getpid(), started="another boot 123", **ME)
    with locked(tmp_path) as hold:
        assert hold.ours()


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="only Linux tells when a process began")
def test_a_live_holder_on_this_machine_is_believed_however_long_it_was_silent(tmp_path: Path):
    write_lock(tmp_path, 10 * SILENT_S, pid=os.getpid(), started=lock._started(os.getpid()), **ME)
    with pytest.raises(InputError, match=f"process {os.getpid()}"), locked(tmp_path):
        pass


def test_a_process_that_ended_and_was_not_collected_is_no_holder(tmp_path: Path):
    if not Path("/proc/self/stat").exists():
        pytest.skip("only Linux tells")
    child = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    write_lock(tmp_path, pid=child.pid, started=lock._started(child.pid), **ME)
    with pytest.raises(InputError), locked(tmp_path):
        pass
    child.stdin.close()
    for _ in range(200):
        if lock._started(child.pid) == "ended":
            break
        time.sleep(0.02)
    with locked(tmp_path) as hold:
        assert hold.ours()
    child.wait()


@pytest.mark.parametrize(("age_s", "stale"), [(0.0, False), (SILENT_S / 2, False), (2 * SILENT_S, True)])
def test_a_holder_elsewhere_is_gone_when_it_has_been_silent_too_long(
    tmp_path: Path, age_s: float, stale: bool
):
    write_lock(tmp_path, age_s, pid=1, host="another-machine", token="x")
    if stale:
        with locked(tmp_path) as hold:
            assert hold.ours()
    else:
        with pytest.raises(InputError, match="process 1 on another-machine"), locked(tmp_path):
            pass


@pytest.mark.parametrize(
    "text", ["", "{", "[]", '"x"', '{"pid": "one"}', '{"pid": -1}', "\x00\xff", '{"pid": 1e99}']
)
def test_a_lock_that_names_nobody_is_void_only_after_the_silence(tmp_path: Path, text: str):
    path = tmp_path / LOCK_NAME
    path.write_text(text, encoding="latin-1")
    with pytest.raises(InputError, match="is being written by"), locked(tmp_path):
        pass
    os.utime(path, (1e9, 1e9))
    with locked(tmp_path) as hold:
        assert hold.ours()


def test_the_holder_gives_signs_of_life(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(lock, "BEAT_S", 0.01)
    with locked(tmp_path) as hold:
        os.utime(hold.path, (1e9, 1e9))
        for _ in range(500):
            if hold.path.stat().st_mtime > 1e9 + 1:
                break
            time.sleep(0.01)
        assert hold.path.stat().st_mtime > 1e9 + 1


def test_a_holder_that_lost_its_lock_shows_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """A laptop slept, another machine took the folder over: the first run must not mix its files in."""
    session = write_session(tmp_path)
    runner.run(session)
    before = {path.name: path.read_bytes() for path in session.run_folder.iterdir()}
    changed = change_settings(session)

    def taken_over(stage: str, state: str) -> None:
        if (stage, state) == ("classify", "done"):
            write_lock(session.run_folder, pid=7, host="another-machine", token="y")

    with pytest.raises(InputError, match="was taken over by another run"):
        runner.run(changed, progress=taken_over)
    theirs = json.loads((session.run_folder / LOCK_NAME).read_text())
    assert theirs["host"] == "another-machine"
    (session.run_folder / LOCK_NAME).unlink()
    assert {path.name: path.read_bytes() for path in session.run_folder.iterdir()} == before


def test_without_links_the_lock_still_excludes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    def no_links(*_: object) -> None:
        raise PermissionError(1, "Operation not permitted")

    monkeypatch.setattr(os, "link", no_links)
    with locked(tmp_path) as hold:
        assert hold.ours()
        assert not lock._place_without_links(lock.Hold(hold.path, "another"))
    assert list(tmp_path.iterdir()) == []


def test_many_at_once_after_a_crash_never_hold_it_together(tmp_path: Path):
    """Processes race for a stale lock, again and again; whoever enters writes its number and must find it unchanged."""
    code = f"""
import os, time
from pathlib import Path
from tieline.errors import InputError
from tieline.lock import locked
folder = Path({str(tmp_path)!r})
entered = 0
until = time.monotonic() + 2.5
while time.monotonic() < until:
    try:
        with locked(folder) as hold:
            (folder / "inside").write_text(str(os.getpid()))
            time.sleep(0.002)
            hold.check()
            assert (folder / "inside").read_text() == str(os.getpid())
            entered += 1
            if entered % 3 == 0:
                hold.path.write_text('{{"pid": {dead_pid()}, "host": "{socket.gethostname()}", "token": "%d"}}' % os.getpid())
    except InputError:
        time.sleep(0.001)
print(entered)
"""
    children = [
        subprocess.Popen(
            [sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        for _ in range(4)
    ]
    ends = [child.communicate(timeout=60) for child in children]
    assert [child.returncode for child in children] == [0] * 4, ends
    assert sum(int(out) for out, _ in ends) > 20


def test_who_died_while_it_removed_a_stale_lock_keeps_nobody_out(tmp_path: Path):
    for with_lock in (True, False):
        if with_lock:
            write_lock(tmp_path, pid=dead_pid(), host=socket.gethostname(), token="x")
        dead = json.dumps({"host": socket.gethostname(), "pid": dead_pid(), "token": "y"})
        (tmp_path / TURN_NAME).write_text(dead, encoding="utf-8")
        with locked(tmp_path) as hold:
            assert hold.ours()
        assert list(tmp_path.iterdir()) == []


def test_while_another_removes_a_stale_lock_this_one_waits(tmp_path: Path):
    write_lock(tmp_path, pid=dead_pid(), host=socket.gethostname(), token="x")
    mine = json.dumps({"host": socket.gethostname(), "pid": os.getpid(), "token": "y"})
    (tmp_path / TURN_NAME).write_text(mine, encoding="utf-8")
    with pytest.raises(InputError, match="is being written by"), locked(tmp_path):
        pass
    assert json.loads((tmp_path / LOCK_NAME).read_text())["token"] == "x"
    assert (tmp_path / TURN_NAME).read_text() == mine


def test_what_dead_runs_left_is_removed_and_nothing_else(tmp_path: Path):
    left = temporary_path(tmp_path / "classify.parquet")
    left.write_bytes(b"half")
    (tmp_path / "notes.tmp").write_text("a person's own")
    with locked(tmp_path):
        assert not left.exists()
    assert (tmp_path / "notes.tmp").exists()


def test_readers_beside_a_writer_see_whole_files_only(tmp_path: Path):
    """Stage files replaced over and over, while readers open them."""
    session = write_session(tmp_path)
    runner.run(session)
    stop = threading.Event()

    def read() -> int:
        count = 0
        while not stop.is_set():
            assert read_record(table_path(session.run_folder, "classify")) is not None
            count += 1
        return count

    with ThreadPoolExecutor(2) as pool:
        readers = [pool.submit(read) for _ in range(2)]
        for _ in range(4):
            runner.run(session, fresh=True)
        stop.set()
        assert all(reader.result() > 0 for reader in readers)


def test_a_reader_is_told_when_results_were_replaced_while_it_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    session = write_session(tmp_path)
    runner.run(session)
    whole = runner.tables_of

    def slow(*arguments: object) -> object:
        tables = whole(*arguments)
        runner.run(change_settings(session))
        return tables

    monkeypatch.setattr(runner, "tables_of", slow)
    with pytest.raises(InputError, match="was written by another run while it was read"):
        runner.finished(session, "classify")
