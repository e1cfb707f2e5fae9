"""Settings that differ from the program's defaults, or from a laboratory's own."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from tieline.errors import InputError, Problem
from tieline.plan import settings_differences
from tieline.settings import SessionSettings
from tieline.settings.ingest import Table

# What every session must say for itself: names and places of its own tables.
OWN_OF_A_SESSION = ("session", "out", "report")
OWN_OF_INGEST = ("tables", "phases", "experiments", "reference_materials")
OWN_OF_A_TABLE = (
    "path", "technique", "batch", "unit", "experiment", "phase", "columns", "labels", "sigma", "limit", "analytes",
    "sheet", "header_row", "units_row", "skip_rows", "delimiter", "decimal", "thousands", "encoding",
)  # fmt: skip


def deviations(settings: SessionSettings, against: Path | None) -> list[str]:
    """`screen.total.sigmas 2.0 → 3.0`: from the default, or from the laboratory's file, to what was used.

    Names and places of the session's own tables are left out; how cells are read is not. Raises InputError
    where the laboratory's file cannot be read.
    """
    used = settings.model_dump(mode="json")
    usual = _usual(settings, against).model_dump(mode="json")
    lines = settings_differences(_judgement(usual), _judgement(used), longest=None)
    table = Table(path="-").model_dump(mode="json")
    for position, (own, other) in enumerate(
        zip(used["ingest"]["tables"], usual["ingest"]["tables"], strict=True), start=1
    ):
        before, after = (_without(one, OWN_OF_A_TABLE) for one in (other if against else table, own))
        lines += settings_differences(before, after, f"ingest.tables[{position}]", longest=None)
    return lines


def _usual(settings: SessionSettings, against: Path | None) -> SessionSettings:
    """The defaults, or the laboratory's settings, for the tables of this session."""
    given: dict[str, Any] = {} if against is None else _read(against)
    ingest = {
        **given.get("ingest", {}),
        "tables": [table.model_dump(mode="json") for table in settings.ingest.tables],
    }
    data = {**given, "session": settings.session, "ingest": ingest}
    from tieline.configuration import validate

    usual, problems = validate(data, str(against or "defaults"))
    if problems:
        raise InputError(problems)
    return usual


def _read(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except OSError as error:
        problem = Problem(
            f"cannot be read: {error.strerror}.", str(path), remedy="Name the laboratory's TOML file."
        )
    except ValueError as error:
        problem = Problem(f"not valid TOML: {error}.", str(path), remedy="Correct the line named.")
    raise InputError(problem)


def _judgement(settings: dict[str, Any]) -> dict[str, Any]:
    kept = _without(settings, OWN_OF_A_SESSION)
    screen = {key: value for key, value in kept["screen"].items() if key != "rulings"}
    return {**kept, "ingest": _without(kept["ingest"], OWN_OF_INGEST), "screen": screen}


def _without(section: dict[str, Any], names: tuple[str, ...]) -> dict[str, Any]:
    return {key: value for key, value in section.items() if key not in names}
