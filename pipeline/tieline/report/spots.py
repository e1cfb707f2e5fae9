"""Every spot once: what it is, how many of its values were used, and why the others were not."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import IntArray, flags, labels, numbers
from tieline.ruled_spots import RULING, reference_rows_ruled_out
from tieline.screen.resolution import NOT_MEASURED, REFERENCE_MATERIAL

# Nobody left these out: there is nothing to use, or they serve the calibration.
NOT_A_DECISION = ("", NOT_MEASURED, REFERENCE_MATERIAL)


@dataclass(frozen=True)
class LeftOut:
    """Values of one spot that were left out for the same reasons; `analytes` is empty for all it has.

    Those `of_reference` were ruled out of the calibration: no phase mean would have used them.
    """

    spot: int
    why: str
    analytes: tuple[str, ...]
    n_values: int
    of_reference: bool = False


@dataclass(frozen=True)
class SpotUse:
    """`keys`: the columns of `ingest.spots`, sorted by technique, table and row; `of_row`: number of the spot of
    every row of `convert` and `screen`; counts of shape (spots,)."""

    keys: Mapping[str, list[Any]]
    of_row: IntArray
    n_values: IntArray
    n_used: IntArray
    left_out: tuple[LeftOut, ...]

    @property
    def count(self) -> int:
        return len(self.n_values)

    def why(self) -> list[str]:
        """Per spot why values were left out: `total`, or `Ba137, K39: outlier` for single analytes."""
        parts: dict[int, list[str]] = defaultdict(list)
        for one in self.left_out:
            parts[one.spot].append(f"{', '.join(one.analytes)}: {one.why}" if one.analytes else one.why)
        return ["; ".join(parts.get(spot, ())) for spot in range(self.count)]


def spot_use(tables: Mapping[str, pa.Table]) -> SpotUse:
    """What became of every spot of a session, from `ingest.spots` and `screen`.

    Values of reference materials that were ruled out are told where `convert` and `screen.findings` are given too.
    """
    spots, screen = tables["ingest.spots"], tables["screen"]
    order = np.lexsort(
        (numbers(spots, "row"), labels(spots, "table").codes, labels(spots, "technique").codes)
    )
    spots = spots.take(pa.array(order))
    of_row = _spot_of_row(spots, screen)
    size = spots.num_rows
    why = labels(screen, "why")
    measured = why.text() != NOT_MEASURED
    used = flags(screen, "use")
    n_measured = np.bincount(of_row[measured], minlength=size)
    return SpotUse(
        {name: spots.column(name).to_pylist() for name in spots.column_names},
        of_row,
        n_measured,
        np.bincount(of_row[used], minlength=size),
        (*_left_out(screen, of_row, n_measured), *_ruled_out(tables, of_row)),
    )


def _spot_of_row(spots: pa.Table, screen: pa.Table) -> IntArray:
    """The place in `spots` of the spot of every row of `screen`; a spot is its table and row there."""
    texts = sorted({*labels(spots, "table").texts, *labels(screen, "table").texts})
    rank = {text: position for position, text in enumerate(texts)}
    widest = int(max(numbers(spots, "row").max(initial=0), numbers(screen, "row").max(initial=0))) + 1

    def identity(table: pa.Table) -> IntArray:
        tables = labels(table, "table")
        codes = np.array([rank[text] for text in tables.texts], dtype=np.int64)[tables.codes]
        return codes * widest + numbers(table, "row").astype(np.int64)

    known = identity(spots)
    order = np.argsort(known)
    places: IntArray = order[np.searchsorted(known[order], identity(screen))]
    return places


def _left_out(screen: pa.Table, of_row: IntArray, n_measured: IntArray) -> tuple[LeftOut, ...]:
    why, analyte = labels(screen, "why"), labels(screen, "analyte")
    rows = np.flatnonzero(~why.is_one_of(NOT_A_DECISION))
    groups: dict[tuple[int, str], list[str]] = defaultdict(list)
    for row in rows.tolist():
        groups[int(of_row[row]), why.texts[why.codes[row]]].append(analyte.texts[analyte.codes[row]])
    return tuple(
        LeftOut(spot, reason, () if len(names) == n_measured[spot] else tuple(names), len(names))
        for (spot, reason), names in sorted(groups.items())
    )


def _ruled_out(tables: Mapping[str, pa.Table], of_row: IntArray) -> Iterable[LeftOut]:
    """Values of reference materials that a ruling keeps out of the calibration, spot by spot."""
    if not {"convert", "screen.findings"} <= tables.keys():
        return
    convert = tables["convert"]
    ruled = reference_rows_ruled_out(convert, tables["screen.findings"])
    if not ruled.any():
        return
    measured = np.isfinite(numbers(convert, "value_ppm"))
    analyte = labels(convert, "analyte")
    for spot in np.unique(of_row[ruled & measured]).tolist():
        own = np.flatnonzero((of_row == spot) & measured)
        names = tuple(analyte.texts[code] for code in analyte.codes[own[ruled[own]]])
        yield LeftOut(spot, RULING, () if len(names) == len(own) else names, len(names), of_reference=True)
