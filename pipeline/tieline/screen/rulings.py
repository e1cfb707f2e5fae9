"""Rulings: a person's recorded decisions to keep or drop a spot or one of its analytes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date

import numpy as np

from tieline.arrays import labels
from tieline.errors import InputError, Problem, nearest
from tieline.reading.input_file import InputFile
from tieline.reading.records import read_records
from tieline.screen.findings import RULING, WHOLE_SPOT, Findings, no_findings
from tieline.screen.session import Session

COLUMNS = ("spot", "analyte", "verdict", "analyst", "date", "reason")
OPTIONAL = ("table",)
VERDICTS = ("keep", "drop")
ALL_ANALYTES = "*"


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
    rulings: list[Ruling] = []
    problems: list[Problem] = []
    for path in sorted(files):
        found, wrong = _rulings_of(files[path])
        rulings += found
        problems += wrong
    problems += _contradictions(rulings)
    if problems:
        raise InputError(problems)
    return tuple(rulings)


def _rulings_of(file: InputFile) -> tuple[list[Ruling], list[Problem]]:
    names = {name: name for name in (*COLUMNS, *OPTIONAL)}
    problems: list[Problem] = []
    try:
        records = read_records(file, names, required=frozenset(COLUMNS))
    except InputError as error:
        problems = list(error.problems)
        try:
            # Missing columns and blank cells are told; what else is wrong in the file is told with them.
            records = read_records(file, names, required=frozenset())
        except InputError:
            return [], problems
    rulings = []
    for position, row in enumerate(records["row"]):
        record = {name: records[name][position] for name in names}
        problems += _problems_of(file.path, int(row), record)
        if all(record[name] for name in COLUMNS):
            record["verdict"] = record["verdict"].casefold()
            rulings.append(Ruling(**record, file=file.path, row=int(row)))
    return rulings, sorted(problems, key=lambda problem: problem.row or 0)


def _problems_of(path: str, row: int, record: Mapping[str, str | None]) -> list[Problem]:
    problems = []
    verdict, day = record["verdict"], record["date"]
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


def ruling_findings(rulings: Sequence[Ruling], session: Session) -> Findings:
    """Every ruling as a finding on its spot. Raises InputError for spots and analytes that do not exist."""
    if not rulings:
        return no_findings(RULING)
    spots, analytes, problems = [], [], []
    index = _SpotIndex(session)
    decided: dict[tuple[int, int], Ruling] = {}
    for ruling in rulings:
        found = index.spot(ruling)
        if isinstance(found, Problem):
            problems.append(found)
            continue
        analyte = index.analyte(ruling, found)
        if isinstance(analyte, Problem):
            problems.append(analyte)
            continue
        earlier = decided.setdefault((found, analyte), ruling)
        if earlier.verdict != ruling.verdict:
            problems += _contradictions([earlier, _with_table(ruling, earlier)])
        spots.append(found)
        analytes.append(analyte)
    if problems:
        raise InputError(problems)
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
    from dataclasses import replace

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
