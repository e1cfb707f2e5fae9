"""One writer per run folder, and none once it is sealed.

The lock file names its holder and outlives no process: it is taken over when the process is gone, or, where
that cannot be asked (another machine, another container), when it has not touched the file for SILENT_S. Both
times of that comparison are the file server's, so that clocks need not agree. Stale locks are removed by one process
at a time, whose turn is a lock of the same kind: otherwise one would remove what another has put in place of the stale
one. A writer that slept that long asks `Hold.check` before it shows its results, and finds the lock gone. A sealed
folder holds a list of checksums of all its files, which any change would make untrue.
"""

from __future__ import annotations

import json
import os
import secrets
import socket
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

from tieline.errors import InputError, Problem
from tieline.storage import remove_left_overs, temporary_path

LOCK_NAME = ".tieline.lock"
TURN_NAME = ".tieline.lock.turn"
SEAL_NAME = "SHA256SUMS"
BEAT_S = 30.0
SILENT_S = 600.0  # twenty missed beats: a network folder may stop answering for minutes and come back
ATTEMPTS = 20
WAIT_S = 0.01  # for another process to remove a stale lock


@dataclass(frozen=True)
class Hold:
    """A lock that was taken; `text` is what the lock file says and is unique to this hold."""

    path: Path
    text: str

    def ours(self) -> bool:
        return _text(self.path) == self.text

    def check(self) -> None:
        """Raises InputError where the lock was lost: somebody else may be writing."""
        if not self.ours():
            raise InputError(
                Problem(
                    "was taken over by another run, or its lock was deleted, while this one was silent.",
                    str(self.path.parent),
                    remedy="Nothing of this run was shown; run again.",
                )
            )


# What this process holds, by folder. A thread of its own that wrote the same folder would have to wait elsewhere.
_HELD: dict[Path, Hold] = {}


@contextmanager
def locked(run_folder: Path) -> Iterator[Hold]:
    """Holds the folder's lock and removes what dead runs left half-written.

    Who holds it already, such as a run that goes on to write its report, holds it once more. Raises InputError
    when the folder is sealed, another live process holds it, or it cannot be written to.
    """
    refuse_if_sealed(run_folder)
    held = _HELD.get(run_folder.resolve())
    if held is not None and held.ours():
        yield held
        return
    hold = _acquire(run_folder / LOCK_NAME)
    _HELD[run_folder.resolve()] = hold
    stop = threading.Event()
    beat = threading.Thread(target=_beat, args=(hold, stop), daemon=True, name="tieline-lock")
    try:
        remove_left_overs(run_folder)
        with suppress(RuntimeError):  # no room for a thread: on this machine the lock holds without it
            beat.start()
        yield hold
    finally:
        stop.set()
        _HELD.pop(run_folder.resolve(), None)
        with suppress(OSError):
            if hold.ours():
                hold.path.unlink()


def is_sealed(run_folder: Path) -> bool:
    """Whether the folder is sealed, so that nothing more is written to it."""
    return (run_folder / SEAL_NAME).exists()


def refuse_if_sealed(run_folder: Path) -> None:
    """Raises InputError when the folder is sealed."""
    if is_sealed(run_folder):
        raise InputError(
            Problem(
                f"is sealed by {SEAL_NAME}; a published reduction is not written to.",
                str(run_folder),
                remedy=f"Choose another --out folder or session name, or delete {SEAL_NAME} to break the seal.",
            )
        )


def _beat(hold: Hold, stop: threading.Event) -> None:
    while not stop.wait(BEAT_S):
        with suppress(OSError):
            if hold.ours():
                os.utime(hold.path)


def _acquire(path: Path) -> Hold:
    hold = Hold(path, _myself())
    for _ in range(ATTEMPTS):
        try:
            placed, now = _try(hold)
        except FileNotFoundError:
            if path.parent.is_dir():
                continue  # the holder tidied the draft away, and may be done by now
            raise
        except OSError as error:
            raise InputError(_not_writable(path.parent, error)) from None
        if placed:
            # Whoever died in its turn left this behind; whoever is in its turn finds another lock than it came for.
            with suppress(OSError):
                path.with_name(TURN_NAME).unlink()
            return hold
        found = _text(path)
        if found is None:
            continue
        if not _is_stale(path, found, now):
            raise InputError(_held(path, found))
        _remove_stale(path, found)
    raise InputError(_held(path, _text(path) or ""))


def _try(hold: Hold) -> tuple[bool, float]:
    """Whether the lock could be placed, and the time of the file system."""
    draft = temporary_path(hold.path)
    try:
        _write_draft(draft, hold.text)
        now = draft.stat().st_mtime
        return _place(draft, hold), now
    finally:
        with suppress(OSError):
            draft.unlink()


