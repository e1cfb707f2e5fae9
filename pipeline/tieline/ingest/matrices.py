"""The cells of one block of spots as numbers: values, uncertainties, limits, and what became of every cell."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.ingest.asides import Asides
from tieline.ingest.roles import AnalyteColumn, Roles
from tieline.reading.cell_text import unit_spellings
from tieline.reading.cells import (
    BELOW_LIMIT,
    NOT_MEASURED,
    REASONS,
    UNREADABLE,
    VALUE,
    Cells,
    CellStyle,
    parse_cells,
    text_buffers,
)
from tieline.reading.grid import Block
from tieline.settings.ingest import Table

Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

ZERO_STATE = {"value": VALUE, "below-limit": BELOW_LIMIT, "not-measured": NOT_MEASURED}
NEGATIVE = "an uncertainty cannot be negative"
NO_NUMBER = "an uncertainty must be a number"


@dataclass
class Counts:
    """What became of the cells, and what the remarks need."""

    values: int = 0
    limit_only: int = 0
    not_measured: int = 0
    sigma: int = 0
    limit: int = 0
    words: Counter[str] = field(default_factory=Counter)
    no_limit: int = 0
    n_totals: int = 0
    wrong_totals: list[tuple[int, float, float]] = field(default_factory=list)

    def add(self, other: Counts) -> None:
        """Takes up the counts of another block."""
        self.values += other.values
        self.limit_only += other.limit_only
        self.not_measured += other.not_measured
        self.sigma += other.sigma
        self.limit += other.limit
        self.words += other.words
        self.no_limit += other.no_limit
        self.n_totals += other.n_totals
        self.wrong_totals += other.wrong_totals


@dataclass(frozen=True)
class Matrices:
    """Spots x analytes of one block; sigma and limit None where no cell has one."""

    value: Floats
    sigma: Floats | None
    limit: Floats | None
    below: Mask
    unreadable: Mask


# One style serves all columns written alike: folding its words takes as long as reading a thousand cells.
_style = lru_cache(maxsize=256)(CellStyle)


def cell_style(table: Table, decimal: str, unit: str | None) -> CellStyle:
    """How the cells of a column in `unit` are written."""
    units = unit_spellings(unit) if unit else frozenset()
    return _style(
        decimal, table.thousands, table.below_limit, table.not_measured, units, ZERO_STATE[table.zero]
    )


def cell_matrices(
    block: Block, table: Table, roles: Roles, decimal: str, asides: Asides, counts: Counts
) -> Matrices:
    """Reads every cell of a block: values, uncertainties and limits in each analyte's unit.

    Unreadable cells go to `asides`, what became of all cells to `counts`.
    """
    n, m = len(block.rows), len(roles.analytes)
    value, below, unreadable = np.empty((n, m)), np.zeros((n, m), bool), np.zeros((n, m), bool)
    sigma: Floats | None = None
    limit: Floats | None = None
    for j, column in enumerate(roles.analytes):
        style = cell_style(table, decimal, column.unit)
        cells = parse_cells(block.cells[column.index], style)
        value[:, j] = cells.value
        unreadable[:, j] = _unreadable(cells, block, column.index, column.header, asides)
        below[:, j] = cells.state == BELOW_LIMIT
        if column.sigma_index is not None:
            sigma = np.full((n, m), np.nan) if sigma is None else sigma
            sigma[:, j] = _sigma(block, table, column, style, cells.value, asides, counts)
        own_limit = _limit(block, column, style, cells, asides, counts)
        if own_limit is not None:
            limit = np.full((n, m), np.nan) if limit is None else limit
            limit[:, j] = own_limit
        _count(block, column, cells, own_limit, counts)
    if limit is not None:
        with np.errstate(invalid="ignore"):
            below |= value < limit
    _check_total(block, table, roles, decimal, value, counts)
    return Matrices(value, sigma, limit, below, unreadable)


def _unreadable(cells: Cells, block: Block, index: int, header: str, asides: Asides) -> Mask:
    """Which cells are unreadable; they go to `asides`."""
    mask: Mask = cells.state == UNREADABLE
    where = np.flatnonzero(mask)
    if where.size:
        reasons = [REASONS[code][1] for code in cells.reason[where].tolist()]
        _set_aside(block, index, header, where, reasons, asides)
    return mask


def _set_aside(
    block: Block,
    index: int,
    header: str,
    where: npt.NDArray[np.int64],
    reasons: Sequence[str],
    asides: Asides,
) -> None:
    raws = block.cells[index].take(pa.array(where)).to_pylist()
    asides.add_cells(block.rows[where].tolist(), header, raws, reasons)


def _sigma(
    block: Block,
    table: Table,
    column: AnalyteColumn,
    style: CellStyle,
    value: Floats,
    asides: Asides,
    counts: Counts,
) -> Floats:
    """One standard uncertainty of the value in its unit; NaN where the cell or the value gives no number."""
    setting, index = table.sigma, column.sigma_index
    assert setting is not None
    assert index is not None
    cells = parse_cells(block.cells[index], _for_sigma(style, setting.relative))
    bad = _unreadable(cells, block, index, block_header(column, "sigma"), asides)
    with np.errstate(invalid="ignore"):
        negative = cells.value < 0
    limited = (cells.state == BELOW_LIMIT) & ~np.isnan(cells.limit)
    for mask, reason in ((negative, NEGATIVE), (limited, NO_NUMBER)):
        where = np.flatnonzero(mask)
        if where.size:
            _set_aside(block, index, block_header(column, "sigma"), where, [reason] * where.size, asides)
    counts.sigma += len(block.rows) - int((bad | negative | limited).sum())
    sigma = np.where(bad | negative | limited, np.nan, cells.value) / setting.level
    if setting.kind == "sd":
        sigma = sigma / np.sqrt(setting.replicates)
    scale = np.abs(value) / 100.0 if setting.relative else column.sigma_factor
    return np.where(np.isnan(value), np.nan, sigma * scale)


def _for_sigma(style: CellStyle, relative: bool) -> CellStyle:
    """Sigma cells: a zero is a zero, and a relative one may carry a per cent sign."""
    units = frozenset({"%"}) if relative else style.units
    return _style(style.decimal, style.thousands, style.below_limit, style.not_measured, units)


def block_header(column: AnalyteColumn, what: str) -> str:
    """How messages name the sigma or limit column of an analyte."""
    return (column.sigma_header if what == "sigma" else column.limit_header) or column.header


def _limit(
    block: Block, column: AnalyteColumn, style: CellStyle, cells: Cells, asides: Asides, counts: Counts
) -> Floats | None:
    """The detection limit of every cell: its own `<`, else its column's, else the configured one; None without."""
    own = cells.limit
    limit = own
    if column.limit_index is not None:
        words = _style(style.decimal, style.thousands, style.below_limit, style.not_measured, style.units)
        read = parse_cells(block.cells[column.limit_index], words)
        header = block_header(column, "limit")
        bad = _unreadable(read, block, column.limit_index, header, asides)
        given = np.where(read.state == BELOW_LIMIT, read.limit, read.value)
        with np.errstate(invalid="ignore"):
            negative = np.flatnonzero(given < 0)
        if negative.size:
            _set_aside(
                block,
                column.limit_index,
                header,
                negative,
                ["a limit cannot be negative"] * negative.size,
                asides,
            )
        counts.limit += len(block.rows) - int(bad.sum()) - negative.size
        given = np.where(given > 0, given, np.nan)  # an exported limit of zero means that none was calculated
        limit = np.where(np.isnan(own), given * column.limit_factor, own)
    if column.limit is not None:
        limit = np.where(np.isnan(limit), column.limit, limit)
    return limit if column.limit_index is not None or not np.isnan(limit).all() else None


