"""The values of a session as matrices of spot x analyte, in an order that does not depend on that of the
rows.

Spots are sorted by experiment, phase, technique, label, table and row, so that the spots of one group (one
phase of one experiment by one technique) stand together. Reference materials belong to no group.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    Groups,
    IntArray,
    Labels,
    flags,
    group_rows,
    labels,
    numbers,
    spot_codes,
)
from tieline.columns import SPOT_KEYS
from tieline.correction import Concentrations
from tieline.errors import DefectError


@dataclass(frozen=True)
class Spots:
    """Every spot once. `keys`: the declared key columns; `of_row`: spot number of every row of `convert`."""

    keys: pa.Table
    of_row: IntArray
    experiment: Labels
    phase: Labels
    technique: Labels
    is_unknown: BoolArray
    groups: Groups

    @property
    def count(self) -> int:
        return len(self.is_unknown)

    def group_key(self, group: int) -> tuple[str, str, str]:
        """Experiment, phase and technique of a group; an experiment without a name is an empty text."""
        experiment, phase, technique = self.groups.keys[group]
        return experiment or "", phase or "", technique or ""


@dataclass(frozen=True)
class Measured:
    """What one technique measured on the unknowns: n spots x p analytes, in ppm, NaN where there is nothing.

    spots, group (n,): numbers in `Spots`, ascending. analyte_codes (p,): codes in `Session.analyte`. present
    (n, p): `convert` has a row for the cell, if perhaps an empty one.
    """

    technique: str
    spots: IntArray
    group: IntArray
    analytes: tuple[str, ...]
    elements: tuple[str, ...]
    analyte_codes: IntArray
    present: BoolArray
    value: FloatArray
    sigma: FloatArray
    limit: FloatArray
    below_limit: BoolArray

    @property
    def only_limit(self) -> BoolArray:
        """Cells of which nothing but an upper limit is known (n, p)."""
        return ~np.isfinite(self.value) & self.below_limit & np.isfinite(self.limit)

    def of_group(self, group: int) -> slice:
        """The rows of one group."""
        first, last = np.searchsorted(self.group, [group, group + 1])
        return slice(int(first), int(last))


@dataclass(frozen=True)
class Session:
    """All spots, and the matrices of every technique in the order of their names."""

    spots: Spots
    analyte: Labels
    techniques: tuple[Measured, ...]


def session_of(convert: pa.Table, concentrations: Concentrations) -> Session:
    """The matrices of a `convert` table with its calibrated concentrations."""
    spots = _spots(convert)
    analyte, element = labels(convert, "analyte"), labels(convert, "element")
    below = flags(convert, "below_limit")
    technique_of_row = spots.technique.codes[spots.of_row]
    unknown = spots.is_unknown[spots.of_row]
    techniques = []
    for code, name in enumerate(spots.technique.texts):
        rows = np.flatnonzero(unknown & (technique_of_row == code))
        if len(rows):
            techniques.append(_measured(name, rows, spots, (analyte, element), below, concentrations))
    return Session(spots, analyte, tuple(techniques))


def _spots(convert: pa.Table) -> Spots:
    code, first = spot_codes(convert)
    keys = convert.select([column.name for column in SPOT_KEYS]).take(pa.array(first))
    names = ("experiment", "phase", "technique", "spot", "table")
    by_name = {name: labels(keys, name) for name in names}
    # The last key sorts first.
    order = np.lexsort((numbers(keys, "row"), *(by_name[name].codes for name in reversed(names))))
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order))
    keys = keys.take(pa.array(order))
    grouping = [Labels(by_name[name].codes[order], by_name[name].texts) for name in names[:3]]
    is_unknown = labels(keys, "material").codes < 0
    groups = group_rows(grouping, is_unknown)
    experiment, phase, technique = grouping
    return Spots(keys, rank[code], experiment, phase, technique, is_unknown, groups)


def _measured(
    technique: str,
    rows: IntArray,
    spots: Spots,
    names: tuple[Labels, Labels],
    below_limit: BoolArray,
    concentrations: Concentrations,
) -> Measured:
    analyte, element = names
    of_technique, row_of_cell = _numbered(spots.of_row[rows], spots.count)
    codes, column_of_cell = _numbered(analyte.codes[rows], len(analyte.texts))
    element_of_column = np.empty(len(codes), dtype=np.int64)
    element_of_column[column_of_cell] = element.codes[rows]
    cell = row_of_cell, column_of_cell
    shape = (len(of_technique), len(codes))
    filled = np.zeros(shape, dtype=np.bool_)
    filled[cell] = True
    if filled.sum() != len(rows):
        raise DefectError(f"{technique}: an analyte occurs twice in one spot")

    def matrix(values: FloatArray) -> FloatArray:
        full = np.full(shape, np.nan)
        full[cell] = values[rows]
        return full

    below = np.zeros(shape, dtype=np.bool_)
    below[cell] = below_limit[rows]
    return Measured(
        technique,
        of_technique,
        spots.groups.code[of_technique],
        tuple(analyte.texts[code] for code in codes),
        tuple(element.texts[code] for code in element_of_column),
        codes,
        filled,
        matrix(concentrations.value),
        matrix(concentrations.sigma),
        matrix(concentrations.limit),
        below,
    )


def _numbered(codes: IntArray, n_codes: int) -> tuple[IntArray, IntArray]:
    """The codes in use, ascending, and for every entry the place of its code among them."""
    in_use = np.bincount(codes, minlength=n_codes) > 0
    return np.flatnonzero(in_use), (np.cumsum(in_use) - 1)[codes]
