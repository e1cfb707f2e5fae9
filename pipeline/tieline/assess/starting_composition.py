"""The starting composition of the experiments: the input file of the mass balance."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from tieline.accepted import concentration
from tieline.errors import InputError, Problem
from tieline.reading.input_file import InputFile
from tieline.reading.records import read_records

COLUMNS = ("analyte", "value", "unit", "sd", "source", "experiment")


@dataclass(frozen=True)
class Start:
    """Concentration of one element in the starting material, ppm; sd 0 where none is given."""

    value_ppm: float
    sd_ppm: float


def read_starting_composition(files: Mapping[str, InputFile]) -> dict[tuple[str | None, str], Start]:
    """(experiment, element) -> concentration; experiment None where the row holds for all of them.

    Columns analyte, value, unit, and optionally sd, source and experiment. Raises InputError listing every row that cannot
    be used: unknown analyte or unit, no positive value, the same element twice.
    """
    found: dict[tuple[str | None, str], Start] = {}
    problems: list[Problem] = []
    for file in files.values():
        records = read_records(
            file, {name: name for name in COLUMNS}, frozenset({"value", "sd"}), frozenset(COLUMNS[:3])
        )
        for position, row in enumerate(records["row"]):
            record = {name: records[name][position] for name in COLUMNS}
            one = concentration(record, file.path, int(row), problems)
            if one is None:
                continue
            key = record["experiment"], one[0]
            if key in found:
                problems.append(
                    Problem(f"{one[0]} stands twice.", file.path, int(row), "analyte", "Keep one.")
                )
            found[key] = Start(one[1].value_ppm, one[1].sd_ppm)
    if problems:
        raise InputError(problems)
    return found
