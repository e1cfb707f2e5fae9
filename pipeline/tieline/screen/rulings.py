"""Rulings: a person's recorded decisions to keep or drop a spot or one of its analytes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

import numpy as np

from tieline.arrays import labels
from tieline.errors import InputError, Problem, nearest
from tieline.reading.cell_text import fold
from tieline.reading.formats import read_grid
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.reading.records import read_texts
from tieline.screen.findings import RULING, WHOLE_SPOT, Findings, no_findings
from tieline.screen.session import Session

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
    `ruling_findings` can tell in one go what else is wrong with it.
    """
    rulings: list[Ruling] = []
    problems: list[Problem] = []
    for path in sorted(files):
        found, wrong = _rulings_of(files[path])
        rulings += found
        problems += wrong
    return tuple(rulings), (*problems, *_contradictions(rulings))


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


def _contradictions(rulings: Sequence[Ruling]) -> list[Problem]:
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


def ruling_findings(
    rulings: Sequence[Ruling], session: Session, malformed: Sequence[Problem] = ()
) -> Findings:
    """Every ruling as a finding on its spot.

    malformed: the problems of `rulings_as_written`. Raises InputError with these and with every spot and
    analyte that does not exist.
    """
    if not rulings and not malformed:
        return no_findings(RULING)
    spots, analytes, problems = [], [], list(malformed)
    index = _SpotIndex(session)
    decided: dict[tuple[int, int], Ruling] = {}
    for ruling in rulings:
        found = index.place(ruling)
        if isinstance(found, Problem):
            problems.append(found)
        elif found is not None:
            earlier = decided.setdefault(found, ruling)
            if earlier.verdict != ruling.verdict:
                problems += _contradictions([earlier, _with_table(ruling, earlier)])
            spots.append(found[0])
            analytes.append(found[1])
    if problems:
        raise InputError(dict.fromkeys(problems))
    unknown = np.full(len(spots), np.nan)
    return Findings(
        RULING,
        np.array(spots, dtype=np.int64),
        np.array(analytes, dtype=np.int64),
        unknown,
        unknown,
        unknown,
        [ruling.verdict for ruling in rulings],
        [f"{ruling.reason} ({ruling.analyst}, {ruling.date})" for ruling in rulings],
    )


def _with_table(ruling: Ruling, earlier: Ruling) -> Ruling:
    """The ruling as if it named its spot the way the earlier one does."""
    return replace(ruling, table=earlier.table)


class _SpotIndex:
    """Finds spots and their analytes by the texts a ruling gives."""

    def __init__(self, session: Session) -> None:
        self._session = session
        keys = session.spots.keys
        self._label, self._table = labels(keys, "spot"), labels(keys, "table")
        self._order = np.argsort(self._label.codes, kind="stable")
        self._sorted = self._label.codes[self._order]
        self._code = {text: code for code, text in enumerate(self._label.texts)}
        self._analytes = {text: code for code, text in enumerate(session.analyte.texts)}

    def place(self, ruling: Ruling) -> tuple[int, int] | Problem | None:
        """Numbers of the ruling's spot and analyte; None where their cells are blank, which has been told."""
        if not ruling.spot:
            return None
        spot = self.spot(ruling)
        if isinstance(spot, Problem):
            return spot
        if not ruling.analyte:
            return None
        analyte = self.analyte(ruling, spot)
        return analyte if isinstance(analyte, Problem) else (spot, analyte)

    def spot(self, ruling: Ruling) -> int | Problem:
        code = self._code.get(ruling.spot)
        if code is None:
            remedy = nearest(ruling.spot, self._label.texts) if len(self._label.texts) < 5000 else ""
            return Problem(f'no spot is called "{ruling.spot}".', ruling.file, ruling.row, "spot", remedy)
        first, last = np.searchsorted(self._sorted, [code, code + 1])
        candidates = self._order[first:last]
        tables = [self._table.texts[self._table.codes[spot]] for spot in candidates]
        if ruling.table is not None:
            candidates = candidates[[table == ruling.table for table in tables]]
            if not len(candidates):
                remedy = f"It occurs in {', '.join(sorted(set(tables)))}."
                return Problem(
                    f'no spot of table "{ruling.table}" is called "{ruling.spot}".',
                    ruling.file, ruling.row, "table", remedy,
                )  # fmt: skip
        if len(candidates) > 1:
            return Problem(
                f'"{ruling.spot}" occurs in {", ".join(sorted(set(tables)))}.',
                ruling.file, ruling.row, "spot", "Name one of them in a column `table`.",
            )  # fmt: skip
        spot = int(candidates[0])
        if not self._session.spots.is_unknown[spot]:
            return Problem(
                f'"{ruling.spot}" is a reference material, which never enters a phase mean.',
                ruling.file, ruling.row, "spot", "Rulings are for unknowns; remove this one.",
            )  # fmt: skip
        return spot

    def analyte(self, ruling: Ruling, spot: int) -> int | Problem:
        if ruling.analyte == ALL_ANALYTES:
            return WHOLE_SPOT
        code = self._analytes.get(ruling.analyte, -1)
        of_spot = self._analytes_of(spot)
        if code in of_spot:
            return code
        known = [self._session.analyte.texts[other] for other in of_spot]
        remedy = nearest(ruling.analyte, known) or f"It has {', '.join(sorted(known))}."
        return Problem(
            f'spot "{ruling.spot}" has no analyte "{ruling.analyte}".',
            ruling.file,
            ruling.row,
            "analyte",
            remedy,
        )

    def _analytes_of(self, spot: int) -> list[int]:
        for measured in self._session.techniques:
            row = int(np.searchsorted(measured.spots, spot))
            if row < len(measured.spots) and measured.spots[row] == spot:
                return [int(code) for code in measured.analyte_codes[measured.present[row]]]
        return []