def _myself() -> str:
    me = {
        "host": socket.gethostname(),
        "pid": os.getpid(),
        "started": _started(os.getpid()),
        "token": secrets.token_hex(8),
    }
    return json.dumps(me, sort_keys=True)


def _write_draft(draft: Path, text: str) -> None:
    with draft.open("xb") as stream:
        stream.write(text.encode())
        stream.flush()


def _place(draft: Path, hold: Hold) -> bool:
    """Gives the draft the lock's name unless that is taken: never is there a lock that names no holder."""
    try:
        os.link(draft, hold.path)
    except FileExistsError:
        return hold.ours()  # a network file system may repeat a request that had succeeded
    except FileNotFoundError:
        raise
    except OSError:  # a file system without links
        return _place_without_links(hold)
    return True


def _place_without_links(hold: Hold) -> bool:
    try:
        with hold.path.open("xb") as stream:
            stream.write(hold.text.encode())
    except FileExistsError:
        return False
    return True


def _remove_stale(path: Path, found: str) -> None:
    """Removes the stale lock that says `found`, and no other that may have come in its place."""
    turn = Hold(path.with_name(TURN_NAME), _myself())
    try:
        placed, now = _try(turn)
    except OSError:
        return
    if not placed:
        other = _text(turn.path)
        if other is not None and _is_stale(turn.path, other, now):
            _take_away(turn.path, other)
        time.sleep(WAIT_S)
        return
    try:
        # Only whose turn it is removes a stale lock, and none is placed while there is one: it stays what it is.
        if _text(path) == found:
            path.unlink()
    except OSError:
        pass
    finally:
        with suppress(OSError):
            if turn.ours():
                turn.path.unlink()


def _take_away(path: Path, found: str) -> None:
    """Removes the turn of a process that died in it; one that came in its place is put back, but for a moment is not there."""
    aside = temporary_path(path)
    with suppress(OSError):
        os.rename(path, aside)
        if _text(aside) != found:
            with suppress(OSError):
                os.link(aside, path)
        aside.unlink()


def _text(path: Path) -> str | None:
    """What a lock file says; None where there is none, an empty text where it cannot be read."""
    try:
        return path.read_bytes().decode("utf-8", "replace")
    except FileNotFoundError:
        return None
    except OSError:
        return ""


def _holder(text: str) -> dict[str, object]:
    try:
        holder = json.loads(text)
    except ValueError:
        return {}
    return holder if isinstance(holder, dict) else {}


def _is_stale(path: Path, text: str, now: float) -> bool:
    """Whether the holder is gone; `now` is the time of the file system."""
    holder = _holder(text)
    pid = holder.get("pid")
    if isinstance(pid, int) and pid > 0 and holder.get("host") == socket.gethostname():
        if not _alive(pid):
            return True
        started = _started(pid)
        if started and holder.get("started"):
            return started != holder["started"]  # the number was given to another process since
    try:
        return now - path.stat().st_mtime > SILENT_S
    except OSError:
        return False


def _started(pid: int) -> str:
    """When a process of this machine began, as a text to compare; empty where the system does not tell."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_bytes().decode().strip()
        # After the name in brackets: state, parent, ... and as the 20th the start in ticks since the boot.
        fields = Path(f"/proc/{pid}/stat").read_bytes().decode(errors="replace").rpartition(")")[2].split()
        return "ended" if fields[0] in "ZX" else f"{boot} {fields[19]}"
    except (OSError, IndexError):
        return ""


def _alive(pid: int) -> bool:
    if os.name == "nt":  # os.kill with signal 0 would end the process there
        import ctypes

        handle = ctypes.windll.kernel32.OpenProcess(0x1000, False, pid)  # type: ignore[attr-defined]
        if handle:
            ctypes.windll.kernel32.CloseHandle(handle)  # type: ignore[attr-defined]
        return bool(handle)
    try:
        os.kill(pid, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except PermissionError:
        return True
    return True


def _not_writable(folder: Path, error: OSError) -> Problem:
    return Problem(
        f"cannot be written: {error.strerror or error}.", str(folder), remedy="Choose another --out folder."
    )


def _held(path: Path, text: str) -> Problem:
    holder = _holder(text)
    who = f"process {holder.get('pid')} on {holder.get('host')}" if holder else "another process"
    return Problem(
        f"is being written by {who}.",
        str(path.parent),
        remedy=f"Wait for it. If it is gone, its lock is void {SILENT_S / 60:.0f} minutes after its last sign of life; "
        f"or delete {path.name} there.",
    )
