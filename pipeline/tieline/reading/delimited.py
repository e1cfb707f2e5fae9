"""Delimited text (comma, semicolon, tab, bar) into a grid, parsed by Arrow."""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.csv

from tieline.errors import InputError, Problem
from tieline.reading.grid import Block, Found, Grid, RaggedRow, ReadLimits
from tieline.reading.header import find_decimal, find_header, is_units_row
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout
from tieline.reading.text_bytes import utf8_bytes

HEAD_BYTES = 1 << 22
HEAD_RECORDS = 300
BLOCK_BYTES = 1 << 23
MOST_RAGGED = 100_000  # as many are kept to be set aside one by one; beyond, it is the table that is wrong
DELIMITERS = "\t;|,"  # preferred in this order: a comma may be a decimal mark
_LINE = re.compile(rb"[^\r\n]*(?:\r\n|\r|\n)|[^\r\n]+$")


@dataclass(frozen=True)
class Record:
    """One of the first records: its cells and the byte where the next one starts."""

    cells: list[str]
    end: int


def read_delimited(file: InputFile, layout: Layout, limits: ReadLimits) -> Grid:
    """Reads a delimited text table; see `formats.read_grid`."""
    data, encoding = utf8_bytes(file, layout.encoding, limits.expanded_bytes)
    head = bytes(memoryview(data)[:HEAD_BYTES])
    whole = len(head) == len(data)
    delimiter = layout.delimiter or find_delimiter(head)
    records = list(_head_records(head, delimiter, whole))
    if not records and not whole:
        remedy = "Is a quotation mark left open, or is this no table?"
        raise InputError(
            Problem(f"its first row is longer than {HEAD_BYTES >> 10} kB.", file.path, 1, remedy=remedy)
        )
    header_index = locate_header(file, [record.cells for record in records], layout)
    units_index = locate_units(records_cells(records), header_index, layout)
    first = (units_index if units_index is not None else header_index) + 1
    sample = [record.cells for record in records[first:]]
    headers, extra = _agreed_headers(records[header_index].cells, sample)
    check_width(file, len(headers), limits)
    units = None if units_index is None else _padded(records[units_index].cells, len(headers))
    start = records[first - 1].end
    _check_cells(file, data.slice(start), len(headers), limits)
    blocks, ragged = _parse(file, data.slice(start), delimiter, len(headers), first)
    found = Found(
        kind="text",
        encoding=encoding,
        delimiter=delimiter,
        decimal=decided_decimal(file, sample, layout),
        header_row=header_index + 1,
        units_row=None if units_index is None else units_index + 1,
    )
    notes = ("the data rows have cells beyond the header",) if extra else ()
    return Grid(file.path, headers, units, blocks, found, ragged, notes)


def records_cells(records: Sequence[Record]) -> list[list[str]]:
    return [record.cells for record in records]


def locate_header(file: InputFile, rows: Sequence[Sequence[str]], layout: Layout) -> int:
    """Index of the header row; raises InputError when there is none."""
    if layout.header_row is not None:
        index: int | None = layout.header_row - 1 if layout.header_row <= len(rows) else None
    else:
        index = find_header(rows[layout.skip_rows : layout.skip_rows + 100], layout.expected_headers)
        index = None if index is None else index + layout.skip_rows
    if index is None or not any(cell.strip() for cell in rows[index]):
        what = "no header was found" if layout.header_row is None else f"row {layout.header_row} is no header"
        remedy = "State it with header_row (rows count from 1) or skip_rows."
        raise InputError(
            Problem(f"{what} among the first rows.", file.path, layout.header_row, remedy=remedy)
        )
    return index


def locate_units(rows: Sequence[Sequence[str]], header_index: int, layout: Layout) -> int | None:
    """Index of the units row, directly below the header, or None."""
    index = header_index + 1
    if layout.units_row is False or index >= len(rows):
        return None
    return index if layout.units_row or is_units_row(rows[index]) else None


