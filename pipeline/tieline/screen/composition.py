"""Values as the tests use them, and what a phase of an experiment is made of, robustly."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.padding import FEW_CELLS, Block, Rows, blocks, column_medians
from tieline.screen.session import Measured
from tieline.statistics.robust import MADN_FACTOR

# Below this in every phase an element is a trace element; the usual meaning of the word.
TRACE_PPM = 1000.0

# Where a value's sigma is not given, its detection limit divided by this stands for it: a limit is 3 sigma of the blank.
SIGMAS_PER_LIMIT = 3.0

_MEDIAN_VARIANCE = np.pi / 2  # of a median over that of a mean, for many normal values


@dataclass(frozen=True)
class TestValues:
    """Values and sigmas in ppm, made for the rows asked for: a second table of all of them would take much memory.

    A value of which only the limit L is known is L/2 with sigma L/2; spots that are `hidden` (n,) have none.
    """

    __test__ = False  # not a pytest class

    measured: Measured
    hidden: BoolArray

    def without(self, spots: BoolArray) -> TestValues:
        """The same with all values of some spots (n,) taken away."""
        return TestValues(self.measured, self.hidden | spots)

    @property
    def value(self) -> Rows:
        return _Made(self, _values)

    @property
    def sigma(self) -> Rows:
        return _Made(self, _sigmas)


@dataclass(frozen=True)
class _Made:
    """One of the two, row by row."""

    source: TestValues
    make: Callable[[Measured], FloatArray]

    def __getitem__(self, rows: IntArray, /) -> FloatArray:
        made = self.make(self.source.measured.part(rows))
        made[self.source.hidden[rows]] = np.nan
        return made


def _values(part: Measured) -> FloatArray:
    return np.where(part.only_limit, 0.5 * part.limit, part.value)


def _sigmas(part: Measured) -> FloatArray:
    known = np.where(part.sigma > 0, part.sigma, part.limit / SIGMAS_PER_LIMIT)
    return np.where(part.only_limit, 0.5 * part.limit, known)


def values_for_tests(measured: Measured) -> TestValues:
    """Measured values also where they are below their limit; half the limit where there is nothing else."""
    return TestValues(measured, np.zeros(len(measured.spots), dtype=np.bool_))


def group_medians(
    measured: Measured, groups: IntArray, of_block: Callable[[Block], FloatArray]
) -> FloatArray:
    """Medians (G, p) over the spots of some groups, in ascending order, of what `of_block` gives of each block."""
    medians = np.full((len(groups), len(measured.analytes)), np.nan)
    for block in blocks(measured, groups, cells=FEW_CELLS):
        medians[np.searchsorted(groups, block.groups)] = column_medians(of_block(block))
    return medians


def trace_elements(measured: Measured, phase_of_spot: IntArray, whole: bool) -> BoolArray:
    """Which analytes (p,) behave as traces: all of a technique without totals, else those below 0.1 wt% in all phases."""
    if not whole:
        return np.ones(len(measured.analytes), dtype=np.bool_)
    medians = np.stack(
        [column_medians(measured.value[phase_of_spot == code]) for code in np.unique(phase_of_spot)]
    )
    return np.asarray(np.nanmax(np.nan_to_num(medians, nan=-np.inf), axis=0, initial=-np.inf) < TRACE_PPM)


@dataclass(frozen=True)
class Compositions:
    """Of some groups: `groups` (G,) ascending, `mean` and `variance` of one local composition (G, p), `number` of spots."""

    groups: IntArray
    mean: FloatArray
    variance: FloatArray
    number: IntArray

    def place(self, groups: IntArray) -> IntArray:
        """Where each of these groups stands, -1 where it does not."""
        at = np.minimum(np.searchsorted(self.groups, groups), max(len(self.groups) - 1, 0))
        if not len(self.groups):
            return np.full(len(groups), -1)
        return np.where(self.groups[at] == groups, at, -1)


def compositions(measured: Measured, values: TestValues, groups: IntArray) -> Compositions:
    """Median composition of every group, and the variance of a local one about it.

    The variance is the larger of the squared scaled median absolute deviation and the median counting variance, plus
    that of the median itself.
    """
    shape = (len(groups), len(measured.analytes))
    mean, variance = np.full((2, *shape), np.nan)
    number = np.zeros(len(groups), dtype=np.int64)
    for block in blocks(measured, groups):
        at = np.searchsorted(groups, block.groups)
        value, sigma = block.of(values.value), block.of(values.sigma)
        mean[at] = column_medians(value)
        spread = MADN_FACTOR * column_medians(np.abs(value - mean[at][:, None, :]))
        counting = np.nan_to_num(column_medians(sigma)) ** 2
        count = np.isfinite(value).sum(axis=1)
        variance[at] = np.maximum(spread**2, counting) * (1.0 + _MEDIAN_VARIANCE / np.maximum(count, 1))
        number[at] = np.isfinite(value).any(axis=2).sum(axis=1)
    return Compositions(groups, mean, variance, number)
