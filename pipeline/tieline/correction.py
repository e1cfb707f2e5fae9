"""Applies the batch factors of `calibrate` to the values of `convert`; shared by the stages that use values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import FloatArray, IntArray, Labels, counts, labels, numbers

# One calibration: what a technique measured in one batch through one source column.
CALIBRATION_KEYS = ("technique", "batch", "analyte")
STANDARD_KEYS = ("experiment", "phase", "technique")
SOURCE_KEYS = tuple(f"source_{name}" for name in CALIBRATION_KEYS)


@dataclass(frozen=True)
class Concentrations:
    """Values, sigmas and limits of every row of `convert` in ppm, shape (rows,); NaN is unknown."""

    value: FloatArray
    sigma: FloatArray
    limit: FloatArray


def calibrated(
    convert: pa.Table, calibrate: pa.Table, spots: pa.Table, standards: pa.Table | None = None
) -> Concentrations:
    """Concentrations divided by the factor of their calibration, and by the drift where it is removed.

    convert: rows of spot x analyte; calibrate: rows of batch x analyte; spots: `ingest.spots`, whose sequence
    places a spot in the run order; standards: `convert.standards`: a value rescaled to a measured internal
    standard is proportional to that measurement, and carries its factor too. What has no row keeps its value.
    """
    factor = _row_factors(convert, calibrate, spots, standards)
    value, sigma, limit = (numbers(convert, f"{name}_ppm") for name in ("value", "sigma", "limit"))
    if factor is None:
        return Concentrations(value, sigma, limit)
    return Concentrations(value / factor, sigma / factor, limit / factor)


def _row_factors(
    convert: pa.Table, calibrate: pa.Table, spots: pa.Table, standards: pa.Table | None
) -> FloatArray | None:
    factors, drifts = numbers(calibrate, "factor"), numbers(calibrate, "drift_applied")
    if np.all(factors == 1.0) and not np.any(drifts):
        return None
    row_of = calibrate_row(convert, calibrate)
    factor: FloatArray = np.append(factors, 1.0)[row_of]
    if np.any(drifts):
        centres = np.nan_to_num(numbers(calibrate, "drift_centre"))
        place = sequence_of(convert, spots) - np.append(centres, 0.0)[row_of]
        factor = factor * (1.0 + np.append(drifts, 0.0)[row_of] * place)
    if standards is not None and standards.num_rows:
        of_source = np.append(factors, 1.0)[calibrate_row(standards, calibrate, SOURCE_KEYS)]
        factor = factor * np.append(of_source, 1.0)[standard_row(convert, standards)]
    return factor


def calibrate_row(table: pa.Table, calibrate: pa.Table, names: Sequence[str] = CALIBRATION_KEYS) -> IntArray:
    """For every row of a table the row of its calibration in `calibrate`, -1 where there is none.

    names: the table's columns that hold technique, batch and analyte.
    """
    return _row_of([labels(table, name) for name in names], calibrate, CALIBRATION_KEYS)


def standard_row(table: pa.Table, standards: pa.Table) -> IntArray:
    """For every row of a table the row of its internal standard in `convert.standards`, -1 where none applies."""
    return _row_of([labels(table, name) for name in STANDARD_KEYS], standards, STANDARD_KEYS)


def _row_of(columns: Sequence[Labels], target: pa.Table, keys: Sequence[str]) -> IntArray:
    """Row numbers by a table of all combinations: three labels have few of them, a table many rows."""
    known = {
        key: row
        for row, key in enumerate(zip(*(target.column(name).to_pylist() for name in keys), strict=True))
    }
    shape = tuple(len(column.texts) + 1 for column in columns)
    lookup = np.full(shape, -1, dtype=np.int64)
    place = [{text: code for code, text in enumerate(column.texts)} for column in columns]
    for key, row in known.items():
        where = tuple(codes.get(text, -1) for codes, text in zip(place, key, strict=True))
        if min(where) >= 0:
            lookup[where] = row
    rows: IntArray = lookup[tuple(column.codes for column in columns)]
    return rows


def sequence_of(convert: pa.Table, spots: pa.Table, rows: IntArray | None = None) -> FloatArray:
    """The place in the run order of the spot of every row of `convert`, or of the `rows` named."""
    if rows is not None:
        convert = convert.select(["table", "row"]).take(pa.array(rows))
    all_tables = sorted({*labels(convert, "table").texts, *labels(spots, "table").texts})
    rank = {text: position for position, text in enumerate(all_tables)}
    widest = int(max(counts(convert, "row").max(initial=0), counts(spots, "row").max(initial=0))) + 1

    def identity(table: pa.Table) -> IntArray:
        tables = labels(table, "table")
        ranks = np.array([rank[text] for text in tables.texts], dtype=np.int64)
        return ranks[tables.codes] * widest + counts(table, "row")

    known = identity(spots)
    order = np.argsort(known)
    position = order[np.searchsorted(known[order], identity(convert))]
    return numbers(spots, "sequence")[position]
