"""The values of a session as matrices of spot x analyte, in an order that does not depend on that of the
rows.

Spots are sorted by experiment, phase, technique, label, table and row, so that the spots of one group (one
phase of one experiment by one technique) stand together. Reference materials belong to no group.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
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
    narrow_labels,
    numbers,
    portions,
    spot_codes,
)
from tieline.columns import SPOT_KEYS
from tieline.correction import Concentrations
from tieline.errors import DefectError


@dataclass(frozen=True)
class Spots:
    """Every spot once. `keys`: the declared key columns; `of_row`: spot number of every row of `convert`."""

    keys: pa.Table
    of_row: npt.NDArray[np.int32]
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

    def part(self, rows: slice | IntArray) -> Measured:
        """Some of the spots; of a slice as views of the same memory."""
        names = ("spots", "group", "present", "value", "sigma", "limit", "below_limit")
        return replace(self, **{name: getattr(self, name)[rows] for name in names})

    def of_group(self, group: int) -> slice:
        """The rows of one group."""
        first, last = np.searchsorted(self.group, [group, group + 1])
        return slice(int(first), int(last))


@dataclass(frozen=True)
class Session:
    """All spots, and the matrices of every technique in the order of their names.

    analyte: of every row of `convert`, with narrow codes.
    """

    spots: Spots
    analyte: Labels
    techniques: tuple[Measured, ...]


def session_of(convert: pa.Table, concentrations: Concentrations) -> Session:
    """The matrices of a `convert` table with its calibrated concentrations."""
    spots = _spots(convert)
    analyte, element = (narrow_labels(convert, name) for name in ("analyte", "element"))
    below = flags(convert, "below_limit")
    techniques = []
    for code, name in enumerate(spots.technique.texts):
        chosen = np.flatnonzero(spots.is_unknown & (spots.technique.codes == code))
        if len(chosen):
            techniques.append(_measured(name, chosen, spots, (analyte, element), below, concentrations))
    return Session(spots, analyte, tuple(techniques))


def _spots(convert: pa.Table) -> Spots:
    code, first = spot_codes(convert)
    keys = convert.select([column.name for column in SPOT_KEYS]).take(pa.array(first))
    names = ("experiment", "phase", "technique", "spot", "table")
    by_name = {name: labels(keys, name) for name in names}
    # The last key sorts first.
    order = np.lexsort((numbers(keys, "row"), *(by_name[name].codes for name in reversed(names))))
    rank = np.empty(len(order), dtype=np.int32)
    rank[order] = np.arange(len(order))
    of_row = rank[code]
    del code
    keys = keys.take(pa.array(order))
    grouping = [Labels(by_name[name].codes[order], by_name[name].texts) for name in names[:3]]
    is_unknown = labels(keys, "material").codes < 0
    groups = group_rows(grouping, is_unknown)
    experiment, phase, technique = grouping
    return Spots(keys, of_row, experiment, phase, technique, is_unknown, groups)


def _measured(
    technique: str,
    chosen: IntArray,
    spots: Spots,
    names: tuple[Labels, Labels],
    below_limit: BoolArray,
    concentrations: Concentrations,
) -> Measured:
    """The matrices of some spots, filled some rows at a time: a long table has no room for numbers of all its cells."""
    analyte, element = names
    # -1: not among the chosen spots.
    place = np.full(spots.count, -1, dtype=np.int64)
    place[chosen] = np.arange(len(chosen))
    element_of = np.full(len(analyte.texts), -1, dtype=np.int64)
    n_cells = 0
    for rows in portions(len(spots.of_row)):
        own = place[spots.of_row[rows]] >= 0
        element_of[analyte.codes[rows][own]] = element.codes[rows][own]
        n_cells += int(own.sum())
    codes = np.flatnonzero(element_of >= 0)
    column = np.cumsum(element_of >= 0) - 1
    shape = (len(chosen), len(codes))
    value, sigma, limit = (np.full(shape, np.nan) for _ in range(3))
    present, below = (np.zeros(shape, dtype=np.bool_) for _ in range(2))
    sources = (
        (value, concentrations.value),
        (sigma, concentrations.sigma),
        (limit, concentrations.limit),
        (below, below_limit),
    )
    for rows in portions(len(spots.of_row)):
        spot = place[spots.of_row[rows]]
        own = spot >= 0
        cell = spot[own] * len(codes) + column[analyte.codes[rows][own]]
        present.reshape(-1)[cell] = True
        for matrix, values in sources:
            matrix.reshape(-1)[cell] = values[rows][own]
    if np.count_nonzero(present) != n_cells:
        raise DefectError(f"{technique}: an analyte occurs twice in one spot")
    return Measured(
        technique,
        chosen,
        spots.groups.code[chosen],
        tuple(analyte.texts[code] for code in codes),
        tuple(element.texts[element_of[code]] for code in codes),
        codes,
        present,
        value,
        sigma,
        limit,
        below,
    )
