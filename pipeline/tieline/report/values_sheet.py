"""All spots, one row each, with every value in ppm and a shade on what was not used."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from tieline.arrays import flags, labels, numbers
from tieline.report.sheets import Cell, Heading, Sheet
from tieline.report.source import Source
from tieline.report.spots import SpotUse

KEYS = (
    "spot", "table", "row", "technique", "batch", "experiment", "phase", "grain", "zone", "distance_um", "material",
    "sequence", "comment",
)  # fmt: skip


def spots_sheet(source: Source, spots: SpotUse) -> Sheet:
    """Keys, use and reasons, then value, sigma and limit of every analyte as they stand in `convert`."""
    convert, screen = source.table("convert"), source.table("screen")
    headings = [Heading(name) for name in KEYS]
    headings += [
        Heading("values", "1", "values or limits that the spot has"),
        Heading("used", "1", "of these, in a phase mean"),
        Heading("left out because", "", "tests or `ruling`; analytes are named where not all are left out"),
    ]
    columns: list[Sequence[Cell]] = [spots.keys[name] for name in KEYS]
    columns += [spots.n_values.tolist(), spots.n_used.tolist(), spots.why()]
    analyte, element, use = labels(convert, "analyte"), labels(convert, "element"), flags(screen, "use")
    shaded: set[tuple[int, int]] = set()
    # Oxides in the order of the tables, not of the alphabet: the first row of an analyte tells.
    first_row = np.array([np.argmax(analyte.codes == code) for code in range(len(analyte.texts))])
    for code in np.argsort(first_row, kind="stable").tolist():
        rows = np.flatnonzero(analyte.codes == code)
        places = spots.of_row[rows]
        name = analyte.texts[code]
        symbol = element.texts[element.codes[rows[0]]]
        unused = places[~use[rows]].tolist()
        shaded.update((place, len(columns)) for place in unused)
        for part, meaning in (
            ("value", "before any calibration factor"),
            ("sigma", "one standard uncertainty"),
            ("limit", "detection limit"),
            ("unmixed", "value with the overlapping phase removed by calculation, calibrated"),
        ):
            values = numbers(screen if part == "unmixed" else convert, f"{part}_ppm")[rows]
            if not np.isfinite(values).any():
                continue
            column: list[Cell] = [None] * spots.count
            for place, value in zip(places.tolist(), values.tolist(), strict=True):
                column[place] = value if value == value else None
            headings.append(Heading(f"{name} {part}_ppm", "ug/g", f"{symbol}, {meaning}"))
            columns.append(column)
    return Sheet("spots", tuple(headings), tuple(columns), frozenset(shaded))
