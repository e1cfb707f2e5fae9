"""The lattice-strain curve through partition coefficients: model, fit and limits.

Public: `lattice_strain`, `fit_curve`, `fit_curves` for many series side by side; the data go in as `Coefficients`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from tieline.statistics.lattice_strain_few import Linear, Scatter, cut, scatter_of
from tieline.statistics.lattice_strain_outcome import (
    CANNOT_TELL,
    FITTED,
    CurveFit,
    Estimate,
    different_radii,
    no_fit,
    outcome,
)
from tieline.statistics.lattice_strain_problem import (
    OVERLAP,
    PARAMETERS,
    STRAIN_FACTOR,
    Coefficients,
    Prior,
    Problem,
    internal,
    strain_energy,
)
from tieline.statistics.lattice_strain_search import solve
from tieline.statistics.lattice_strain_stack import stack
from tieline.statistics.least_squares import (
    BoolArray,
    FloatArray,
    ProfileSearch,
    covariances,
    minimise,
)

__all__ = [
    "CANNOT_TELL",
    "FITTED",
    "Coefficients",
    "CurveFit",
    "Estimate",
    "Prior",
    "fit_curve",
    "fit_curves",
    "lattice_strain",
]

# How often a profile may come down into a deeper minimum, from which the fit then starts again.
_DESCENTS = 5


def lattice_strain(
    radius: FloatArray, temperature_K: FloatArray | float, D0: float, r0: float, E: float
) -> FloatArray:
    """D of ions of these radii (Å) on a site of radius r0 (Å) and Young's modulus E (GPa), D0 that of an ion that fits.

    D = D0 exp{-4 pi E N_A [½ r0 (r - r0)² + ⅓ (r - r0)³] / (R T)} (Blundy & Wood 1994, Nature 372:452, eq. 2; written
    from memory). Holds for ions of one charge on one site.
    """
    energy = strain_energy(np.asarray(radius, dtype=np.float64), np.asarray(r0))
    return np.asarray(D0 * np.exp(-STRAIN_FACTOR * E / np.asarray(temperature_K) * energy))


def fit_curve(
    data: Coefficients,
    temperature_K: float,
    *,
    overlap: bool = False,
    priors: Mapping[str, Prior] | None = None,
    confidence: float = 0.95,
) -> CurveFit:
    """`fit_curves` of a single series."""
    return fit_curves(
        [data], [temperature_K], overlap=[overlap], priors=[priors or {}], confidence=confidence
    )[0]


def fit_curves(
    data: Sequence[Coefficients],
    temperature_K: Sequence[float],
    *,
    overlap: Sequence[bool] | None = None,
    priors: Sequence[Mapping[str, Prior]] | None = None,
    confidence: float = 0.95,
) -> list[CurveFit]:
    """Weighted nonlinear least squares for D0, r0 and E of every series, and for the overlap fraction f where `overlap`.

    The curve is `lattice_strain`; with overlap every measured D is D + f (1 - D), f >= 0. The values' full covariance is
    used; limits enter with the probability that a value lies below them. priors: one mapping per series, by name of
    `PARAMETERS`, in the parameter's own unit; a prior with sd 0 fixes the parameter. Intervals follow the profile likelihood
    (Venzon & Moolgavkar 1988, Appl. Statist. 37:87), which needs no straight-line approximation; where errors are known
    with few degrees of freedom, it is cut where `Linear.few` says.

    Verdict "cannot tell" with a reason, instead of numbers, where there are too few different radii, where parameters
    cannot be told apart, or where the interval of r0 or E is open. Raises ValueError for a temperature, confidence or
    prior that makes no sense.
    """
    temperatures = np.asarray(temperature_K, dtype=np.float64)
    if not np.all(temperatures > 0) or not 0 < confidence < 1:
        raise ValueError(f"temperature {temperature_K} K or confidence {confidence} makes no sense")
    given = [dict(one) for one in priors] if priors is not None else [{} for _ in data]
    free, base = np.ones((len(data), 4), dtype=bool), np.tile([0.0, 1.0, np.log(200.0), 0.0], (len(data), 1))
    free[:, OVERLAP] = overlap if overlap is not None else False
    for row, known in enumerate(given):
        _check_priors(known)
        if not free[row, OVERLAP] and "overlap" in known and known["overlap"].sd > 0:
            del known["overlap"]
        for name, prior in known.items():
            index = PARAMETERS.index(name)
            free[row, index] &= prior.sd > 0
            base[row, index] = internal(index, prior)[0]
    fits: list[CurveFit | None] = [None] * len(data)
    for row, one in enumerate(data):
        need = int(free[row].sum()) - sum(prior.sd > 0 for prior in given[row].values())
        different = different_radii(one.radius)
        if different < max(need, 1):
            fits[row] = no_fit(
                one, f"{different} different radii with a value cannot determine {need} parameters"
            )
    rows = np.array([row for row, fit in enumerate(fits) if fit is None], dtype=np.int64)
    if len(rows):
        chosen = [data[row] for row in rows], temperatures[rows], [given[row] for row in rows]
        problem, theta = solve(*stack(*chosen), free[rows], base[rows])
        finished = _finish(chosen[0], chosen[2], problem, theta, free[rows], confidence)
        for row, fit in zip(rows, finished, strict=True):
            fits[row] = fit
    return [fit for fit in fits if fit is not None]


def _check_priors(priors: Mapping[str, Prior]) -> None:
    for name, prior in priors.items():
        if name not in PARAMETERS or not prior.value > 0 or not prior.sd >= 0 or not np.isfinite(prior.sd):
            raise ValueError(
                f"prior {prior} of {name!r}: names are {', '.join(PARAMETERS)}, values above zero"
            )


def _finish(
    data: Sequence[Coefficients], priors: Sequence[Mapping[str, Prior]], problem: Problem, theta: FloatArray,
    free: BoolArray, confidence: float,
) -> list[CurveFit]:  # fmt: skip
    """Covariance, scatter and profile limits of minima."""
    spread, limits = np.full((len(data), 4, 4), np.nan), np.full((len(data), 4, 2), np.nan)
    scatter = Scatter(*np.full((6, len(data)), np.nan))
    rows = np.arange(len(data))
    for _ in range(_DESCENTS):
        part = problem.take(rows)
        spread[rows] = covariances(part.residuals(theta[rows])[1], free[rows])
        rows = rows[~np.isnan(spread[rows, 0, 0])]
        if not len(rows):
            break
        part = problem.take(rows)
        linear = Linear.of(part, theta[rows], spread[rows])
        found = scatter_of(part, theta[rows], free[rows], linear)
        for name, array in vars(found).items():
            getattr(scatter, name)[rows] = array
        limits[rows], better, deeper = _limits(part, theta[rows], free[rows], linear, found, confidence)
        if not deeper.any():
            break
        # the profile came down into a deeper minimum: start again from there
        rows, part = rows[deeper], part.take(np.flatnonzero(deeper))
        theta[rows] = minimise(
            part.residuals, better[deeper], free[rows], part.lower, part.upper, subset=part.subset
        ).theta
    return [
        outcome(
            one, priors[row], problem.take(np.array([row])), theta[row], spread[row], limits[row], free[row],
            scatter.take(np.array([row])), confidence,
        )
        for row, one in enumerate(data)
    ]  # fmt: skip


def _limits(
    problem: Problem, theta: FloatArray, free: BoolArray, linear: Linear, scatter: Scatter, confidence: float
) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Profile limits (problems, 4, 2); parameters below the minimum met on the way, and where there are such."""
    cuts = np.stack(
        [
            cut(linear, np.eye(4)[[index] * len(theta)], scatter.scale, scatter.dof, confidence)
            for index in range(4)
        ],
        axis=1,
    )
    rows, which = np.nonzero(free)
    rows, which, side = np.repeat(rows, 2), np.repeat(which, 2), np.tile([-1.0, 1.0], len(rows))
    many = problem.take(rows)
    cost = np.sum(problem.residuals(theta)[0] ** 2, axis=1)
    search = ProfileSearch(
        many.residuals, theta[rows], cost[rows], linear.spread[rows], cuts[rows, which], which, side, free[rows],
        many.lower, many.upper, subset=many.subset,
    )  # fmt: skip
    limits = np.full((len(theta), 4, 2), np.nan)
    limits[rows, which, (side > 0).astype(int)] = search.run()
    better, deeper = theta.copy(), np.zeros(len(theta), dtype=bool)
    lowest = cost.copy()
    for row, candidate, value in zip(rows, search.better, search.lowest, strict=True):
        if value < lowest[row]:
            better[row], lowest[row] = candidate, value
    deeper[rows[search.found_deeper]] = True
    return limits, better, deeper
