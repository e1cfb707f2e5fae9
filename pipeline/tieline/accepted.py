"""Accepted values of reference materials: one row per material and analyte, with unit, sd and source."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.chemistry.names import nearest_names, recognise_analyte
from tieline.chemistry.oxides import parse_oxide
from tieline.errors import InputError, Problem
from tieline.reading.input_file import InputFile
from tieline.reading.records import read_labels, read_records

COLUMNS = ("material", "analyte", "value", "unit", "sd", "source")


@dataclass(frozen=True)
class AcceptedValue:
    """The accepted concentration of one element in one material, in ppm; sd 0 where none is given."""

    value_ppm: float
    sd_ppm: float
    source: str


def read_accepted_values(files: Mapping[str, InputFile]) -> dict[tuple[str, str], AcceptedValue]:
    """(material, element) -> accepted value, from a table with the columns of `COLUMNS`.

    Raises InputError listing every row that cannot be used: unknown analyte or unit, no positive value,
    the same element of one material twice.
    """
    accepted: dict[tuple[str, str], AcceptedValue] = {}
    problems: list[Problem] = []
    for file in files.values():
        records = read_records(
            file,
            {name: name for name in COLUMNS},
            numbers=frozenset({"value", "sd"}),
            required=frozenset({"material", "analyte", "value", "unit"}),
        )
        for position, row in enumerate(records["row"]):
            record = {name: records[name][position] for name in COLUMNS}
            found = _accepted(record, file.path, int(row), problems)
            if found is None:
                continue
            key, value = found
            if key in accepted:
                problems.append(
                    Problem(
                        f"{key[1]} of {key[0]} stands twice.", file.path, int(row), "analyte", "Keep one."
                    )
                )
            accepted[key] = value
    if problems:
        raise InputError(problems)
    return accepted


def material_names(files: Mapping[str, InputFile]) -> dict[str, tuple[str, ...]]:
    """The materials of the accepted values, each its own only spelling; nothing else of the table is judged."""
    names = {name for file in files.values() for name in read_labels(file, "material")}
    return {name: (name,) for name in sorted(names)}


def _accepted(
    record: Mapping[str, object], file: str, row: int, problems: list[Problem]
) -> tuple[tuple[str, str], AcceptedValue] | None:
    found = concentration(record, file, row, problems)
    if not record["material"]:
        problems.append(
            Problem("the material has no name.", file, row, "material", "Name it as in the spot tables.")
        )
        return None
    return None if found is None else ((str(record["material"]), found[0]), found[1])


def concentration(
    record: Mapping[str, object], file: str, row: int, problems: list[Problem]
) -> tuple[str, AcceptedValue] | None:
    """Element and concentration of a record with analyte, value, unit and, if given, sd and source.

    sd_ppm is 0 where none is given. None, and the reasons added to `problems`, where it cannot be used.
    """
    analyte = recognise_analyte(str(record["analyte"] or ""))
    unit = str(record["unit"] or "").strip()
    value, sd = float(record["value"]), float(record["sd"])  # type: ignore[arg-type]
    before = len(problems)
    if analyte is None or analyte.element is None:
        names = nearest_names(str(record["analyte"]))
        remedy = f'Did you mean "{names[0]}"?' if names else "Write an oxide, element or isotope."
        problems.append(Problem(f"{record['analyte']!r} is no analyte.", file, row, "analyte", remedy))
    if _unit(unit) is None:
        problems.append(Problem(f"{unit!r} is no unit.", file, row, "unit", "Write wt%, ppm or ppb."))
    if not value > 0:
        problems.append(
            Problem(
                "the accepted value is not a positive number.", file, row, "value", "Correct or delete it."
            )
        )
    if sd < 0:
        problems.append(
            Problem("the standard uncertainty is negative.", file, row, "sd", "Correct it or leave it blank.")
        )
    if len(problems) > before or analyte is None or analyte.element is None:
        return None
    fraction = parse_oxide(analyte.name).element_fraction if analyte.kind == "oxide" else 1.0
    factor = PPM_PER_UNIT[_unit(unit) or "ppm"] * fraction
    sd_ppm = 0.0 if np.isnan(sd) else sd * factor
    return analyte.element, AcceptedValue(value * factor, sd_ppm, str(record.get("source") or ""))


def _unit(text: str) -> str | None:
    """wt%, ppm or ppb for any usual spelling."""
    analyte = recognise_analyte(f"Ni ({text})") if text else None
    return analyte.unit if analyte is not None and analyte.unit in PPM_PER_UNIT else None
