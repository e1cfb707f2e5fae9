"""Groups with censored values cut out of flat arrays as rows of rectangles, with the noise model of `censored`."""

from dataclasses import dataclass

import numpy as np

from tieline.statistics.groups import (
    BoolArray,
    FloatArray,
    IntArray,
    divide,
    group_count,
    group_extreme,
    group_mean,
    group_sum,
)

GROWTH_TO_LIMIT = 0.5


@dataclass(frozen=True)
class PaddedRows:
    """Values or limits of groups as rows, and their blank variances, shape (G, N); `present` is 1 or 0."""

    level: FloatArray
    blank: FloatArray
    present: FloatArray

    def of(self, chosen: IntArray) -> "PaddedRows":
        return PaddedRows(self.level[chosen], self.blank[chosen], self.present[chosen])


@dataclass(frozen=True)
class PaddedGroups:
    """Groups as rows: measured values, limits of the others, and the growth kappa of the noise, shape (G,)."""

    measured: PaddedRows
    below: PaddedRows
    kappa: FloatArray

    def of(self, chosen: IntArray) -> "PaddedGroups":
        if len(chosen) == len(self.kappa):
            return self
        return PaddedGroups(self.measured.of(chosen), self.below.of(chosen), self.kappa[chosen])

    @property
    def scale(self) -> FloatArray:
        """The largest value or limit of every group."""
        largest = [
            (part.present * np.abs(part.level)).max(axis=1, initial=0.0)
            for part in (self.measured, self.below)
        ]
        return np.asarray(np.maximum(*largest), dtype=np.float64)


class Rectangles:
    """Cuts groups out of the flat arrays as rows of rectangles, with their noise model."""

    def __init__(
        self,
        values: FloatArray,
        sigmas: FloatArray,
        limits: FloatArray,
        censored: BoolArray,
        group: IntArray,
        n_groups: int,
        limit_in_sigmas: float,
    ) -> None:
        blank, self.kappa = _noise_model(values, sigmas, limits, censored, group, n_groups, limit_in_sigmas)
        self.parts = [
            (rows[np.argsort(group[rows], kind="stable")], level, blank, group_count(group[rows], n_groups))
            for rows, level in ((np.flatnonzero(~censored), values), (np.flatnonzero(censored), limits))
        ]

    def __call__(self, chosen: IntArray) -> PaddedGroups:
        measured, below = (self._rows(*part, chosen) for part in self.parts)
        return PaddedGroups(measured, below, self.kappa[chosen])

    @staticmethod
    def _rows(
        ordered: IntArray, level: FloatArray, blank: FloatArray, count: IntArray, chosen: IntArray
    ) -> PaddedRows:
        start = (np.cumsum(count) - count)[chosen, None]
        place = np.arange(int(count[chosen].max(initial=0)))
        present = place < count[chosen, None]
        rows = (
            ordered[np.where(present, start + place, 0)]
            if present.any()
            else np.zeros(present.shape, np.int64)
        )
        return PaddedRows(
            np.where(present, level[rows], 0.0),
            np.where(present, blank[rows], 1.0),
            present.astype(np.float64),
        )


def _noise_model(
    values: FloatArray,
    sigmas: FloatArray,
    limits: FloatArray,
    censored: BoolArray,
    group: IntArray,
    n_groups: int,
    limit_in_sigmas: float,
) -> tuple[FloatArray, FloatArray]:
    """Blank variance of every value, shape (S,), and kappa of every group, shape (n_groups,)."""
    from_limit = (limits / limit_in_sigmas) ** 2
    blank = np.where(censored & ~np.isnan(sigmas), sigmas**2, from_limit)
    known = ~np.isnan(blank)
    usual = group_mean(blank[known], group[known], n_groups)
    blank = np.where(known, blank, usual[group])
    measured = ~censored & ~np.isnan(sigmas)
    code, level = group[measured], np.maximum(values[measured], 0.0)
    excess = group_sum(sigmas[measured] ** 2 - blank[measured], code, n_groups)
    weight = group_sum(blank[measured] * level, code, n_groups)
    smallest_limit = group_extreme(limits[censored], group[censored], n_groups, largest=False)
    default = divide(np.full(n_groups, GROWTH_TO_LIMIT), np.nan_to_num(smallest_limit), otherwise=0.0)
    has_measured = weight > 0
    kappa = np.where(has_measured, divide(np.maximum(excess, 0.0), weight, 0.0), default)
    # Sigmas below the blank's: the limit was more than three blank sigmas.
    reported = group_sum(sigmas[measured] ** 2, code, n_groups)
    modelled = group_sum(blank[measured] * (1.0 + kappa[code] * level), code, n_groups)
    shrink = np.where(has_measured, np.minimum(divide(reported, modelled, 1.0), 1.0), 1.0)
    given = censored & ~np.isnan(sigmas)
    return np.where(given, blank, blank * shrink[group]), kappa
