"""Applies the batch factors of `calibrate` to the values of `convert`; shared by the stages that use values."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import FloatArray, IntArray, counts, labels, numbers


@dataclass(frozen=True)
class Concentrations:
    """Values, sigmas and limits of every row of `convert` in ppm, shape (rows,); NaN is unknown."""

    value: FloatArray
    sigma: FloatArray
    limit: FloatArray


def calibrated(convert: pa.Table, calibrate: pa.Table, spots: pa.Table) -> Concentrations:
    """Concentrations divided by the factor of their batch and element, and by the drift where it is removed.

    convert: rows of spot x analyte; calibrate: rows of batch x element; spots: `ingest.spots`, whose
    sequence places a spot in the run order. A batch and element without a row keep their values.
    """
    factor = _row_factors(convert, calibrate, spots)
    value, sigma, limit = (numbers(convert, f"{name}_ppm") for name in ("value", "sigma", "limit"))
    if factor is None:
        return Concentrations(value, sigma, limit)
    return Concentrations(value / factor, sigma / factor, limit / factor)


def _row_factors(convert: pa.Table, calibrate: pa.Table, spots: pa.Table) -> FloatArray | None:
    factors, drifts = numbers(calibrate, "factor"), numbers(calibrate, "drift_applied")
    if np.all(factors == 1.0) and not np.any(drifts):
        return None
    row_of = calibrate_row(convert, calibrate)
    factor: FloatArray = np.append(factors, 1.0)[row_of]
    if np.any(drifts):
        centres = np.nan_to_num(numbers(calibrate, "drift_centre"))
        place = sequence_of(convert, spots) - np.append(centres, 0.0)[row_of]
        factor = factor * (1.0 + np.append(drifts, 0.0)[row_of] * place)
    return factor


def calibrate_row(convert: pa.Table, calibrate: pa.Table) -> IntArray:
    """For every row of `convert` the row of its batch and element in `calibrate`, -1 where there is none."""
    batch, element = labels(convert, "batch"), labels(convert, "element")
    known = {
        key: row
        for row, key in enumerate(
            zip(calibrate.column("batch").to_pylist(), calibrate.column("element").to_pylist(), strict=True)
        )
    }
    lookup = np.array([[known.get((b, e), -1) for e in element.texts] for b in batch.texts], dtype=np.int64)
    rows: IntArray = lookup[batch.codes, element.codes] if lookup.size else np.full(convert.num_rows, -1)
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