def decided_decimal(file: InputFile, sample: Sequence[Sequence[str]], layout: Layout) -> str:
    """The decimal mark, given or found; raises InputError where the cells allow two readings."""
    announced = {",": ".", ".": ","}.get(
        layout.thousands or ""
    )  # the mark that groups thousands is not the decimal
    decimal = layout.decimal or announced or find_decimal(sample)
    if decimal is None:
        raise InputError(
            Problem(
                "its numbers have commas before exactly three digits, which may be decimals or thousands.",
                file.path,
                remedy='State decimal = "," or thousands = ",".',
            )
        )
    return decimal


def check_width(file: InputFile, width: int, limits: ReadLimits) -> None:
    if width > limits.columns:
        remedy = "If that is right, raise ingest.limits.columns."
        raise InputError(
            Problem(f"{width} columns; at most {limits.columns} are read.", file.path, remedy=remedy)
        )


def _check_cells(file: InputFile, data: pa.Buffer, width: int, limits: ReadLimits) -> None:
    """Every line end may end a row of the table's width, and is held as one, however little it says."""
    most = limits.cells // width
    view = memoryview(data)
    if len(view) <= most:
        return
    pieces = (bytes(view[start : start + BLOCK_BYTES]) for start in range(0, len(view), BLOCK_BYTES))
    lines = sum(max(piece.count(b"\n"), piece.count(b"\r")) for piece in pieces)
    if lines > most:
        message = f"{lines} rows of {width} columns; at most {limits.cells} cells are read."
        raise InputError(Problem(message, file.path, remedy="If that is right, raise ingest.limits.cells."))


def find_delimiter(head: bytes) -> str:
    """The separator that cuts most of the first lines into the same number of cells."""
    text = head[: 1 << 16].decode("utf-8", "replace")
    lines = [line for line in text.splitlines()[:200] if line.strip()]
    if len(text) == 1 << 16 and len(lines) > 1:
        lines = lines[:-1]
    scores = {}
    for delimiter in DELIMITERS:
        widths = Counter(len(cells) for cells in csv.reader(lines, delimiter=delimiter) if len(cells) > 1)
        if widths:
            scores[delimiter] = max(widths.values()) / len(lines)
    best = max(scores.values(), default=0.0)
    return next((mark for mark in DELIMITERS if scores.get(mark, 0.0) >= 0.8 * best > 0), ",")


def _head_records(head: bytes, delimiter: str, whole: bool) -> Iterator[Record]:
    """The first records; the last one of a cut head is left out because it may be incomplete."""
    lines = [match.group() for match in _LINE.finditer(head)]
    ends = np.cumsum([len(line) for line in lines]).tolist()
    texts = (line.decode("utf-8", "replace") for line in lines)
    reader = csv.reader(texts, delimiter=delimiter)
    while True:
        try:
            cells = next(reader)
        except (StopIteration, csv.Error):
            return
        complete = whole or reader.line_num < len(lines)
        if not complete or reader.line_num > HEAD_RECORDS:
            return
        yield Record(cells, ends[reader.line_num - 1])


def _agreed_headers(header: list[str], sample: Sequence[Sequence[str]]) -> tuple[tuple[str, ...], bool]:
    """The headers at the width of the data rows, where only blank cells make the difference.

    Programs that end every line with a separator make rows one blank cell wider than their header, or the
    other way round.
    """
    widths = Counter(len(row) for row in sample if any(cell.strip() for cell in row))
    usual = widths.most_common(1)[0][0] if widths else len(header)
    if usual < len(header) and not any(cell.strip() for cell in header[usual:]):
        return tuple(header[:usual]), False
    if usual > len(header) and widths[usual] == widths.total():
        filled = any(cell.strip() for row in sample for cell in row[len(header) :])
        return tuple(_padded(header, usual)), filled
    return tuple(header), False


