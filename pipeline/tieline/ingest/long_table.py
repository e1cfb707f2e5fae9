"""The label columns of the long table, and the tables `ingest` and `ingest.spots` of all spot tables together.

Labels are dictionary columns from the start: eight million rows hold four-byte codes. Columns that say the
same in every row of a table share one buffer of codes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.columns import INGEST, INGEST_SPOTS, SPOT_KEYS
from tieline.ingest.matching import sequence_numbers
from tieline.ingest.roles import AnalyteColumn
from tieline.ingest.spots import Spots
from tieline.ingest.texts import Mask, Texts
from tieline.tables import ARROW_TYPES, build

LongBlock = dict[str, pa.Array]
Ints = npt.NDArray[np.int32]
LABELS = ("spot", "table", "technique", "batch", "experiment", "phase", "grain", "zone", "material")


@dataclass(frozen=True)
class TableParts:
    """One table: its spots with distance and order of measurement as numbers (NaN: none), and its long rows."""

    table: str
    spots: Spots
    distance_um: npt.NDArray[np.float64]
    order: npt.NDArray[np.float64]
    blocks: list[LongBlock]


class SharedCodes:
    """Arrays that say the same in every row, as slices of one buffer.

    Threads may share it: at worst a buffer is made twice.
    """

    def __init__(self) -> None:
        self._zeros: pa.Array = pa.array(np.zeros(0, np.int32))
        self._nulls: dict[pa.DataType, pa.Array] = {}

    def zeros(self, count: int) -> pa.Int32Array:
        zeros = self._zeros
        if len(zeros) < count:
            zeros = self._zeros = pa.array(np.zeros(count, np.int32))
        return zeros.slice(0, count)

    def nulls(self, count: int, kind: pa.DataType) -> pa.Array:
        nulls = self._nulls.get(kind)
        if nulls is None or len(nulls) < count:
            nulls = self._nulls[kind] = pa.nulls(count, kind)
        return nulls.slice(0, count)


class LongLabels:
    """The labels of one table's spots and analytes, spread over the rows of the long table."""

    def __init__(
        self,
        table: str,
        spots: Spots,
        distance_um: npt.NDArray[np.float64],
        analytes: Sequence[AnalyteColumn],
        shared: SharedCodes,
    ) -> None:
        self._shared = shared
        self._row = spots.row
        self._distance = None if np.isnan(distance_um).all() else distance_um
        self._texts = {name: getattr(spots, name) for name in LABELS if name != "table"}
        self._texts["table"] = Texts.constant(table, len(spots))
        self._dictionaries = {name: texts.dictionary() for name, texts in self._texts.items()}
        self._analytes = len(analytes)
        self._per_analyte = {
            "analyte": Texts.from_list([column.name for column in analytes]),
            "unit": Texts.from_list([column.unit for column in analytes]),
        }
        self._tiles: dict[tuple[str, int], pa.Array] = {}

    def at(self, places: Ints, keep: Mask | None) -> LongBlock:
        """Label columns of the spots at `places`, every spot repeated for each analyte; only rows in `keep`."""
        repeated = np.repeat(places, self._analytes)
        if keep is not None:
            repeated = repeated[keep]
        columns: LongBlock = {}
        for name, texts in self._texts.items():
            columns[name] = pa.DictionaryArray.from_arrays(
                self._codes(texts, repeated), self._dictionaries[name]
            )
        columns["row"] = pa.array(self._row[repeated])
        columns["distance_um"] = (
            self._shared.nulls(len(repeated), pa.float64())
            if self._distance is None
            else pa.array(self._distance[repeated], from_pandas=True)
        )
        for name, texts in self._per_analyte.items():
            codes = (
                self._tile(name, len(places))
                if keep is None
                else self._tile(name, len(places)).filter(pa.array(keep))
            )
            columns[name] = pa.DictionaryArray.from_arrays(codes, texts.dictionary())
        return columns

    def no_number(self, count: int, keep: Mask | None) -> pa.Array:
        """A number column without any number."""
        return self._shared.nulls(count if keep is None else int(keep.sum()), pa.float64())

    def _codes(self, texts: Texts, repeated: Ints) -> pa.Array:
        if not texts.known:
            return self._shared.nulls(len(repeated), pa.int32())
        missing = texts.codes < 0
        if len(texts.known) == 1 and not missing.any():
            return self._shared.zeros(len(repeated))
        codes = texts.codes[repeated]
        return pa.array(codes, mask=codes < 0) if missing.any() else pa.array(codes)

    def _tile(self, name: str, count: int) -> pa.Array:
        """The codes of all analytes, once for each of `count` spots; blocks of one size share them."""
        if (name, count) not in self._tiles:
            self._tiles[name, count] = pa.array(np.tile(self._per_analyte[name].codes, count))
        return self._tiles[name, count]


def long_table(parts: Sequence[TableParts]) -> pa.Table:
    """`ingest` from the blocks of all tables."""
    blocks = [block for part in parts for block in part.blocks]
    schema = INGEST.schema()
    columns = {}
    for field in schema:
        column = pa.chunked_array([block[field.name] for block in blocks], field.type)
        is_label = pa.types.is_dictionary(field.type)
        columns[field.name] = column.unify_dictionaries() if is_label and len(parts) > 1 else column
    return build(INGEST, columns)


def spot_table(parts: Sequence[TableParts]) -> pa.Table:
    """`ingest.spots`, with the place of every spot in the order of measurement of its batch."""
    sizes = [len(part.spots) for part in parts]
    columns: dict[str, Any] = {}
    for column in SPOT_KEYS:
        if column.kind == "label":
            arrays = [
                Texts.constant(part.table, len(part.spots)).arrow()
                if column.name == "table"
                else getattr(part.spots, column.name).arrow()
                for part in parts
            ]
            columns[column.name] = pa.chunked_array(arrays, ARROW_TYPES["label"]).unify_dictionaries()
    batch = columns["batch"].combine_chunks()
    order = np.concatenate([part.order for part in parts])
    table_of = np.repeat(np.arange(len(parts)), sizes)
    columns["sequence"] = sequence_numbers(batch.indices.to_numpy(), len(batch.dictionary), table_of, order)
    columns["row"] = np.concatenate([part.spots.row for part in parts])
    columns["distance_um"] = np.concatenate([part.distance_um for part in parts])
    columns["comment"] = pa.chunked_array([part.spots.comment.arrow().cast(pa.string()) for part in parts])
    return build(INGEST_SPOTS, columns)
