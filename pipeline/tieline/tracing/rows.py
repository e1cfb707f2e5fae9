"""Rows of a stage table by their labels."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, labels


def chosen_rows(table: pa.Table, where: Mapping[str, Any]) -> BoolArray:
    """True for the rows whose labels are all those of `where`, shape (rows,)."""
    chosen = np.ones(table.num_rows, dtype=np.bool_)
    for name, text in where.items():
        chosen &= labels(table, name).is_one_of((str(text),))
    return chosen


def rows_of(table: pa.Table, where: Mapping[str, Any]) -> list[dict[str, Any]]:
    """These rows as plain data."""
    rows: list[dict[str, Any]] = table.filter(pa.array(chosen_rows(table, where))).to_pylist()
    return rows
