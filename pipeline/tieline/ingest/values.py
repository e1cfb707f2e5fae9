"""The long table, built block by block so that memory stays bounded: one row per spot and analyte."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.ingest.asides import Asides
from tieline.ingest.long_table import LongBlock, LongLabels
from tieline.ingest.matrices import Counts, Floats, Mask, Matrices, cell_matrices
from tieline.ingest.roles import Roles
from tieline.reading.grid import Block, Grid
from tieline.settings.ingest import Table

Result = TypeVar("Result")


def long_blocks(
    grid: Grid, table: Table, roles: Roles, keep: Mask, labels: LongLabels, asides: Asides, counts: Counts
) -> list[LongBlock]:
    """Every block of the grid as rows of the long table; the grid is emptied on the way.

    Blocks are worked on side by side, on as many threads as Arrow uses, and put together in their order.
    """

    def work(spots: Block, place: int) -> tuple[LongBlock, Asides, Counts]:
        own_asides, own_counts = Asides(asides.table, asides.most), Counts()
        matrices = cell_matrices(spots, table, roles, grid.found.decimal, own_asides, own_counts)
        return _interleaved(spots, roles, labels, place, matrices), own_asides, own_counts

    blocks = []
    for block, own_asides, own_counts in _side_by_side(work, _kept_blocks(grid, keep), len(grid.blocks)):
        blocks.append(block)
        asides.add_all(own_asides)
        counts.add(own_counts)
    return blocks


def check_blocks(grid: Grid, table: Table, roles: Roles, keep: Mask, asides: Asides) -> None:
    """Sends unreadable cells to `asides` and makes nothing of the others; the grid is emptied on the way."""
    for spots, _ in _kept_blocks(grid, keep):
        cell_matrices(spots, table, roles, grid.found.decimal, asides, Counts())


def _kept_blocks(grid: Grid, keep: Mask) -> Iterator[tuple[Block, int]]:
    """The spots of every block that has any, and how many spots come before them."""
    start, place = 0, 0
    for block in grid.drain():
        spots = block.kept(keep[start : start + len(block.rows)])
        start += len(block.rows)
        if len(spots.rows):
            yield spots, place
        place += len(spots.rows)


def _side_by_side(
    work: Callable[[Block, int], Result], tasks: Iterator[tuple[Block, int]], count: int
) -> Iterator[Result]:
    """The results in the order of the tasks; no more than one task per thread is taken ahead."""
    threads = min(pa.cpu_count(), count)
    if threads < 2:
        yield from (work(*task) for task in tasks)
        return
    with ThreadPoolExecutor(threads) as pool:
        running: deque[Future[Result]] = deque()
        for task in tasks:
            running.append(pool.submit(work, *task))
            if len(running) > threads:
                yield running.popleft().result()
        while running:
            yield running.popleft().result()


def _interleaved(block: Block, roles: Roles, labels: LongLabels, place: int, matrices: Matrices) -> LongBlock:
    """Rows of the long table, spot by spot, without the unreadable cells."""
    n, m = matrices.value.shape
    order = (np.arange(n, dtype=np.int64)[:, None] + np.arange(m, dtype=np.int64) * n).ravel()
    keep = None if not matrices.unreadable.any() else ~matrices.unreadable.ravel()
    texts = pa.concat_arrays([block.cells[column.index] for column in roles.analytes])
    columns = labels.at(np.arange(place, place + n, dtype=np.int32), keep)
    columns["raw"] = texts.take(pa.array(_chosen(order, keep)))
    columns["value"] = _number_column(matrices.value, keep)
    columns["sigma"] = (
        labels.no_number(n * m, keep) if matrices.sigma is None else _number_column(matrices.sigma, keep)
    )
    columns["limit"] = (
        labels.no_number(n * m, keep) if matrices.limit is None else _number_column(matrices.limit, keep)
    )
    columns["below_limit"] = pa.array(_chosen(matrices.below.ravel(), keep))
    return columns


def _number_column(matrix: Floats, keep: Mask | None) -> pa.DoubleArray:
    return pa.array(_chosen(matrix.ravel(), keep), from_pandas=True)  # NaN becomes null


def _chosen(array: npt.NDArray[Any], keep: Mask | None) -> npt.NDArray[Any]:
    return array if keep is None else array[keep]
