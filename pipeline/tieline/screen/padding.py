"""Groups of spots side by side in one array, so that linear algebra runs over many groups at once."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray, portions
from tieline.screen.session import Measured

# Cells of one block: keeps the working memory of a test to some tens of megabytes.
CELLS_AT_ONCE = 2_000_000
# The same for tests that need a dozen arrays of every block: these stay in the processor's cache.
FEW_CELLS = 200_000


def few_rows(n_rows: int, width: int) -> Iterator[slice]:
    """Portions of a matrix of so many rows that a dozen arrays of one stay in the processor's cache.

    Their starts are multiples of eight, where a matrix product does the same as over all rows.
    """
    return portions(n_rows, max(8, FEW_CELLS // max(1, width) // 8 * 8))


class Rows(Protocol):
    """Values of every spot of `Measured` that are made when rows of them are asked for."""

    def __getitem__(self, rows: IntArray, /) -> FloatArray: ...


@dataclass(frozen=True)
class Block:
    """G groups of at most n spots: `groups` (G,) numbers in `Spots.groups`, `rows` (G, n) rows of `Measured`, -1: none."""

    groups: IntArray
    rows: IntArray

    @property
    def occupied(self) -> BoolArray:
        return np.asarray(self.rows >= 0)

    def of(self, values: FloatArray | Rows) -> FloatArray:
        """Values of `Measured`, one or several per spot, as (G, n, ...) with NaN where there is no spot."""
        taken = values[self.rows]
        taken[~self.occupied] = np.nan
        return np.asarray(taken)


def blocks(
    measured: Measured, groups: IntArray, *, exact: bool = False, cells: int = CELLS_AT_ONCE
) -> Iterator[Block]:
    """The given groups in blocks of similar size; with `exact` of the same size, so that nothing is padded."""
    first = np.searchsorted(measured.group, groups)
    size = np.searchsorted(measured.group, groups, side="right") - first
    order = np.argsort(size, kind="stable")
    order = order[size[order] > 0]
    ordered = size[order]
    width = max(1, len(measured.analytes))
    start = 0
    while start < len(order):
        smallest = int(ordered[start])
        largest = smallest if exact else max(2 * smallest, 16)
        end = int(np.searchsorted(ordered, largest, side="right"))
        # Padded to the last and largest of them, so many groups do not exceed the number of cells.
        allowed = np.arange(1, end - start + 1) * ordered[start:end] * width <= cells
        end = start + max(1, int(np.count_nonzero(allowed)))
        chosen = np.sort(order[start:end])
        place = np.arange(int(size[chosen].max()))
        rows = np.where(place < size[chosen][:, None], first[chosen][:, None] + place, -1)
        yield Block(groups[chosen], rows)
        start = end


def column_medians(values: FloatArray, fewest: int = 1) -> FloatArray:
    """Medians (..., p) over the last axis but one, NaN left out; NaN where fewer than `fewest` values are known."""
    present = np.isfinite(values)
    count = present.sum(axis=-2)
    ordered = np.sort(np.where(present, values, np.inf), axis=-2)
    last = values.shape[-2] - 1
    low = np.take_along_axis(ordered, np.maximum(count - 1, 0)[..., None, :] // 2, axis=-2)[..., 0, :]
    high = np.take_along_axis(ordered, np.minimum(count // 2, last)[..., None, :], axis=-2)[..., 0, :]
    enough = count >= max(fewest, 1)
    return np.where(enough, 0.5 * (np.where(enough, low, 0.0) + np.where(enough, high, 0.0)), np.nan)
