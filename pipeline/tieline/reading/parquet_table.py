"""Parquet tables into a grid: every cell as the text that reads back to the same number."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.errors import InputError, Problem
from tieline.reading.delimited import check_width
from tieline.reading.grid import Block, Found, Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout

BLOCK_ROWS = 1 << 14


def read_parquet(file: InputFile, layout: Layout, limits: ReadLimits) -> Grid:
    """Reads a Parquet table; its column names are the header, which counts as row 1."""
    import pyarrow.parquet as pq

    try:
        source = pq.ParquetFile(pa.BufferReader(file.data))
        _check_size(file, source, limits)
        table = source.read()
    except (pa.ArrowException, OSError) as error:
        raise InputError(
            Problem(f"is not a readable Parquet file ({str(error)[:200]}).", file.path)
        ) from error
    columns = [_as_text(file, name, table.column(index)) for index, name in enumerate(table.column_names)]
    blocks = []
    for start in range(0, table.num_rows, BLOCK_ROWS):
        count = min(BLOCK_ROWS, table.num_rows - start)
        cells = tuple(_one_array(column.slice(start, count)) for column in columns)
        blocks.append(Block(np.arange(start + 2, start + count + 2, dtype=np.int32), cells))
    decimal = layout.decimal or "."
    return Grid(file.path, tuple(table.column_names), None, blocks, Found("parquet", decimal=decimal))


def _check_size(file: InputFile, source: pa.parquet.ParquetFile, limits: ReadLimits) -> None:
    metadata = source.metadata
    check_width(file, len(source.schema_arrow), limits)
    expanded = sum(metadata.row_group(index).total_byte_size for index in range(metadata.num_row_groups))
    if metadata.num_rows * len(source.schema_arrow) > limits.cells or expanded > limits.expanded_bytes:
        remedy = "If that is right, raise ingest.limits."
        raise InputError(Problem("is larger than the limits on tables allow.", file.path, remedy=remedy))


def _as_text(file: InputFile, name: str, column: pa.ChunkedArray) -> pa.ChunkedArray:
    kind = column.type
    if pa.types.is_dictionary(kind):
        return _as_text(file, name, pc.cast(column, kind.value_type))
    if pa.types.is_null(kind):
        return pa.chunked_array([pa.array([""] * len(column), pa.string())])
    if pa.types.is_floating(kind):
        # A missing number is often stored as NaN; both are a blank cell.
        column = pc.if_else(pc.fill_null(pc.is_nan(column), False), pa.scalar(None, kind), column)
    try:
        return pc.fill_null(pc.cast(column, pa.string()), "")
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        message = f"its type {kind} is neither text nor number."
        raise InputError(Problem(message, file.path, column=name)) from None


def _one_array(column: pa.ChunkedArray) -> pa.StringArray:
    combined = column.combine_chunks()
    return pa.concat_arrays(combined.chunks) if isinstance(combined, pa.ChunkedArray) else combined
