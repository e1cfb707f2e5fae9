"""Cell texts to numbers, vectorised: value, limit and state of every cell, and why a cell is unreadable.

Nine cells in ten are plain numbers and are cast by Arrow without copying the text. The others are looked at
in two steps: `<` limits and padded numbers with Arrow kernels, everything else once per distinct text
(`cell_text.py`).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from tieline.reading.cell_text import (
    BELOW_LIMIT,
    LARGEST,
    LONGEST,
    NOT_MEASURED,
    REASONS,
    SMALLEST,
    UNREADABLE,
    VALUE,
    CellStyle,
    read_text,
    reason_code,
)

__all__ = [
    "BELOW_LIMIT",
    "NOT_MEASURED",
    "REASONS",
    "UNREADABLE",
    "VALUE",
    "CellStyle",
    "Cells",
    "parse_cells",
]

Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

PLAIN_NUMBER = r"^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?$"
DIGITS = b"0123456789"


PLAIN_BYTES = {mark: DIGITS + b"+-eE" + mark.encode() for mark in ".,"}
_BYTE_TABLES = {allowed: np.isin(np.arange(256), list(allowed)) for allowed in PLAIN_BYTES.values()}
COMMA_TO_POINT = np.arange(256, dtype=np.uint8)
COMMA_TO_POINT[ord(",")] = ord(".")


@dataclass(frozen=True)
class Cells:
    """What a column of cells says; all arrays have one element per cell.

    `value` and `limit` are NaN where the cell gives none. `state` is VALUE, BELOW_LIMIT (a limit only, or a
    word for it), NOT_MEASURED or UNREADABLE; `reason` indexes REASONS and is 0 except for unreadable cells.
    """

    value: Floats
    limit: Floats
    state: npt.NDArray[np.int8]
    reason: npt.NDArray[np.int8]


def parse_cells(texts: pa.StringArray, style: CellStyle) -> Cells:
    """Reads every cell of a string array without nulls.

    A number is only ever the decimal number the text shows: anything that would need a guess (a date, a
    thousands separator that was not announced, `inf`, a number above 1e12, more than 64 characters) is unreadable.
    """
    n = len(texts)
    numbers, is_number = _plain_numbers(texts, style.decimal)
    cells = Cells(np.array(numbers), np.full(n, np.nan), np.zeros(n, np.int8), np.zeros(n, np.int8))
    if not is_number.all():
        _read_rest(texts, np.flatnonzero(~is_number), style, cells)
        _check_limits(cells)
    _check_numbers(texts, style, cells)
    return cells


def _plain_numbers(texts: pa.StringArray, decimal: str) -> tuple[Floats, Mask]:
    """Values of the cells that are plain numbers (NaN elsewhere), and which those are."""
    n = len(texts)
    if n == 0:
        return np.empty(0), np.empty(0, dtype=bool)
    offsets, data = text_buffers(texts)
    candidate = _looks_plain(offsets, data, PLAIN_BYTES[decimal])
    if not candidate.any():
        return np.full(n, np.nan), candidate
    if decimal == ",":
        data = COMMA_TO_POINT[data]
    # A cell that cannot be cast takes a hundred times as long as one that can: none is tried that does not look it.
    masked = texts if candidate.all() and decimal == "." else _masked(offsets, data, candidate)
    try:
        numbers = pc.cast(masked, pa.float64())
    except pa.ArrowInvalid:
        candidate &= pc.fill_null(pc.match_substring_regex(masked, PLAIN_NUMBER), False).to_numpy(
            zero_copy_only=False
        )
        numbers = pc.cast(_masked(offsets, data, candidate), pa.float64())
    return numbers.to_numpy(zero_copy_only=False), candidate


def text_buffers(texts: pa.StringArray) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.uint8]]:
    """Offsets, starting at 0, and bytes of a string array, without copying the bytes."""
    _, offset_buffer, data_buffer = texts.buffers()
    offsets = np.frombuffer(offset_buffer, np.int32)[texts.offset : texts.offset + len(texts) + 1]
    if data_buffer is None or offsets[-1] == offsets[0]:
        return offsets - offsets[0], np.empty(0, np.uint8)
    data = np.frombuffer(data_buffer, np.uint8)[offsets[0] : offsets[-1]]
    return offsets - offsets[0], data


def _looks_plain(offsets: npt.NDArray[np.int32], data: npt.NDArray[np.uint8], allowed: bytes) -> Mask:
    """Cells of 1 to 64 characters made of digits, signs, decimal marks and exponents only."""
    lengths = np.diff(offsets)
    plain = (lengths > 0) & (lengths <= LONGEST)
    if data.tobytes().translate(None, allowed):  # far cheaper than the byte by byte look, and mostly enough
        other = np.flatnonzero(~_BYTE_TABLES[allowed].take(data))
        plain[np.searchsorted(offsets, other, side="right") - 1] = False
    single = np.flatnonzero(lengths == 1)
    if single.size:  # a lone dash is a common word for "not measured"
        character = data[offsets[single]]
        plain[single] &= (character >= ord("0")) & (character <= ord("9"))
    return plain


def _masked(offsets: npt.NDArray[np.int32], data: npt.NDArray[np.uint8], keep: Mask) -> pa.StringArray:
    """The texts with null where `keep` is false; shares the bytes."""
    validity = pa.py_buffer(np.packbits(keep, bitorder="little"))
    return pa.Array.from_buffers(
        pa.string(), len(keep), [validity, pa.py_buffer(np.ascontiguousarray(offsets)), pa.py_buffer(data)]
    )


def _read_rest(texts: pa.StringArray, where: npt.NDArray[np.int64], style: CellStyle, cells: Cells) -> None:
    """Fills the cells at `where`, none of which is a plain number as it stands."""
    offsets, _ = text_buffers(texts)
    blank = np.diff(offsets)[where] == 0
    _fill_text("", where[blank], style, cells)
    where = where[~blank]
    if not where.size:
        return
    trimmed = pc.utf8_trim_whitespace(texts.take(pa.array(where)))
    below = pc.starts_with(trimmed, "<").to_numpy(zero_copy_only=False)
    body = pc.utf8_trim_whitespace(pc.utf8_slice_codeunits(trimmed, (below.any() and 1) or 0))
    if below.any() and not below.all():
        body = pc.if_else(pa.array(below), body, trimmed)
    numbers, is_number = _plain_numbers(body, style.decimal)
    value = where[is_number & ~below]
    cells.value[value] = numbers[is_number & ~below]
    limit = where[is_number & below]
    cells.limit[limit] = numbers[is_number & below]
    cells.state[limit] = BELOW_LIMIT
    _read_distinct(trimmed.filter(pa.array(~is_number)), where[~is_number], style, cells)


def _read_distinct(
    texts: pa.StringArray, where: npt.NDArray[np.int64], style: CellStyle, cells: Cells
) -> None:
    """Reads each distinct text once."""
    if not where.size:
        return
    encoded = texts.dictionary_encode()
    read = [read_text(text, style) for text in encoded.dictionary.to_pylist()]
    index = encoded.indices.to_numpy(zero_copy_only=False)
    cells.value[where] = np.array([one.value for one in read])[index]
    cells.limit[where] = np.array([one.limit for one in read])[index]
    cells.state[where] = np.array([one.state for one in read], np.int8)[index]
    cells.reason[where] = np.array([one.reason for one in read], np.int8)[index]


def _fill_text(text: str, where: npt.NDArray[np.int64], style: CellStyle, cells: Cells) -> None:
    if where.size:
        one = read_text(text, style)
        cells.state[where], cells.reason[where] = one.state, one.reason


def _check_limits(cells: Cells) -> None:
    """Refuses limits that are not positive, or that no concentration can reach."""
    bad = ~(cells.limit >= SMALLEST) & ~np.isnan(cells.limit) | (cells.limit > LARGEST)
    _refuse(cells, np.flatnonzero(bad), "limit not positive")


def _check_numbers(texts: pa.StringArray, style: CellStyle, cells: Cells) -> None:
    """Refuses numbers no concentration can have, and applies what zero and numeric code words mean."""
    size = np.abs(cells.value)
    if np.fmax.reduce(size, initial=0.0) > LARGEST:
        _refuse(cells, np.flatnonzero(size > LARGEST), "too large")
    if np.fmin.reduce(size, initial=LARGEST) < SMALLEST:
        _refuse(cells, np.flatnonzero((size < SMALLEST) & (size != 0)), "too small")
        zero = np.flatnonzero((cells.value == 0) & (cells.state == VALUE))
        if zero.size:
            _check_zeros(texts, zero, style, cells)
    for number, state in style.numeric_words.items():
        hit = (cells.value == number) & (cells.state == VALUE)
        cells.state[hit] = state
        cells.value[hit] = np.nan


def _check_zeros(texts: pa.StringArray, zero: npt.NDArray[np.int64], style: CellStyle, cells: Cells) -> None:
    """1e-400 is not zero; what a true zero means is a setting."""
    shown = texts.take(pa.array(zero))
    nonzero = pc.match_substring_regex(shown, r"[1-9].*[eE]").to_numpy(zero_copy_only=False)
    _refuse(cells, zero[nonzero], "too small")
    if style.zero_state != VALUE:
        plain_zero = zero[~nonzero]
        cells.state[plain_zero] = style.zero_state
        cells.value[plain_zero] = np.nan


def _refuse(cells: Cells, where: npt.NDArray[np.int64], reason: str) -> None:
    cells.value[where] = np.nan
    cells.limit[where] = np.nan
    cells.state[where] = UNREADABLE
    cells.reason[where] = reason_code(reason)


def reasons(cells: Cells, where: Iterable[int]) -> list[str]:
    """The reasons of the cells at `where`, in words."""
    return [REASONS[cells.reason[index]][1] for index in where]
