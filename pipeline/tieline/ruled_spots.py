"""Rulings placed on the spots and rows of a table; shared by the stages that follow them."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.arrays import BoolArray, IntArray, Labels, counts, is_labelled, labels, narrow_labels, spot_codes
from tieline.errors import InputError, Problem, nearest
from tieline.rulings import ALL_ANALYTES, Ruling, contradictions

RULING = "ruling"
WHOLE_SPOT = -1


@dataclass(frozen=True)
class SpotRows:
    """Spots of a table of spot x analyte. keys (spots,): their label, table and row; of_row, analyte (rows,): the
    number of the spot and the analyte of every row."""

    keys: pa.Table
    of_row: npt.NDArray[Any]
    analyte: Labels

    def analytes_of(self, spots: Collection[int]) -> dict[int, list[int]]:
        """Codes of the analytes that some spots have."""
        wanted = np.zeros(self.keys.num_rows, dtype=np.bool_)
        wanted[list(spots)] = True
        rows = np.flatnonzero(wanted[self.of_row])
        found: dict[int, list[int]] = {}
        for spot, code in zip(self.of_row[rows].tolist(), self.analyte.codes[rows].tolist(), strict=True):
            found.setdefault(spot, []).append(code)
        return found


@dataclass(frozen=True)
class Placed:
    """Rulings by number of spot and code of analyte (n,), WHOLE_SPOT for all it has; drops (n,): the verdict."""

    spot: IntArray
    analyte: IntArray
    drops: BoolArray

    def dropped_rows(self, spots: SpotRows) -> BoolArray:
        """Rows (rows,) that the rulings leave out; one on an analyte goes before one on its whole spot."""
        dropped = np.zeros((spots.keys.num_rows, len(spots.analyte.texts)), dtype=np.bool_)
        whole = self.analyte == WHOLE_SPOT
        dropped[self.spot[whole & self.drops]] = True
        dropped[self.spot[~whole], self.analyte[~whole]] = self.drops[~whole]
        rows: BoolArray = dropped[spots.of_row, spots.analyte.codes]
        return rows


def spot_rows(convert: pa.Table) -> SpotRows:
    """The spots of a `convert` table."""
    of_row, first = spot_codes(convert)
    keys = convert.select(["spot", "table", "row"]).take(pa.array(first))
    return SpotRows(keys, of_row, narrow_labels(convert, "analyte"))


def placed(rulings: Sequence[Ruling], spots: SpotRows, malformed: Sequence[Problem] = ()) -> Placed:
    """Every ruling with the spot and analyte it is about.

    malformed: the problems of `rulings_as_written`. Raises InputError with these and with every spot and
    analyte that does not exist.
    """
    index = _SpotIndex(spots, rulings)
    problems = list(malformed)
    decided: dict[tuple[int, int], Ruling] = {}
    places = []
    for ruling in rulings:
        place = index.place(ruling)
        if isinstance(place, Problem):
            problems.append(place)
        elif place is not None:
            earlier = decided.setdefault(place, ruling)
            if earlier.verdict != ruling.verdict:
                # Compared as if it named its spot the way the earlier one does.
                problems += contradictions([earlier, replace(ruling, table=earlier.table)])
            places.append(place)
    if problems:
        raise InputError(dict.fromkeys(problems))
    spot, analyte = np.array(places, dtype=np.int64).reshape(-1, 2).T
    return Placed(spot, analyte, np.array([ruling.verdict == "drop" for ruling in rulings], dtype=np.bool_))


def dropped_rows(
    convert: pa.Table, rulings: Sequence[Ruling], malformed: Sequence[Problem] = ()
) -> BoolArray | None:
    """Rows (rows,) of `convert` that rulings drop, whatever any test says; None where there is no ruling.

    malformed: the problems of `rulings_as_written`. Raises InputError as `placed` does.
    """
    if not rulings and not malformed:
        return None
    spots = spot_rows(convert)
    return placed(rulings, spots, malformed).dropped_rows(spots)


def reference_rows_ruled_out(convert: pa.Table, findings: pa.Table) -> BoolArray:
    """Rows (rows,) of reference materials that a ruling keeps out of the calibration, from `screen.findings`."""
    ruled = findings.filter(pa.array(labels(findings, "code").is_one_of((RULING,))))
    is_reference = is_labelled(convert, "material") if ruled.num_rows else np.zeros(0, dtype=np.bool_)
    if not is_reference.any():
        return np.zeros(convert.num_rows, dtype=np.bool_)
    spots = spot_rows(convert)
    number = {key: spot for spot, key in enumerate(_table_and_row(spots.keys))}
    code = {text: place for place, text in enumerate(spots.analyte.texts)} | {None: WHOLE_SPOT}
    # A part of a session has not all the spots that were ruled on.
    rows = [
        (number[key], code[analyte], action == "drop")
        for key, analyte, action in zip(
            _table_and_row(ruled), *(ruled.column(name).to_pylist() for name in ("analyte", "action")), strict=True
        )
        if key in number and analyte in code
    ]  # fmt: skip
    spot, analyte, drops = np.array(rows, dtype=np.int64).reshape(-1, 3).T
    return Placed(spot, analyte, drops.astype(np.bool_)).dropped_rows(spots) & is_reference


def _table_and_row(table: pa.Table) -> list[tuple[str, int]]:
    return list(zip(table.column("table").to_pylist(), counts(table, "row").tolist(), strict=True))


class _SpotIndex:
    """Finds spots and their analytes by the texts that rulings give."""

    def __init__(self, spots: SpotRows, rulings: Sequence[Ruling]) -> None:
        self._label, self._table = labels(spots.keys, "spot"), labels(spots.keys, "table")
        self._order = np.argsort(self._label.codes, kind="stable")
        self._sorted = self._label.codes[self._order]
        self._code = {text: code for code, text in enumerate(self._label.texts)}
        self._texts = spots.analyte.texts
        self._analytes = {text: code for code, text in enumerate(self._texts)}
        found = {ruling: self._spot(ruling) for ruling in rulings if ruling.spot}
        self._found = found
        self._analytes_of = spots.analytes_of({spot for spot in found.values() if isinstance(spot, int)})

    def place(self, ruling: Ruling) -> tuple[int, int] | Problem | None:
        """Numbers of the ruling's spot and analyte; None where their cells are blank, which has been told."""
        spot = self._found.get(ruling)
        if spot is None or isinstance(spot, Problem):
            return spot
        if not ruling.analyte:
            return None
        analyte = self._analyte(ruling, spot)
        return analyte if isinstance(analyte, Problem) else (spot, analyte)

    def _spot(self, ruling: Ruling) -> int | Problem:
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
        return int(candidates[0])

    def _analyte(self, ruling: Ruling, spot: int) -> int | Problem:
        if ruling.analyte == ALL_ANALYTES:
            return WHOLE_SPOT
        code = self._analytes.get(ruling.analyte, -1)
        of_spot = self._analytes_of[spot]
        if code in of_spot:
            return code
        known = [self._texts[other] for other in of_spot]
        remedy = nearest(ruling.analyte, known) or f"It has {', '.join(sorted(known))}."
        return Problem(
            f'spot "{ruling.spot}" has no analyte "{ruling.analyte}".',
            ruling.file, ruling.row, "analyte", remedy,
        )  # fmt: skip
