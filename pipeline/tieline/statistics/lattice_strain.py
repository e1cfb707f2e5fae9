"""The lattice-strain curve through partition coefficients: model, fit and limits.

Public: `lattice_strain`, `fit_curve`; the data go in as `Coefficients`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from scipy import special

from tieline.statistics.lattice_strain_problem import (
    MODULUS,
    OVERLAP,
    PARAMETERS,
    RADIUS,
    STRAIN_FACTOR,
    Coefficients,
    Prior,
    Problem,
    internal,
    solve,
    spreads,
    strain_energy,
)
from tieline.statistics.least_squares import BoolArray, FloatArray, minimise, profile_limits

__all__ = [
    "Coefficients",
    "CurveFit",
    "Estimate",
    "Prior",
    "fit_curve",
    "lattice_strain",
]

FITTED, CANNOT_TELL = "fitted", "cannot tell"
_SAME_RADIUS = 1e-4
_EXCESS = 0.05


def lattice_strain(
    radius: FloatArray, temperature_K: FloatArray | float, D0: float, r0: float, E: float
) -> FloatArray:
    """D of ions of these radii (Å) on a site of radius r0 (Å) and Young's modulus E (GPa), D0 that of an ion that fits.

    D = D0 exp{-4 pi E N_A [½ r0 (r - r0)² + ⅓ (r - r0)³] / (R T)} (Blundy & Wood 1994, Nature 372:452, eq. 2; written
    from memory). Holds for ions of one charge on one site.
    """
    energy = strain_energy(np.asarray(radius, dtype=np.float64), np.asarray(r0))
    return np.asarray(D0 * np.exp(-STRAIN_FACTOR * E / np.asarray(temperature_K) * energy))


@dataclass(frozen=True)
class Estimate:
    """A parameter with its standard deviation, interval and where it comes from.

    status: fitted, fixed, prior (the prior holds more than half of what is known) or undetermined (value and sd are nan;
    an open end of the interval is infinite).
    """

    value: float
    sd: float
    low: float
    high: float
    status: str


@dataclass(frozen=True)
class CurveFit:
    """A fitted curve, or the reason why there is none.

    D0, r0 (Å), E (GPa) and the fraction of the other phase in the crystal, `overlap`; covariance (4, 4) of
    (ln D0, r0, E, overlap), as stated and not scaled. chi_square over dof with its p-value compares the scatter about the
    curve with the stated errors; `scale` is 1, or chi_square/dof where that is too large (p < 0.05): intervals then rest on
    the scatter, with Student's t. curve, sigmas: (n,) fitted D of the crystal, and residuals in standard deviations.
    """

    verdict: str
    reason: str
    remarks: tuple[str, ...]
    D0: Estimate
    r0: Estimate
    E: Estimate
    overlap: Estimate
    covariance: FloatArray
    chi_square: float
    dof: int
    p_value: float
    scale: float
    quantile: float
    curve: FloatArray
    sigmas: FloatArray
    theta: FloatArray = field(repr=False)
    log_covariance: FloatArray = field(repr=False)
    problem: Problem | None = field(repr=False, default=None)


def fit_curve(
    data: Coefficients,
    temperature_K: float,
    *,
    overlap: bool = False,
    priors: Mapping[str, Prior] | None = None,
    confidence: float = 0.95,
) -> CurveFit:
    """Weighted nonlinear least squares for D0, r0 and E, and for the overlap fraction f where asked for.

    The curve is `lattice_strain`; with overlap every measured D is D + f (1 - D), f >= 0. The values' full covariance is
    used; limits enter with the probability that a value lies below them. priors: by name of `PARAMETERS`, in the
    parameter's own unit; a prior with sd 0 fixes the parameter. Intervals follow the profile likelihood (Venzon &
    Moolgavkar 1988, Appl. Statist. 37:87), which needs no straight-line approximation.

    Verdict "cannot tell" with a reason, instead of numbers, where there are too few different radii, where parameters
    cannot be told apart, or where the interval of r0 or E is open. Raises ValueError for a temperature, confidence or
    prior that makes no sense.
    """
    if not temperature_K > 0 or not 0 < confidence < 1:
        raise ValueError(f"temperature {temperature_K} K or confidence {confidence} makes no sense")
    given = _priors(priors or {})
    free = np.array([prior is None or prior.sd > 0 for prior in given])
    free[OVERLAP] &= overlap
    base = np.array([0.0, 1.0, np.log(200.0), 0.0])
    for index, prior in enumerate(given):
        if prior is not None and (prior.sd == 0 or index != OVERLAP or overlap):
            base[index] = internal(index, prior)[0]
    given = tuple(prior if free[index] else None for index, prior in enumerate(given))
    known = sum(prior is not None for prior in given)
    different = different_radii(data.radius)
    if different + known < free.sum() or different == 0:
        need = int(free.sum()) - known
        return _no_fit(data, f"{different} different radii with a value cannot determine {need} parameters")
    problem, found = solve(data, temperature_K, given, free, base)
    return _finish(
        data, problem, found.theta[0], float(found.sum_of_squares[0]), free, priors or {}, confidence
    )


def _priors(priors: Mapping[str, Prior]) -> tuple[Prior | None, ...]:
    for name, prior in priors.items():
        if name not in PARAMETERS or not prior.value > 0 or not prior.sd >= 0 or not np.isfinite(prior.sd):
            raise ValueError(
                f"prior {prior} of {name!r}: names are {', '.join(PARAMETERS)}, values above zero"
            )
    return tuple(priors.get(name) for name in PARAMETERS)


def different_radii(radius: FloatArray) -> int:
    """How many radii differ by more than 0.0001 Å."""
    return 1 + int(np.sum(np.diff(np.sort(radius)) > _SAME_RADIUS)) if len(radius) else 0


def _finish(
    data: Coefficients, problem: Problem, theta: FloatArray, cost: float, free: BoolArray,
    priors: Mapping[str, Prior], confidence: float,
) -> CurveFit:  # fmt: skip
    """Covariance, scatter and profile limits of a minimum."""
    (log_covariance,) = spreads(problem, theta[None, :], free)
    if log_covariance is None:
        return _no_fit(data, "the parameters cannot be told apart with these radii")
    number_of_priors = sum(prior is not None for prior in problem.priors)
    residuals, _jacobian = problem.residuals(theta[None, :])
    count = len(data.value)
    tail = len(residuals[0]) - number_of_priors
    chi_square = float(np.sum(residuals[0, :count] ** 2) + np.sum(residuals[0, tail:] ** 2))
    dof = count + number_of_priors - int(free.sum())
    p_value = float(special.chdtrc(dof, chi_square)) if dof > 0 else np.nan
    scale = chi_square / dof if dof > 0 and p_value < _EXCESS else 1.0
    probability = 0.5 + 0.5 * confidence
    quantile = float(special.stdtrit(dof, probability) if scale > 1 else special.ndtri(probability))
    profile = profile_limits(
        problem.residuals, theta, cost, log_covariance, scale * quantile**2, free, *problem.bounds
    )
    if profile.better is not None:  # the profile came down into a deeper minimum: start again from there
        again = minimise(problem.residuals, profile.better[None, :], free[None, :], *problem.bounds)
        if again.sum_of_squares[0] < cost - 1e-7 * (1.0 + cost):
            return _finish(
                data, problem, again.theta[0], float(again.sum_of_squares[0]), free, priors, confidence
            )
    estimates = [
        _estimate(index, theta, log_covariance, profile.limits[index], free, priors.get(name))
        for index, name in enumerate(PARAMETERS)
    ]
    curve = problem.curve(theta[None, :], data.radius)[0][0]
    apparent = problem.apparent(theta[None, :], data.radius)[0][0]
    natural = _stretch(theta)
    natural[0] = 1.0
    verdict, reason = _verdict(problem, estimates, theta, free)
    fit = CurveFit(
        verdict, reason, _remarks(data, theta, p_value, free),
        estimates[0], estimates[1], estimates[2], estimates[3], covariance=log_covariance * np.outer(natural, natural),
        chi_square=chi_square, dof=dof, p_value=p_value, scale=scale, quantile=quantile, curve=curve,
        sigmas=(data.value - apparent) / np.sqrt(np.diag(problem.covariance)),
        theta=theta, log_covariance=log_covariance, problem=problem,
    )  # fmt: skip
    return fit if verdict == FITTED else _without_numbers(fit)


def _estimate(
    index: int,
    theta: FloatArray,
    spread_: FloatArray,
    limits: FloatArray,
    free: BoolArray,
    prior: Prior | None,
) -> Estimate:
    """One parameter in its own unit."""
    value, low, high = (_natural(index, number) for number in (theta[index], *limits))
    if not free[index]:
        return Estimate(value, 0.0, value, value, "fixed")
    sd = float(np.sqrt(spread_[index, index]) * _stretch(theta)[index])
    status = "fitted"
    if prior is not None and sd**2 > 0.5 * prior.sd**2:
        status = "prior"
    if not np.isfinite(high) or (index != OVERLAP and low in (0.0, -np.inf)):
        return Estimate(np.nan, np.nan, low, high, "undetermined")
    return Estimate(value, sd, low, high, status)


def _natural(index: int, number: float) -> float:
    """A parameter of the fit, or an end of its interval, in its own unit."""
    if index != RADIUS and number == -np.inf:
        return 0.0
    return float(number if index in (RADIUS, OVERLAP) else np.exp(number))


def _stretch(theta: FloatArray) -> FloatArray:
    """d (D0, r0, E, f) / d theta."""
    return np.array([np.exp(theta[0]), 1.0, np.exp(theta[MODULUS]), 1.0])


def _verdict(
    problem: Problem, estimates: list[Estimate], theta: FloatArray, free: BoolArray
) -> tuple[str, str]:
    lower, upper = problem.bounds
    at_bound = free & ((theta <= lower + 1e-9) | (theta >= upper - 1e-9))
    at_bound[OVERLAP] = False
    if at_bound[MODULUS] and theta[MODULUS] < np.log(2.0):
        return CANNOT_TELL, "the values do not fall off on both sides of a radius: no curve of this kind fits"
    if at_bound.any():
        names = ", ".join(name for name, bound in zip(PARAMETERS, at_bound, strict=True) if bound)
        return CANNOT_TELL, f"{names} ran to the end of the range searched"
    open_ = [
        name for name, one in zip(PARAMETERS[:3], estimates[:3], strict=True) if one.status == "undetermined"
    ]
    if open_:
        return CANNOT_TELL, f"the values set no limit to {', '.join(open_)} at this confidence"
    return FITTED, ""


def _remarks(data: Coefficients, theta: FloatArray, p_value: float, free: BoolArray) -> tuple[str, ...]:
    remarks = []
    if free[RADIUS] and not data.radius.min() <= theta[RADIUS] <= data.radius.max():
        remarks.append("all measured radii lie on one side of r0: r0 and D0 are extrapolated")
    if p_value < 0.001:
        remarks.append(
            "the values scatter about the curve by more than their errors: it does not describe them"
        )
    return tuple(remarks)


def _without_numbers(fit: CurveFit) -> CurveFit:
    """The same fit with its intervals, but no values where the verdict is that the data cannot tell."""
    blank = [
        one if one.status == "fixed" else replace(one, value=np.nan, sd=np.nan, status="undetermined")
        for one in (fit.D0, fit.r0, fit.E)
    ]
    nothing = np.full_like(fit.curve, np.nan)
    return replace(
        fit,
        D0=blank[0],
        r0=blank[1],
        E=blank[2],
        curve=nothing,
        sigmas=nothing,
        covariance=fit.covariance * np.nan,
    )


def _no_fit(data: Coefficients, reason: str) -> CurveFit:
    nothing = Estimate(np.nan, np.nan, np.nan, np.nan, "undetermined")
    blank = np.full(len(data.value), np.nan)
    return CurveFit(
        CANNOT_TELL, reason, (), nothing, nothing, nothing, nothing, np.full((4, 4), np.nan), np.nan, 0, np.nan,
        1.0, np.nan, blank, blank, np.full(4, np.nan), np.full((4, 4), np.nan),
    )  # fmt: skip


def free_parameters(fit: CurveFit) -> BoolArray:
    """(4,) the parameters that a fit did not hold fixed."""
    return np.array([one.status != "fixed" for one in (fit.D0, fit.r0, fit.E, fit.overlap)])
