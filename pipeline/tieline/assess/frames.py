"""Stage tables as frames for the evidence, and back: the one place where pandas meets Arrow."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from tieline.settings.assess import AssessSettings
from tieline.tables import TableSpec, build, empty

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Conditions:
    """table: experiment x condition, numbers only; texts: the conditions that are none; temperatures_C: where given."""

    table: pd.DataFrame
    texts: pd.DataFrame
    temperatures_C: Mapping[str, float]  # noqa: N815 - a unit

    def whole(self) -> pd.DataFrame:
        """Numbers and texts side by side."""
        return self.table.join(self.texts)


def frame(table: pa.Table, columns: Sequence[str]) -> pd.DataFrame:
    """The named columns with labels as plain texts."""
    chosen = table.select(list(columns))
    for place, field in enumerate(chosen.schema):
        if pa.types.is_dictionary(field.type):
            chosen = chosen.set_column(place, field.name, chosen.column(place).cast(pa.string()))
    return chosen.to_pandas()


def conditions_frame(experiments: pa.Table, settings: AssessSettings) -> Conditions:
    """The conditions of the experiments, one row per experiment: numbers, and columns in which no cell is one."""
    whole = frame(experiments, ("experiment", "condition", "value", "text"))
    long = whole.dropna(subset=["value"])
    table = long.pivot(index="experiment", columns="condition", values="value")
    words = whole[~whole["condition"].isin(long["condition"].unique())].dropna(subset=["text"])
    texts = words.pivot(index="experiment", columns="condition", values="text")
    given = table[settings.temperature].dropna() if settings.temperature in table.columns else {}
    return Conditions(table, texts, dict(given))


def stage_table(spec: TableSpec, rows: pd.DataFrame | list[dict[str, Any]] | None) -> pa.Table:
    """Rows in the declared columns; what is not a finite number, an open end or an unmade one, becomes null."""
    if rows is None or len(rows) == 0:
        return empty(spec)
    columns: dict[str, Any] = (
        {name: [row.get(name) for row in rows] for name in spec.names()}
        if isinstance(rows, list)
        else {name: rows[name].tolist() for name in spec.names()}
    )
    for column in spec.columns:
        if column.kind == "number":
            values = np.array(columns[column.name], dtype=np.float64)
            columns[column.name] = np.where(np.isfinite(values), values, np.nan)
    return build(spec, columns)