def _count(block: Block, column: AnalyteColumn, cells: Cells, limit: Floats | None, counts: Counts) -> None:
    states = np.bincount(cells.state, minlength=4)
    counts.values += int(states[VALUE])
    counts.limit_only += int(states[BELOW_LIMIT])
    counts.not_measured += int(states[NOT_MEASURED])
    if states[BELOW_LIMIT]:
        without = np.isnan(cells.limit if limit is None else limit)
        counts.no_limit += int(((cells.state == BELOW_LIMIT) & without).sum())
    if states[NOT_MEASURED]:
        texts = block.cells[column.index]
        offsets, _ = text_buffers(texts)
        words = np.flatnonzero((cells.state == NOT_MEASURED) & (np.diff(offsets) > 0))
        if words.size:
            found = texts.take(pa.array(words)).value_counts()
            for pair in found.to_pylist():
                counts.words[pair["values"].strip().casefold()] += pair["counts"]


TOTAL_TOLERANCE = 0.15  # wt%: twenty oxides rounded to 0.01 can differ from their rounded sum by 0.1


def _check_total(
    block: Block, table: Table, roles: Roles, decimal: str, value: Floats, counts: Counts
) -> None:
    """Compares a Total column with the sum of the weight per cent columns, and with that of all columns."""
    in_percent = [j for j, column in enumerate(roles.analytes) if column.unit == "wt%"]
    if roles.total_index is None or len(in_percent) < 3:
        return
    total = parse_cells(block.cells[roles.total_index], cell_style(table, decimal, "wt%")).value
    factors = np.array([PPM_PER_UNIT[column.unit] / PPM_PER_UNIT["wt%"] for column in roles.analytes])
    majors = np.nansum(value[:, in_percent], axis=1)
    everything = np.nansum(value * factors, axis=1)
    difference = np.minimum(np.abs(total - majors), np.abs(total - everything))
    counts.n_totals += int(np.isfinite(difference).sum())
    with np.errstate(invalid="ignore"):
        wrong = np.flatnonzero(difference > TOTAL_TOLERANCE)
    counts.wrong_totals += [(int(block.rows[i]), float(total[i]), float(majors[i])) for i in wrong.tolist()]
