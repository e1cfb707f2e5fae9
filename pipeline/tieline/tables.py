"""The declared columns of every stage file: name, type, unit, meaning, may it be null.

Declared once; checked on every write and read, and the column reference is made from it. The
declarations themselves stand in `columns.py`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import pyarrow as pa

from tieline.arrays import Labels
from tieline.errors import DefectError
from tieline.narrowing import compact, is_label

Kind = Literal["label", "text", "number", "count", "flag"]

# Labels repeat many times per table; a dictionary column stores each text once. In memory its codes are as narrow as
# the number of texts allows (`narrowing`); in files, in digests and to readers the type is the declared one.
ARROW_TYPES: dict[str, pa.DataType] = {
    "label": pa.dictionary(pa.int32(), pa.string()),
    "text": pa.string(),
    "number": pa.float64(),
    "count": pa.int32(),
    "flag": pa.bool_(),
}


@dataclass(frozen=True)
class Column:
    """One declared column. `unit` is "" for texts and "1" for pure numbers."""

    name: str
    kind: Kind
    meaning: str
    unit: str = ""
    nullable: bool = False

    def field(self) -> pa.Field:
        metadata = {"unit": self.unit, "meaning": self.meaning}
        return pa.field(self.name, ARROW_TYPES[self.kind], self.nullable, metadata)


@dataclass(frozen=True)
class TableSpec:
    """One declared table: `name` is the file name without `.parquet`."""

    name: str
    row: str
    columns: tuple[Column, ...]

    def schema(self) -> pa.Schema:
        return pa.schema([column.field() for column in self.columns])

    def names(self) -> tuple[str, ...]:
        return tuple(column.name for column in self.columns)


def build(spec: TableSpec, columns: Mapping[str, Any]) -> pa.Table:
    """A table with the declared columns in the declared order from arrays, lists, Labels or Arrow columns.

    NaN in a float array becomes null: a stage file has one way of saying "no number".
    Raises DefectError when a column is missing, undeclared, or of another type than declared.
    """
    missing = set(spec.names()) - set(columns)
    undeclared = set(columns) - set(spec.names())
    if missing or undeclared:
        raise DefectError(f"{spec.name}: missing {sorted(missing)}, undeclared {sorted(undeclared)}")
    arrays = [_column(spec, column, columns[column.name]) for column in spec.columns]
    fields = [
        column.field().with_type(array.type) for column, array in zip(spec.columns, arrays, strict=True)
    ]
    table = compact(pa.Table.from_arrays(arrays, schema=pa.schema(fields)))
    check(table, spec)
    return table


def empty(spec: TableSpec) -> pa.Table:
    """The declared table with no rows."""
    return spec.schema().empty_table()


def check(table: pa.Table, spec: TableSpec) -> None:
    """Raises DefectError unless the table has exactly the declared columns, types and nulls."""
    found = [(field.name, declared_type(field.type)) for field in table.schema]
    declared = [(column.name, ARROW_TYPES[column.kind]) for column in spec.columns]
    if found != declared:
        wrong = [pair for pair in found if pair not in declared] or [
            pair for pair in declared if pair not in found
        ]
        raise DefectError(
            f"{spec.name}: columns differ from the declaration, first at {wrong[:1] or found[:1]}"
        )
    for column in spec.columns:
        if not column.nullable and table.column(column.name).null_count:
            raise DefectError(f"{spec.name}.{column.name}: null where a value is declared")


def declared_type(found: pa.DataType) -> pa.DataType:
    """The declared type that a column of this type is written with: label codes may be narrower in memory."""
    return ARROW_TYPES["label"] if is_label(found) else found


def declared(table: pa.Table, spec: TableSpec) -> pa.Table:
    """The table with its declared types and field metadata, after `check`."""
    check(table, spec)
    return table.cast(spec.schema()) if table.schema != spec.schema() else table


def _column(spec: TableSpec, column: Column, data: Any) -> pa.Array | pa.ChunkedArray:
    target = ARROW_TYPES[column.kind]
    try:
        if isinstance(data, Labels):
            data = data.array()
        if isinstance(data, pa.Array | pa.ChunkedArray):
            return _arrow_column(data, target)
        if column.kind == "label":
            return pa.array(data, type=pa.string(), from_pandas=True).dictionary_encode()
        return pa.array(data, type=target, from_pandas=True)
    except (pa.ArrowInvalid, pa.ArrowTypeError, pa.ArrowNotImplementedError) as error:
        raise DefectError(f"{spec.name}.{column.name}: {error}") from error


def _arrow_column(data: pa.Array | pa.ChunkedArray, target: pa.DataType) -> pa.Array | pa.ChunkedArray:
    if declared_type(data.type) == target:
        return data
    if pa.types.is_dictionary(target) and not pa.types.is_dictionary(data.type):
        return data.cast(pa.string()).dictionary_encode()
    return data.cast(target)
