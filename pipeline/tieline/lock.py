"""One writer per run folder, and none once it is sealed.

The lock file names its holder and outlives no process on its own machine. A sealed folder holds a list of
checksums of all its files, which any change would make untrue.
"""

from __future__ import annotations

import json
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from tieline.errors import InputError, Problem

LOCK_NAME = ".tieline.lock"
SEAL_NAME = "SHA256SUMS"


@contextmanager
def locked(run_folder: Path) -> Iterator[None]:
    """Holds the folder's lock; raises InputError when it is sealed or another live process has it."""
    refuse_if_sealed(run_folder)
    path = run_folder / LOCK_NAME
    _acquire(path)
    try:
        yield
    finally:
        with suppress(OSError):
            path.unlink()


def refuse_if_sealed(run_folder: Path) -> None:
    """Raises InputError when the folder is sealed."""
    if (run_folder / SEAL_NAME).exists():
        raise InputError(
            Problem(
                f"is sealed by {SEAL_NAME}; a published reduction is not written to.",
                str(run_folder),
                remedy=f"Choose another --out folder or session name, or delete {SEAL_NAME} to break the seal.",
            )
        )


def _acquire(path: Path) -> None:
    me = json.dumps({"pid": os.getpid(), "host": socket.gethostname()})
    for _ in range(2):
        try:
            descriptor = os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY)
        except FileExistsError:
            if not _is_stale(path):
                raise InputError(_held(path)) from None
            with suppress(OSError):
                path.unlink()
            continue
        except OSError as error:
            raise InputError(
                Problem(
                    f"cannot be written: {error.strerror}.",
                    str(path.parent),
                    remedy="Choose another --out folder.",
                )
            ) from None
        with os.fdopen(descriptor, "w") as stream:
            stream.write(me)
        return
    raise InputError(_held(path))


def _holder(path: Path) -> dict[str, object]:
    try:
        holder = json.loads(path.read_text())
    except (OSError, ValueError):
        return {}
    return holder if isinstance(holder, dict) else {}


def _is_stale(path: Path) -> bool:
    holder = _holder(path)
    pid = holder.get("pid")
    if not isinstance(pid, int) or holder.get("host") != socket.gethostname():
        return False  # a holder on another machine cannot be asked; a person decides
    return not _alive(pid)


def _alive(pid: int) -> bool:
    if os.name == "nt":  # os.kill with signal 0 would end the process there
        import ctypes

        handle = ctypes.windll.kernel32.OpenProcess(0x1000, False, pid)  # type: ignore[attr-defined]
        if handle:
            ctypes.windll.kernel32.CloseHandle(handle)  # type: ignore[attr-defined]
        return bool(handle)
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _held(path: Path) -> Problem:
    holder = _holder(path)
    who = f"process {holder.get('pid')} on {holder.get('host')}" if holder else "another process"
    return Problem(
        f"is being written by {who}.",
        str(path.parent),
        remedy=f"Wait for it, or delete {path.name} there if it is gone.",
    )
