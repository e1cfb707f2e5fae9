"""Reads the tables and writes the configuration; the only part of `starting` that touches files."""

from __future__ import annotations

import os
import re
from collections.abc import Sequence
from pathlib import Path

from tieline.errors import InputError, Problem
from tieline.reading.grid import ReadLimits
from tieline.reading.input_file import InputFile
from tieline.starting.configuration_text import QUESTION, first_configuration
from tieline.storage import read_input, write_text


def write_first_configuration(tables: Sequence[Path], target: Path | None) -> tuple[Path, list[str]]:
    """Writes a configuration beside the first table, or to `target`, and returns its path and open questions.

    Raises InputError where a table cannot be read or the target exists: nothing is ever overwritten.
    """
    target = target if target is not None else tables[0].parent / "session.toml"
    if target.exists():
        raise InputError(
            Problem(
                "exists already; nothing is overwritten.", str(target), remedy="Name another file with --to."
            )
        )
    files: list[InputFile] = []
    problems: list[Problem] = []
    for table in tables:
        try:
            path = Path(os.path.relpath(table, target.parent)).as_posix()
            files.append(read_input(table, path, ReadLimits().expanded_bytes))
        except InputError as error:
            problems += error.problems
        except (OSError, ValueError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            problems.append(Problem(f"cannot be read: {reason}.", str(table)))
    if problems:
        raise InputError(problems)
    session = re.sub(r"[^A-Za-z0-9._-]+", "-", tables[0].resolve().parent.name).strip("-._") or "session"
    text = first_configuration(files, session)
    write_text(target, text)
    questions = [
        line.removeprefix(QUESTION).strip() for line in text.splitlines() if line.startswith(QUESTION)
    ]
    return target, questions
