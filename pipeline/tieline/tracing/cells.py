"""The source cells of one analyte: the text of value, uncertainty and limit, with file, row and column."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np

from tieline.ingest.one_table import open_table
from tieline.ingest.roles import AnalyteColumn
from tieline.ingest.stage import table_names
from tieline.reading.grid import Grid
from tieline.reading.input_file import InputFile
from tieline.settings.ingest import IngestSettings, Table

Spot = tuple[str, int]


def source_cells(
    files: Mapping[str, InputFile], settings: IngestSettings, spots: Iterable[Spot], analyte: str
) -> dict[Spot, dict[str, Any]]:
    """(table, row) -> cells of one analyte in that row; the cells of a role without a column are None.

    files: configured path -> file. Every cell is {file, row, column, raw}.
    """
    wanted: dict[str, list[int]] = {}
    for called, row in spots:
        wanted.setdefault(called, []).append(row)
    found: dict[Spot, dict[str, Any]] = {}
    for table, name in zip(settings.tables, table_names(settings.tables), strict=True):
        if name not in wanted or table.path not in files:
            continue
        grid, _, roles = open_table(files[table.path], table, name, settings)
        column = next((one for one in roles.analytes if one.name == analyte), None)
        if column is None:
            continue
        place = {int(row): at for at, row in enumerate(grid.rows())}
        for row in wanted[name]:
            if row in place:
                found[name, row] = _cells(grid, table, column, place[row], row)
    return found


def _cells(grid: Grid, table: Table, column: AnalyteColumn, at: int, row: int) -> dict[str, Any]:
    file = table.path if table.sheet is None else f"{table.path} [{table.sheet}]"

    def cell(index: int | None, header: str | None) -> dict[str, Any] | None:
        if index is None:
            return None
        title = header or grid.headers[index]
        return {"file": file, "row": row, "column": title, "raw": grid.column(index)[at].as_py()}

    return {
        "value": cell(column.index, column.header),
        "sigma": cell(column.sigma_index, column.sigma_header),
        "limit": cell(column.limit_index, column.limit_header),
    }


def sigma_rule(table: Table, column_unit: str) -> dict[str, Any] | None:
    """How a sigma cell becomes one standard uncertainty of the value: what it is divided by, or per cent."""
    sigma = table.sigma
    if sigma is None:
        return None
    divided = sigma.level * (float(np.sqrt(sigma.replicates)) if sigma.kind == "sd" else 1.0)
    return {"divided_by": divided, "relative_percent": sigma.relative, "unit": column_unit}


def table_settings(settings: IngestSettings, name: str) -> Table:
    """The settings of the table that is called `name`."""
    names = table_names(settings.tables)
    return settings.tables[names.index(name)]
