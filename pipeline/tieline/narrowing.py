"""Tables as small in memory as they can be: narrow label codes, in one piece.

A long table has eight million rows and a dozen label columns, most with fewer than 128 texts: codes of one byte instead
of four. Arrow's functions and `arrays` take codes of any width.
"""

from __future__ import annotations

from collections.abc import Hashable

import pyarrow as pa

ROWS_OF_NOTHING = 2**20

# The widest code is that of the declared type.
_CODE_TYPES = ((2**7, pa.int8()), (2**15, pa.int16()), (2**31, pa.int32()))


def is_label(kind: pa.DataType) -> bool:
    """Whether a column of this type holds labels, whatever the width of its codes."""
    return bool(pa.types.is_dictionary(kind) and pa.types.is_string(kind.value_type))


def compact(table: pa.Table) -> pa.Table:
    """The same values with narrow label codes, and labels and counts in one piece.

    Numbers that come in pieces, as from the blocks of a file, stay so: joining them holds them twice. Parts that several
    columns share, such as codes of columns that say the same in every row, stay shared.
    """
    known: dict[Hashable, pa.Array] = {}
    for position, field in enumerate(table.schema):
        column = _compact_column(table.column(position), known)
        if column is not None:
            table = table.set_column(position, field.with_type(column.type), column)
    return table


def _compact_column(column: pa.ChunkedArray, known: dict[Hashable, pa.Array]) -> pa.Array | None:
    """The column in one narrow piece; None where it is already, or better left in pieces."""
    if column.num_chunks == 0:
        return None
    if pa.types.is_integer(column.type):
        return column.combine_chunks() if column.num_chunks > 1 else None
    if not is_label(column.type):
        return None
    chunks = column.unify_dictionaries().chunks if column.num_chunks > 1 else column.chunks
    texts = chunks[0].dictionary
    narrow = code_type(len(texts))
    if column.num_chunks == 1 and narrow == column.type.index_type:
        return None
    return pa.DictionaryArray.from_arrays(_joined([chunk.indices for chunk in chunks], narrow, known), texts)


def _joined(parts: list[pa.Array], narrow: pa.DataType, known: dict[Hashable, pa.Array]) -> pa.Array:
    """Codes in one piece; those that were made from the same parts before are used again."""
    places = tuple((place_in_memory(part), str(narrow)) for part in parts)
    if places not in known:
        known[places] = pa.concat_arrays([part.cast(narrow) for part in parts])
    return known[places]


def no_numbers(count: int) -> pa.ChunkedArray:
    """A number column without any number, as pieces of one short array."""
    piece = pa.nulls(min(count, ROWS_OF_NOTHING), pa.float64())
    pieces = [piece.slice(0, count - start) for start in range(0, count, ROWS_OF_NOTHING)]
    return pa.chunked_array(pieces, pa.float64())


def code_type(n_texts: int) -> pa.DataType:
    """The narrowest type for the codes of so many texts."""
    return next(kind for limit, kind in _CODE_TYPES if n_texts < limit)


def place_in_memory(array: pa.Array) -> Hashable:
    """Where a plain array lies in memory, and as what: the same for arrays that share their values."""
    places = ((buffer.address, buffer.size) if buffer is not None else None for buffer in array.buffers())
    return (str(array.type), array.offset, len(array), *places)
