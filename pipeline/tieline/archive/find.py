"""Which files below a folder are session configurations, and which laboratory each belongs to."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

from tieline.manifest import MANIFEST


@dataclass(frozen=True)
class Unit:
    """One session of an archive. `name` is its path below the root; `problem` says why it cannot be reduced."""

    name: str
    path: Path
    laboratory: str
    session: str = ""
    problem: str = ""


def find_units(root: Path, dataset: Path) -> list[Unit]:
    """Every TOML file with `session` and `ingest` below a folder, in the order of laboratory, session and name.

    The laboratory is the configuration's own, else the first folder below the root, else the root itself. Run
    folders, hidden folders and the dataset are not looked into. A file that is no TOML comes with its problem,
    and so do two configurations of one laboratory and session, for their results would overwrite each other.
    """
    units = [unit for path in _toml_files(root, dataset) if (unit := _unit(root, path)) is not None]
    units.sort(key=lambda unit: (unit.laboratory, unit.session, unit.name))
    first: dict[tuple[str, str], Unit] = {}
    for unit in units:
        first.setdefault((unit.laboratory, unit.session.casefold()), unit)
    return [_told_apart(unit, first[unit.laboratory, unit.session.casefold()]) for unit in units]


def _told_apart(unit: Unit, first: Unit) -> Unit:
    if unit is first or unit.problem:
        return unit
    return replace(unit, problem=f"{first.name} has the same laboratory and session; rename one of them.")


def _toml_files(root: Path, dataset: Path) -> Iterator[Path]:
    for folder, folders, files in os.walk(root):
        here = Path(folder)
        if MANIFEST in files or here.resolve() == dataset.resolve():
            folders.clear()
            continue
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        yield from (here / name for name in sorted(files) if name.endswith(".toml"))


def _unit(root: Path, path: Path) -> Unit | None:
    name = path.relative_to(root)
    folder = name.parts[0] if len(name.parts) > 1 else root.resolve().name
    unit = Unit(name.as_posix(), path, folder)
    try:
        data = tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except (OSError, ValueError, RecursionError) as error:
        return replace(unit, session=path.stem, problem=f"cannot be read: {error}")
    if not {"session", "ingest"} <= set(data):
        return None
    about = data.get("about")
    laboratory = about.get("laboratory") if isinstance(about, dict) else None
    return replace(unit, laboratory=str(laboratory or folder), session=str(data["session"]))
