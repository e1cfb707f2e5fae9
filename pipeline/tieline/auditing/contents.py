"""Two tables of one kind compared value by value, and the difference in words."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import BoolArray

# Another machine's arithmetic may end in other last digits; anything beyond them is a difference.
LAST_DIGITS = 1e-9
NAMED_CELLS = 3
KEY_COLUMNS = ("experiment", "alpha", "beta", "phase", "element", "other", "spot", "analyte", "batch", "code")


@dataclass(frozen=True)
class Comparison:
    """`same`: nothing differs, or only the last digits (`last_digits`); `detail` says what does."""

    same: bool
    last_digits: bool = False
    detail: str = ""


def compare_tables(filed: pa.Table, made: pa.Table) -> Comparison:
    """What the filed table has otherwise than the one made anew; tables of one declaration."""
    if filed.num_rows != made.num_rows:
        return Comparison(False, detail=f"{filed.num_rows} rows filed, {made.num_rows} when recomputed")
    if [(one.name, one.type) for one in filed.schema] != [(one.name, one.type) for one in made.schema]:
        return Comparison(False, detail="its columns are not those of a recomputed file")
    cells, touched = [], False
    for name in filed.column_names:
        one, two = filed.column(name), made.column(name)
        differ, beyond = _differences(one, two)
        touched = touched or bool(differ.any())
        cells += [(name, int(row)) for row in np.flatnonzero(beyond)]
    if not cells:
        return Comparison(True, last_digits=touched)
    named = "; ".join(_cell(filed, made, name, row) for name, row in cells[:NAMED_CELLS])
    more = f" and {len(cells) - NAMED_CELLS} more" if len(cells) > NAMED_CELLS else ""
    return Comparison(False, detail=f"{named}{more}")


def _differences(one: pa.ChunkedArray, two: pa.ChunkedArray) -> tuple[BoolArray, BoolArray]:
    """Rows that differ at all, and rows that differ by more than the last digits."""
    if pa.types.is_dictionary(one.type):
        one, two = one.cast(pa.string()), two.cast(pa.string())
    null_one, null_two = _array(pc.is_null(one)), _array(pc.is_null(two))
    equal = _array(pc.fill_null(pc.equal(one, two), False)) | (null_one & null_two)
    differ: BoolArray = ~equal
    if not pa.types.is_floating(one.type) or not differ.any():
        return differ, differ
    first, second = (
        np.asarray(column.to_numpy(zero_copy_only=False), dtype=np.float64) for column in (one, two)
    )
    close = np.isclose(first, second, rtol=LAST_DIGITS, atol=0.0)
    return differ, differ & ~close


def _array(column: pa.ChunkedArray) -> BoolArray:
    return np.asarray(column.to_numpy(zero_copy_only=False), dtype=np.bool_)


def _cell(filed: pa.Table, made: pa.Table, name: str, row: int) -> str:
    key = " ".join(
        str(text)
        for column in KEY_COLUMNS
        if column in filed.column_names and (text := filed.column(column)[row].as_py()) is not None
    )
    before, after = (_text(table.column(name)[row].as_py()) for table in (filed, made))
    return f"{name} of {key or f'row {row + 1}'} is {before}, recomputed {after}"


def _text(value: object) -> str:
    return "none" if value is None else f"{value:.10g}" if isinstance(value, float) else str(value)
