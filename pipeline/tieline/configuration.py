"""From a TOML file to settings: every problem at once, unknown keys with the nearest known one."""

from __future__ import annotations

import json
import os
import re
import tomllib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from tieline.errors import InputError, Problem, nearest
from tieline.settings import SessionSettings

# A spot-table configuration is a few kilobytes; anything far larger is not one.
LARGEST_CONFIGURATION_BYTES = 2_000_000
DEEPEST = 50  # no key stands deeper than six sections


@dataclass(frozen=True)
class Session:
    """A validated configuration and where it stands. `overrides` are the `--set` texts in effect."""

    path: Path
    settings: SessionSettings
    run_folder: Path
    overrides: tuple[str, ...] = ()

    def resolve(self, path: str) -> Path:
        """A path of the configuration, relative to the file that names it."""
        return self.path.parent / path


def configured_run_folder(session: Session) -> Path:
    """The run folder that the configuration itself names, whatever `--out` said."""
    return Path(os.path.normpath(session.path.parent / session.settings.out / session.settings.session))


def load(path: Path, *, overrides: Sequence[str] = (), out: Path | None = None) -> Session:
    """Reads and validates a configuration; raises InputError with every problem found."""
    session, problems = read(path, overrides=overrides, out=out)
    if problems:
        raise InputError(problems)
    return session


def read(
    path: Path, *, overrides: Sequence[str] = (), out: Path | None = None
) -> tuple[Session, list[Problem]]:
    """The session and the problems of its configuration that do not keep its tables from being looked at.

    Those are unknown keys: without them the rest stands, so that the problems of configuration and tables
    can be told in one go. Raises InputError for anything worse.
    """
    text = _read(path)
    try:
        data = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # a number of thousands of digits is a plain ValueError
        raise InputError(
            Problem(f"not valid TOML: {error}.", str(path), remedy="Correct the line named.")
        ) from None
    for override in overrides:
        _override(data, override)
    settings, problems = validate(data, str(path))
    problems = [*_open_questions(text, str(path)), *problems]
    out = out if out is not None else path.parent / settings.out
    if "\0" in str(out):
        raise InputError(Problem("no folder's name holds a NUL character.", str(path), column="out"))
    # Tidied for people to read: configs/../runs/x is runs/x.
    folder = Path(os.path.normpath(out / settings.session))
    return Session(path, settings, folder, tuple(overrides)), problems


def _open_questions(text: str, file: str) -> list[Problem]:
    """Lines that `tieline start` wrote because the tables do not tell."""
    return [
        Problem(
            f"not decided: {line.split(':', 1)[1].strip()}",
            file,
            row,
            remedy="Answer it and delete the line.",
        )
        for row, line in enumerate(text.splitlines(), start=1)
        if re.match(r"\s*#\s*decide:", line)
    ]


def validate(data: dict[str, Any], file: str) -> tuple[SessionSettings, list[Problem]]:
    """Settings from parsed TOML, and the unknown keys left out of them.

    Strict about types, but TOML arrays serve as tuples. Raises InputError when more is wrong than keys.
    """
    if _deeper_than(data, DEEPEST):
        raise InputError(
            Problem(f"sections within sections, more than {DEEPEST} deep; no key stands there.", file)
        )
    # A date is no text: as a section it is refused wherever it stands.
    try:
        text = json.dumps(data, default=lambda value: {"date or time": str(value)})
    except ValueError as error:
        raise InputError(Problem(f"a whole number is too large: {error}.", file)) from None
    try:
        return SessionSettings.model_validate_json(text, strict=True), []
    except ValidationError as error:
        details = error.errors()
    problems = [_problem(detail, file) for detail in details]
    known = json.loads(text)
    for detail in details:
        if detail["type"] != "extra_forbidden":
            raise InputError(problems)
        *parents, last = detail["loc"]
        section = known
        for part in parents:
            section = section[part]
        section.pop(last, None)
    try:
        return SessionSettings.model_validate_json(json.dumps(known), strict=True), problems
    except ValidationError:
        raise InputError(problems) from None


def _deeper_than(data: Any, most: int) -> bool:
    """Whether sections and arrays are nested deeper than `most`; level by level, for any depth."""
    level = [data]
    for _ in range(most):
        level = [
            item
            for value in level
            if isinstance(value, dict | list)
            for item in (value.values() if isinstance(value, dict) else value)
        ]
    return any(isinstance(value, dict | list) for value in level)


def _read(path: Path) -> str:
    try:
        if path.is_dir():
            raise InputError(Problem("is a folder.", str(path), remedy="Name the TOML file in it."))
        if not path.is_file() and path.exists():
            raise InputError(Problem("is a device or a pipe.", str(path), remedy="Name a TOML file."))
        if path.stat().st_size > LARGEST_CONFIGURATION_BYTES:
            raise InputError(
                Problem("too large for a configuration.", str(path), remedy="Name the TOML file.")
            )
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        others = [other.name for other in path.parent.glob("*.toml")] if path.parent.is_dir() else []
        remedy = nearest(path.name, others) or "Name an existing TOML file."
        raise InputError(Problem("no such configuration file.", str(path), remedy=remedy)) from None
    except UnicodeDecodeError:
        raise InputError(Problem("not a UTF-8 text.", str(path), remedy="Save it as UTF-8.")) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(Problem(f"cannot be read: {reason}.", str(path))) from None


def _override(data: dict[str, Any], text: str) -> None:
    """Applies one `section.key=value`; the value is TOML, or a bare text where it is not."""
    match = re.fullmatch(r"([A-Za-z0-9_.-]+)\s*=\s*(.*)", text, re.DOTALL)
    if not match:
        raise InputError(
            Problem(
                f"--set {text!r} is not of the form key=value.",
                remedy="Write for example screen.total.sigmas=3.",
            )
        )
    *parents, last = match.group(1).split(".")
    for key in parents:
        data = data.setdefault(key, {})
        if not isinstance(data, dict):
            raise InputError(
                Problem(f"--set {text!r}: {key} is not a section.", remedy="Name a section's key.")
            )
    try:
        data[last] = tomllib.loads(f"value = {match.group(2)}")["value"]
    except (ValueError, RecursionError):
        data[last] = match.group(2)


def _problem(detail: Any, file: str) -> Problem:
    location = tuple(str(part) if not isinstance(part, int) else part + 1 for part in detail["loc"])
    key = ".".join(str(part) for part in location)
    if detail["type"] == "extra_forbidden":
        known = _known_keys(detail["loc"][:-1])
        remedy = nearest(str(detail["loc"][-1]), known) or (
            f"Known keys: {', '.join(sorted(known))}." if known else ""
        )
        return Problem("unknown key.", file, column=key, remedy=remedy)
    if detail["type"] == "missing":
        return Problem("this key is required.", file, column=key, remedy="Add it.")
    return Problem(
        f"{detail['msg']}; found {json.dumps(detail['input'], default=str)[:80]}.", file, column=key
    )


def _known_keys(location: Sequence[Any]) -> set[str]:
    """The keys a section knows, found by walking the settings models along a location."""
    models: list[type[BaseModel]] = [SessionSettings]
    for part in location:
        annotations = [model.model_fields[part].annotation for model in models if part in model.model_fields]
        # Positions in arrays and names in mappings do not change the model that is meant.
        models = [found for annotation in annotations for found in _models(annotation)] or models
    return {name for model in models for name in model.model_fields}


def _models(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [found for argument in get_args(annotation) for found in _models(argument)]
