"""Lattice-strain problems of many series side by side, filled up to the same length."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields

import numpy as np

from tieline.statistics.lattice_strain_problem import (
    PARAMETERS,
    RADIUS,
    Coefficients,
    Prior,
    Problem,
    internal,
)
from tieline.statistics.least_squares import BoolArray, FloatArray, IntArray

# searched range of (ln D0, r0 in Å, ln E in GPa, f); r0 is narrowed to the neighbourhood of the radii
_LOWER = np.array([-40.0, 0.1, np.log(1.0), 0.0])
_UPPER = np.array([20.0, 3.0, np.log(2e4), 0.999])
_BEYOND_RADII = 0.3


@dataclass(frozen=True)
class Errors:
    """The covariances of many series, filled up to the same length; `relative` says which have errors proportional to D."""

    used: BoolArray
    variance: FloatArray
    relative_variance: FloatArray
    shared: FloatArray

    @property
    def relative(self) -> BoolArray:
        return np.asarray(self.relative_variance.any(axis=1) | self.shared.any(axis=(1, 2)))

    def take(self, rows: IntArray) -> Errors:
        return Errors(self.used[rows], self.variance[rows], self.relative_variance[rows], self.shared[rows])

    def at(self, curve: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Whitening (problems, n, n), standard deviations and independent variances (problems, n) if `curve` is true."""
        own = self.variance + self.relative_variance * curve**2
        total = self.shared * curve[:, :, None] * curve[:, None, :]
        place = np.arange(own.shape[1])
        total[:, place, place] += own
        both = self.used[:, :, None] & self.used[:, None, :]
        whitening = np.linalg.inv(np.linalg.cholesky(np.where(both, total, np.eye(len(place)))))
        return np.where(both, whitening, 0.0), np.sqrt(total[:, place, place]), own


def stack(
    data: Sequence[Coefficients], temperature_K: FloatArray, priors: Sequence[Mapping[str, Prior]]
) -> tuple[Problem, Errors]:
    """Series of any lengths side by side, their covariance taken at the measured values."""
    n = max((len(one.radius) for one in data), default=0)
    m = max((len(one.limit) for one in data), default=0)

    def rows(values: Sequence[FloatArray | None], width: int, fill: float) -> FloatArray:
        table = np.full((len(data), width), fill)
        for row, one in enumerate(values):
            if one is not None:
                table[row, : len(one)] = one
        return table

    shared = np.zeros((len(data), n, n))
    for row, one in enumerate(data):
        if one.relative_covariance is not None:
            shared[row, : len(one.radius), : len(one.radius)] = one.relative_covariance
    errors = Errors(
        rows([np.ones(len(one.radius)) for one in data], n, 0.0) > 0,
        rows([one.variance for one in data], n, 1.0),
        rows([one.relative_variance for one in data], n, 0.0),
        shared,
    )
    value = rows([one.value for one in data], n, 0.0)
    whitening, sd, own = errors.at(np.maximum(value, 0.0))
    centre, weight = np.zeros((len(data), 4)), np.zeros((len(data), 4))
    lower, upper = np.tile(_LOWER, (len(data), 1)), np.tile(_UPPER, (len(data), 1))
    for row, (one, known) in enumerate(zip(data, priors, strict=True)):
        radii = np.concatenate([one.radius, one.limit_radius])
        for name, prior in known.items():
            index = PARAMETERS.index(name)
            middle, error = internal(index, prior)
            centre[row, index] = middle
            weight[row, index] = 1.0 / error if error > 0 else 0.0
            if index == RADIUS:
                radii = np.append(radii, prior.value)
        lower[row, RADIUS] = max(radii.min() - _BEYOND_RADII, _LOWER[RADIUS])
        upper[row, RADIUS] = radii.max() + _BEYOND_RADII
    return Problem(
        rows([one.radius for one in data], n, 1.0), value, whitening, sd, own,
        rows([one.dof for one in data], n, np.inf),
        rows([one.limit_radius for one in data], m, 1.0), rows([one.limit for one in data], m, np.inf),
        rows([one.limit_sd for one in data], m, 1.0), np.asarray(temperature_K, dtype=np.float64), centre, weight,
        lower, upper, bool(weight.any()),
    ), errors  # fmt: skip


def side_by_side(problems: Sequence[Problem]) -> Problem:
    """The problems of fits made apart as one; series of another length are filled up."""
    n = max(one.value.shape[1] for one in problems)
    m = max(one.limit.shape[1] for one in problems)
    per_limit = ("limit_radius", "limit", "limit_sd")
    fill = {"radius": 1.0, "sd": 1.0, "dof": np.inf, "limit_radius": 1.0, "limit": np.inf, "limit_sd": 1.0}

    def joined(name: str) -> FloatArray:
        arrays = [getattr(one, name) for one in problems]
        if name in ("radius", "value", "whitening", "sd", "own_variance", "dof", *per_limit):
            width = m if name in per_limit else n
            arrays = [_wide(array, width, fill.get(name, 0.0)) for array in arrays]
        return np.concatenate(arrays)

    names = [one.name for one in fields(Problem) if one.name not in ("reference", "any_prior")]
    return Problem(**{name: joined(name) for name in names}, any_prior=any(one.any_prior for one in problems))


def _wide(array: FloatArray, width: int, fill: float) -> FloatArray:
    missing = width - array.shape[-1]
    if not missing:
        return array
    return np.pad(array, [(0, 0)] + [(0, missing)] * (array.ndim - 1), constant_values=fill)
