"""Small stage tables for tests, from a list of spots."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import pyarrow as pa

from tieline.columns import INGEST, INGEST_SPOTS, SPOT_KEYS
from tieline.tables import build

DEFAULTS: dict[str, Any] = {
    "table": "spots.csv",
    "technique": "EPMA",
    "batch": "probe-1",
    "experiment": "X1",
    "phase": "olivine",
    "grain": None,
    "zone": None,
    "distance_um": None,
    "material": None,
    "unit": "wt%",
}


def spot(name: str, values: Mapping[str, Any], **keys: Any) -> dict[str, Any]:
    """One spot: analyte -> value, (value, sigma), (value, sigma, limit), or "<limit"."""
    return {**DEFAULTS, "spot": name, "values": dict(values), **keys}


def ingest_tables(spots: Sequence[Mapping[str, Any]]) -> tuple[pa.Table, pa.Table]:
    """`ingest` and `ingest.spots` for the spots, rows counted from 2 in the order given."""
    rows = [row for number, one in enumerate(spots, start=2) for row in _rows(one, number)]
    long = build(INGEST, {name: [row[name] for row in rows] for name in INGEST.names()})
    keys = [column.name for column in SPOT_KEYS]
    heads = [
        {**one, "row": number, "sequence": number - 1, "comment": None}
        for number, one in enumerate(spots, start=2)
    ]
    return long, build(
        INGEST_SPOTS, {name: [head[name] for head in heads] for name in (*keys, "sequence", "comment")}
    )


def _rows(one: Mapping[str, Any], number: int) -> Iterable[dict[str, Any]]:
    keys = {name: one[name] for name in (column.name for column in SPOT_KEYS) if name != "row"}
    for analyte, cell in one["values"].items():
        yield {
            **keys,
            "row": number,
            "analyte": analyte,
            "raw": str(cell),
            "unit": one["unit"],
            **_cell(cell),
        }


def _cell(cell: Any) -> dict[str, Any]:
    if isinstance(cell, str):
        return {"value": None, "sigma": None, "limit": float(cell.removeprefix("<")), "below_limit": True}
    parts = cell if isinstance(cell, tuple) else (cell,)
    value, sigma, limit = (*parts, None, None, None)[:3]
    below = value is not None and limit is not None and value < limit
    return {"value": value, "sigma": sigma, "limit": limit, "below_limit": below}
