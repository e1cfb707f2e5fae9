"""One spot table from its file to rows of the long table, with an account of every cell."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.errors import InputError, Problem
from tieline.ingest.asides import MOST_LINES, Asides
from tieline.ingest.assigning import Assigning
from tieline.ingest.long_table import LongLabels, SharedCodes, TableParts
from tieline.ingest.matching import phase_remarks, similar_experiments, with_materials, with_phases
from tieline.ingest.matrices import Counts
from tieline.ingest.remarks import cell_remarks
from tieline.ingest.roles import LABELS, Roles, assign_roles
from tieline.ingest.rows import SUMMARY, is_summary, joined, spot_rows
from tieline.ingest.spots import Spots, duplicate_problems, duplicates, numbered, read_spots
from tieline.ingest.texts import Mask, Texts
from tieline.ingest.values import check_blocks, long_blocks
from tieline.reading.cell_text import REASONS, UNREADABLE, CellStyle
from tieline.reading.cells import parse_cells
from tieline.reading.formats import read_grid
from tieline.reading.grid import Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.results import Remark
from tieline.settings.ingest import IngestSettings, Table

SET_ASIDE_REMEDY = 'Correct them, or set on_unreadable = "set-aside" in [ingest] to go on without them.'
DISTANCE_UNITS = frozenset({"um", "μm", "micron", "microns"})


@dataclass
class TableRead:
    """One table read. `parts` is None when its problems left nothing to read."""

    table: Table
    name: str
    asides: Asides
    parts: TableParts | None = None
    entered: int = 0
    outcomes: dict[str, int] = field(default_factory=dict)
    remarks: list[Remark] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)


def read_table(
    files: Mapping[str, InputFile], table: Table, name: str, settings: IngestSettings, shared: SharedCodes
) -> TableRead:
    """Reads one table, called `name`; problems of its columns and cells are collected, not raised.

    Raises InputError where the file is missing or is no table.
    """
    if table.path not in files:
        raise InputError(Problem("no such file.", table.path))
    most = MOST_LINES if settings.on_unreadable == "stop" else None
    read = TableRead(table, name, Asides(name, most))
    grid, work, roles = open_table(files[table.path], table, name, settings)
    read.remarks += [Remark(f"{note}.", name) for note in grid.notes]
    for ragged in grid.ragged:
        summary = is_summary(ragged.text, grid, table.skip_row_labels)
        reason = SUMMARY if summary else f"the row has {ragged.cells} cells, the header {grid.width}"
        read.asides.add(ragged.row, None, ragged.text, ragged.cells, reason, expected=summary)
    read.problems += work.problems
    read.remarks += work.remarks
    if not grid.row_count and not grid.ragged:
        read.problems.append(Problem("the header has no rows below it.", name, grid.found.header_row))
    if work.problems:
        _check_cells(read, grid, roles)
    else:
        _read_rows(read, grid, roles, settings, shared)
    if settings.on_unreadable == "stop":
        read.problems += read.asides.problems(SET_ASIDE_REMEDY)
    return read


def open_table(
    file: InputFile, table: Table, name: str, settings: IngestSettings
) -> tuple[Grid, Assigning, Roles]:
    """The cells of one table, and what its columns are; problems of the columns are collected in the second."""
    grid = read_grid(file, _layout(table), _limits(settings))
    work = Assigning(name, table, grid.headers, _full_headers(grid), grid.found.header_row)
    return grid, work, assign_roles(work)


def _layout(table: Table) -> Layout:
    columns = [getattr(table.columns, name) for name in LABELS]
    columns += [table.labels.column if table.labels else None, *(table.analytes or ())]
    return Layout(
        sheet=table.sheet,
        delimiter=table.delimiter,
        decimal=table.decimal,
        thousands=table.thousands,
        encoding=table.encoding,
        header_row=table.header_row,
        units_row=table.units_row,
        skip_rows=table.skip_rows,
        expected_headers=tuple(header for header in columns if header),
    )


def _limits(settings: IngestSettings) -> ReadLimits:
    limits = settings.limits
    return ReadLimits(limits.columns, limits.cells, limits.expanded_mb * 1_000_000)


def _full_headers(grid: Grid) -> list[str]:
    """Headers with the text of the units row, where the header does not repeat it."""
    units = grid.units or ("",) * grid.width
    return [
        f"{header} {unit}".strip() if header.strip() else ""
        for header, unit in zip(grid.headers, units, strict=True)
    ]


def _check_cells(read: TableRead, grid: Grid, roles: Roles) -> None:
    """Problems of the cells, where those of the columns leave the spots unknown."""
    labels = _label_texts(grid, roles)
    keep, _ = spot_rows(grid, roles.labels, labels, read.table.skip_row_labels, read.asides)
    check_blocks(grid, read.table, roles, keep, read.asides)


def _label_texts(grid: Grid, roles: Roles) -> dict[str, Texts]:
    if not grid.blocks:
        return {name: Texts.constant(None, 0) for name in roles.labels}
    return {name: Texts.from_column(grid.column(index)) for name, index in roles.labels.items()}


def _read_rows(
    read: TableRead, grid: Grid, roles: Roles, settings: IngestSettings, shared: SharedCodes
) -> None:
    table = read.table
    rows, row_count = grid.rows(), grid.row_count
    labels = _label_texts(grid, roles)
    keep, blank = spot_rows(grid, roles.labels, labels, table.skip_row_labels, read.asides)
    spots, unmatched = read_spots(table, rows, labels)
    spots = with_phases(with_materials(spots, settings.reference_materials.names), settings.phases)
    _set_aside_unlabelled(read, grid, spots, keep, unmatched, settings.on_unreadable)
    spots = spots.kept(keep)
    spots = _unique(read, spots, settings)
    distance = _numbers(read, spots.row, spots.distance_um, "distance_um", grid, roles)
    order = _order(read, spots, grid, roles)
    label_asides = len(read.asides.expected) and sum(
        1 for column in read.asides.columns if column is not None
    )
    counts = Counts()
    spread = LongLabels(read.name, spots, distance, roles.analytes, shared)
    width, ragged = grid.width, sum(row.cells for row in grid.ragged)
    blocks = long_blocks(grid, table, roles, keep, spread, read.asides, counts)
    read.parts = TableParts(read.name, spots, distance, order, blocks)
    read.entered = width * (row_count - blank) + ragged
    read.outcomes = {
        "values": counts.values,
        "below limit only": counts.limit_only,
        "not measured": counts.not_measured,
        "set aside": read.asides.cell_count(),
        "labels": len(spots) * len(set(roles.labels.values())) - label_asides,
        "sigma": counts.sigma,
        "limit": counts.limit,
        "not read": len(spots) * len(roles.not_read),
    }
    materials = settings.reference_materials.names
    remarks = [*phase_remarks(spots, settings.phases, materials), *similar_experiments(spots)]
    read.remarks += [Remark(remark.message, read.name) for remark in remarks]
    read.remarks += cell_remarks(table, counts, read.asides)


def _set_aside_unlabelled(
    read: TableRead, grid: Grid, spots: Spots, keep: Mask, unmatched: Mask, on_unreadable: str
) -> None:
    """Rows without a usable spot, phase or experiment label; `keep` loses them when they are set aside.

    Where a table has no such label at all, that is one problem and not one for every row.
    """
    is_unknown = spots.material.is_missing()
    missing = {
        "the label does not fit the label pattern": unmatched,
        "no spot label": spots.spot.is_missing(),
        "no phase label": spots.phase.is_missing(),
        "no experiment label": spots.experiment.is_missing() & is_unknown,
    }
    told = np.zeros(len(spots), dtype=bool)
    for reason, mask in missing.items():
        what = reason.removeprefix("no ").removesuffix(" label")
        if what in ("phase", "experiment") and mask[keep].any() and not _can_tell(read.table, what):
            remedy = f"State columns.{what}, a label pattern with {what}, or {what} for the whole table."
            read.problems.append(
                Problem(f"no column tells the {what}.", read.name, grid.found.header_row, remedy=remedy)
            )
            continue
        _set_aside_rows(read, grid, np.flatnonzero(mask & keep & ~told), reason)
        told |= mask
    if on_unreadable == "set-aside":  # where the run stops, the cells of these rows are looked at as well
        keep &= ~told


def _can_tell(table: Table, what: str) -> bool:
    pattern = table.labels.pattern if table.labels is not None else ""
    return (
        getattr(table.columns, what) is not None
        or getattr(table, what) is not None
        or f"(?P<{what}>" in pattern
    )


def _set_aside_rows(read: TableRead, grid: Grid, where: npt.NDArray[np.int64], reason: str) -> None:
    start = 0
    for block in grid.blocks:
        stop = start + len(block.rows)
        for position in where[(where >= start) & (where < stop)] - start:
            cells = [column[int(position)].as_py() for column in block.cells]
            read.asides.add(int(block.rows[position]), None, joined(cells, grid), grid.width, reason)
        start = stop


def _unique(read: TableRead, spots: Spots, settings: IngestSettings) -> Spots:
    repeated = duplicates(spots)
    if not repeated:
        return spots
    if settings.on_duplicate_spot == "stop":
        read.problems += duplicate_problems(read.name, read.table.columns.spot, repeated)
        return spots
    spots, remarks = numbered(spots, repeated, read.name)
    read.remarks += remarks
    return spots


def _numbers(
    read: TableRead, rows: npt.NDArray[np.int32], texts: Texts, name: str, grid: Grid, roles: Roles
) -> npt.NDArray[np.float64]:
    """A label column as numbers, NaN where blank; unreadable cells are set aside."""
    style = CellStyle(
        decimal=grid.found.decimal,
        thousands=read.table.thousands,
        not_measured=read.table.not_measured,
        units=DISTANCE_UNITS,
    )
    cells = parse_cells(pa.array([*texts.known, ""], pa.string()), style)
    bad = np.flatnonzero((cells.state == UNREADABLE)[texts.codes] & ~texts.is_missing())
    header = grid.headers[roles.labels[name]] if name in roles.labels else name
    for place in bad.tolist():
        raw, reason = texts.text(place) or "", REASONS[cells.reason[texts.codes[place]]][1]
        if name in roles.labels:
            read.asides.add_cells([int(rows[place])], header, [raw], [reason])
        else:
            read.problems.append(Problem(f'"{raw}": {reason}.', read.name, int(rows[place]), header))
    return np.where(texts.is_missing(), np.nan, cells.value[texts.codes])


def _order(read: TableRead, spots: Spots, grid: Grid, roles: Roles) -> npt.NDArray[np.float64]:
    """The order of measurement: numbers, or dates and times in ISO form as seconds."""
    times = [_seconds(text) for text in spots.sequence.known]
    if times and None not in times:
        seconds = np.array([*times, np.nan], dtype=float)
        return seconds[spots.sequence.codes]
    return _numbers(read, spots.row, spots.sequence, "sequence", grid, roles)


def _seconds(text: str) -> float | None:
    if "-" not in text or text.startswith("-"):
        return None
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        return None
    return (moment.replace(tzinfo=None) - datetime(1970, 1, 1)).total_seconds()