def _padded(cells: Sequence[str], width: int) -> tuple[str, ...]:
    return tuple([*cells, *[""] * width][:width])


def _parse(
    file: InputFile, data: pa.Buffer, delimiter: str, width: int, rows_before: int
) -> tuple[list[Block], tuple[RaggedRow, ...]]:
    if len(data) == 0:
        return [], ()
    table, ragged = _arrow_read(file, data, delimiter, width, use_threads=True)
    if ragged:  # only a single thread knows the numbers of the rows it refuses
        table, ragged = _arrow_read(file, data, delimiter, width, use_threads=False)
    rows = _row_numbers(table.num_rows, [row.row for row in ragged], rows_before)
    blocks, start = [], 0
    for batch in table.to_batches():
        numbers = rows[start : start + batch.num_rows]
        start += batch.num_rows
        blocks.append(Block(numbers, tuple(batch.columns)))
    # A row of nothing but delimiters is a blank line, however many of them a spreadsheet wrote.
    said = [row for row in ragged if row.text.strip(delimiter + ' \t"')]
    return blocks, tuple(RaggedRow(row.row + rows_before, row.cells, row.text) for row in said)


def _row_numbers(
    count: int, refused: list[int], rows_before: int
) -> np.ndarray[tuple[int], np.dtype[np.int32]]:
    """Numbers of the rows that were kept: all but the refused ones, counted on from the rows before."""
    numbers = np.arange(1, count + len(refused) + 1, dtype=np.int32)
    return np.delete(numbers, np.array(refused, dtype=np.int64) - 1) + np.int32(rows_before)


def _arrow_read(
    file: InputFile, data: pa.Buffer, delimiter: str, width: int, use_threads: bool
) -> tuple[pa.Table, list[RaggedRow]]:
    ragged: list[RaggedRow] = []

    def refuse(row: pyarrow.csv.InvalidRow) -> str:
        if len(ragged) == MOST_RAGGED:
            return "error"
        ragged.append(RaggedRow(row.number or 0, row.actual_columns, row.text))
        return "skip"

    names = [str(index) for index in range(width)]
    quoted = b'"' in memoryview(data).tobytes() if len(data) < BLOCK_BYTES else _has_quote(data)
    try:
        table = pyarrow.csv.read_csv(
            pa.BufferReader(data),
            pyarrow.csv.ReadOptions(use_threads=use_threads, block_size=BLOCK_BYTES, column_names=names),
            pyarrow.csv.ParseOptions(
                delimiter=delimiter,
                newlines_in_values=quoted,
                ignore_empty_lines=False,
                invalid_row_handler=refuse,
            ),
            pyarrow.csv.ConvertOptions(
                column_types=dict.fromkeys(names, pa.string()), strings_can_be_null=False, check_utf8=False
            ),
        )
    except pa.ArrowInvalid as error:
        if len(ragged) == MOST_RAGGED:
            raise InputError(_too_ragged(file, width)) from None
        raise InputError(_arrow_problem(file, error)) from error
    return table, ragged


def _too_ragged(file: InputFile, width: int) -> Problem:
    message = f"more than {MOST_RAGGED} rows have another number of cells than the header, which has {width}."
    return Problem(message, file.path, remedy="State delimiter or header_row if they were not found rightly.")


def _has_quote(data: pa.Buffer) -> bool:
    view = memoryview(data)
    return any(b'"' in bytes(view[start : start + BLOCK_BYTES]) for start in range(0, len(view), BLOCK_BYTES))


def _arrow_problem(file: InputFile, error: pa.ArrowInvalid) -> Problem:
    text = str(error)
    if "straddling" in text or "block" in text:
        megabytes = BLOCK_BYTES >> 20
        remedy = "Is a quotation mark left open, or is this no table?"
        return Problem(f"a single row is longer than {megabytes} MB.", file.path, remedy=remedy)
    return Problem(f"cannot be read as delimited text ({text.splitlines()[0][:200]}).", file.path)
