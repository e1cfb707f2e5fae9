"""The command line called in this process, as a terminal of a given encoding would see it."""

from __future__ import annotations

import contextlib
import io
import sys
from collections.abc import Mapping
from typing import NamedTuple
from unittest import mock

from tieline import cli


class Done(NamedTuple):
    """What a command left: exit status, standard output, standard error."""

    status: int
    stdout: str
    stderr: str


def tieline(*arguments: str, environment: Mapping[str, str] | None = None, encoding: str = "utf-8") -> Done:
    """Runs one command and returns how it ended; an exception that is no exit is a defect and comes through."""
    out, err = (io.TextIOWrapper(io.BytesIO(), encoding=encoding, newline="\n") for _ in range(2))
    with (
        mock.patch.dict("os.environ", environment or {}),
        mock.patch.object(sys, "argv", ["tieline", *arguments]),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        status = 0
        try:
            cli.main()
        except SystemExit as stop:
            status = int(stop.code or 0)
        for stream in (out, err):
            stream.flush()
    return Done(status, *(stream.buffer.getvalue().decode(encoding) for stream in (out, err)))
