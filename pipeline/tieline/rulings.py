"""Rulings: a person's recorded decisions to keep or drop a spot or one of its analytes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

from tieline.errors import InputError, Problem
from tieline.reading.cell_text import fold
from tieline.reading.formats import read_grid
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.reading.records import read_texts

COLUMNS = ("spot", "analyte", "verdict", "analyst", "date", "reason")
OPTIONAL = ("table",)
NAMES = (*COLUMNS, *OPTIONAL)
VERDICTS = ("keep", "drop")
ALL_ANALYTES = "*"
QUOTES = "Put a text that holds the separator in double quotes."
IF_BLANK = {"analyte": "Write * for the whole spot."}


@dataclass(frozen=True)
class Ruling:
    """One line of a table of rulings; `file` and `row` say where it stands."""

    spot: str
    analyte: str
    verdict: str
    analyst: str
    date: str
    reason: str
    table: str | None
    file: str
    row: int


def read_rulings(files: Mapping[str, InputFile]) -> tuple[Ruling, ...]:
    """The rulings of every file given. Raises InputError with every incomplete or contradictory one."""
    rulings, problems = rulings_as_written(files)
    if problems:
        raise InputError(problems)
    return rulings


def rulings_as_written(files: Mapping[str, InputFile]) -> tuple[tuple[Ruling, ...], tuple[Problem, ...]]:
    """The rulings of every file given, and what is wrong with them as they stand.

    A ruling with a problem is among the rulings all the same, blank cells as empty texts, so that
    `ruled_spots` can tell in one go what else is wrong with it.
    """
    rulings: list[Ruling] = []
    problems: list[Problem] = []
    for path in sorted(files):
        found, wrong = _rulings_of(files[path])
        rulings += found
        problems += wrong
    return tuple(rulings), (*problems, *contradictions(rulings))


def _rulings_of(file: InputFile) -> tuple[list[Ruling], list[Problem]]:
    try:
        texts = read_texts(file, {name: name for name in NAMES}, frozenset(COLUMNS))
        columns = {name: texts.columns[name].to_pylist() for name in NAMES}
        rows, problems = texts.rows.tolist(), []
    except InputError as error:
        # Missing columns and rows of another length are told; what is wrong elsewhere is told with them.
        problems = [_with_remedy(problem) for problem in error.problems]
        columns, rows = _readable(file)
    rulings = []
    for position, row in enumerate(rows):
        record = {name: column[position].strip() for name, column in columns.items()}
        if not any(record.values()):
            continue
        problems += _problems_of(file.path, row, record)
        record = dict.fromkeys(COLUMNS, "") | record
        record["verdict"] = record["verdict"].casefold()
        table = record.pop("table", "") or None
        rulings.append(Ruling(**record, table=table, file=file.path, row=row))
    return rulings, sorted(problems, key=lambda problem: problem.row or 0)


def _with_remedy(problem: Problem) -> Problem:
    """A line of another length is mostly a reason with a comma in it."""
    is_line = problem.row is not None and problem.column is None
    return replace(problem, remedy=problem.remedy or QUOTES) if is_line else problem


def _readable(file: InputFile) -> tuple[dict[str, list[str]], list[int]]:
    """The columns that are there and the rows as long as the header, with their numbers."""
    try:
        grid = read_grid(file, Layout(expected_headers=NAMES, units_row=False))
    except InputError:
        return {}, []
    places = {fold(header): index for index, header in enumerate(grid.headers)}
    columns = {name: grid.column(places[name]).to_pylist() for name in NAMES if name in places}
    return columns, grid.rows().tolist()


def _problems_of(path: str, row: int, record: Mapping[str, str]) -> list[Problem]:
    """What is wrong with one line by itself; a column that the table lacks has been told for all lines."""
    problems = [
        Problem("the cell is blank.", path, row, name, IF_BLANK.get(name, ""))
        for name in COLUMNS
        if record.get(name) == ""
    ]
    verdict, day = record.get("verdict"), record.get("date")
    if verdict and verdict.casefold() not in VERDICTS:
        problems.append(
            Problem(f'"{verdict}" is neither keep nor drop.', path, row, "verdict", "Write keep or drop.")
        )
    if day and not _is_date(day):
        problems.append(
            Problem(f'"{day}" is not a date.', path, row, "date", "Write year-month-day, as 2024-03-09.")
        )
    return problems


def _is_date(text: str) -> bool:
    try:
        date.fromisoformat(text)
    except ValueError:
        return False
    return True


def contradictions(rulings: Sequence[Ruling]) -> list[Problem]:
    """Rulings that say the opposite of an earlier one on the same spot, table and analyte, as they are written."""
    first: dict[tuple[str, str | None, str], Ruling] = {}
    problems = []
    for ruling in rulings:
        if ruling.verdict not in VERDICTS or not (ruling.spot and ruling.analyte):
            continue
        earlier = first.setdefault((ruling.spot, ruling.table, ruling.analyte), ruling)
        if earlier.verdict != ruling.verdict:
            problems.append(
                Problem(
                    f'"{ruling.verdict}" contradicts the ruling in row {earlier.row} of {earlier.file}, '
                    f'which says "{earlier.verdict}" for the same spot and analyte.',
                    ruling.file,
                    ruling.row,
                    "verdict",
                    "Remove one of the two.",
                )
            )
    return problems
