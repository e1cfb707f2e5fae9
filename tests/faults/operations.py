"""Counts the file-system operations of this process below one folder, and strikes at one of them.

Python's own functions are replaced, so that no library need know of it: opening for writing, every write, flushing to
disk, renaming, linking, removing, making folders, touching.
"""

from __future__ import annotations

import builtins
import io
import os
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

NAMES = ("open", "replace", "rename", "link", "unlink", "remove", "mkdir", "rmdir", "utime", "fsync")


class Striking:
    """What happens at the operation number `at`: kill the process, or raise `errno`, once or from then on."""

    def __init__(self, root: Path, at: int | None = None, errno: int | None = None, lasting: bool = False):
        self.root, self.at, self.errno, self.lasting = f"{root}{os.sep}", at, errno, lasting
        self.seen: list[str] = []
        self._open = io.open

    def install(self) -> None:
        for name in NAMES:
            setattr(os, name, self._wrapped(name, getattr(os, name)))
        io.open = builtins.open = self._opened  # type: ignore[assignment]

    def _wrapped(self, name: str, function: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any, **options: Any) -> Any:
            if name == "fsync" or any(self._ours(arg) for arg in args[:2]):
                self.strike(name)
            return function(*args, **options)

        return call

    def _ours(self, path: object) -> bool:
        return isinstance(path, str | os.PathLike) and str(path).startswith(self.root)

    def _opened(self, file: Any, mode: str = "r", *args: Any, **options: Any) -> Any:
        if not set("wxa+") & set(mode) or not self._ours(file):
            return self._open(file, mode, *args, **options)
        self.strike("open")
        return Watched(self._open(file, mode, *args, **options), self)

    def strike(self, name: str, before: Callable[[], object] = lambda: None) -> None:
        self.seen.append(name)
        number = len(self.seen) - 1
        if self.at is None or number < self.at or (number > self.at and not self.lasting):
            return
        before()
        if self.errno is not None:
            raise OSError(self.errno, os.strerror(self.errno), "injected")
        os.kill(os.getpid(), signal.SIGKILL)


class Watched:
    """An open file whose writes count; a write that is struck has half of its bytes on disk."""

    def __init__(self, stream: Any, striking: Striking) -> None:
        self._stream, self._striking = stream, striking

    def write(self, data: Any) -> Any:
        def half() -> None:
            self._stream.write(
                data[: len(data) // 2] if isinstance(data, str | bytes) else bytes(data)[: len(data) // 2]
            )
            self._stream.flush()

        self._striking.strike("write", half)
        return self._stream.write(data)

    def __enter__(self) -> Watched:
        return self

    def __exit__(self, *_: object) -> None:
        self._stream.close()

    def __getattr__(self, name: str) -> Any:
        return getattr(self._stream, name)
