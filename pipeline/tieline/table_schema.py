"""Declared columns as a Frictionless table schema with UCUM units, for the CSV files of a run folder.

The descriptor is `datapackage.json`, version 1 of the standard, which every reader of it takes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from tieline.columns import CLASSIFY, FINDINGS, SPOT_KEYS
from tieline.tables import Column

DATA_PACKAGE = "datapackage.json"
TYPES = {"label": "string", "text": "string", "number": "number", "count": "integer", "flag": "boolean"}
# Unit as the stage files write it -> UCUM code (ug/g is micrograms per gram). Units not listed vary by row.
UCUM = {"1": "1", "ug/g": "ug/g", "um": "um", "wt%": "%"}

# What the hand-over files have beside declared columns.
_ADDED = (
    Column("written", "text", "D with its standard uncertainty in the last digits; < upper, > lower limit"),
    Column("convention", "text", "what the uncertainties and n mean"),
    Column(
        "analyte",
        "text",
        "* : all the spot has; otherwise the analytes, or the column's header",
        nullable=True,
    ),
    Column("n_values", "count", "values left out", "1"),
    Column("why", "text", "the tests, `ruling`, or `set-aside` for what could not be read"),
    Column("decided_by", "text", "`test`, or who ruled", nullable=True),
    Column("date", "text", "date of the ruling", nullable=True),
)
_KEYS = {"partition_coefficients.csv": ("experiment", "alpha", "beta", "element")}
_TITLES = {
    "partition_coefficients.csv": "Partition coefficients with intervals, budget and class",
    "left_out.csv": "Every value that was left out, by which test or person, and why",
}
CSV_FILES = tuple(_TITLES)


def data_package(name: str, files: Mapping[str, Mapping[str, Any]]) -> dict[str, Any]:
    """The descriptor of the CSV files: file name -> `header`, `bytes`, `sha256`."""
    return {
        "profile": "tabular-data-package",
        "name": "".join(letter if letter.isalnum() and letter.isascii() else "-" for letter in name.lower()),
        "resources": [_resource(path, facts) for path, facts in files.items()],
    }


def _resource(path: str, facts: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "name": path.removesuffix(".csv").replace("_", "-"),
        "title": _TITLES[path],
        "path": path,
        "profile": "tabular-data-resource",
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "bytes": facts["bytes"],
        "hash": f"sha256:{facts['sha256']}",
        "schema": table_schema(path, facts["header"]),
    }


def table_schema(path: str, header: Sequence[str]) -> dict[str, Any]:
    """Fields in the order of the header; a name that is declared nowhere is a text without a unit."""
    declared = (
        (*FINDINGS.columns, *SPOT_KEYS, *_ADDED) if path == "left_out.csv" else (*CLASSIFY.columns, *_ADDED)
    )
    columns = {column.name: column for column in declared}
    schema: dict[str, Any] = {
        "fields": [_field(columns.get(name, Column(name, "text", "", nullable=True))) for name in header],
        "missingValues": [""],
    }
    if path in _KEYS:
        schema["primaryKey"] = list(_KEYS[path])
    return schema


def _field(column: Column) -> dict[str, Any]:
    field: dict[str, Any] = {"name": column.name, "type": TYPES[column.kind]}
    if column.meaning:
        field["description"] = column.meaning
    if column.unit in UCUM:
        field["unit"] = UCUM[column.unit]
    return field
