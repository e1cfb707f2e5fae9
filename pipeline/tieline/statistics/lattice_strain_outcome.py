"""What a lattice-strain fit came to: estimates, verdict and remarks."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from tieline.statistics.lattice_strain_few import Scatter
from tieline.statistics.lattice_strain_problem import (
    MODULUS,
    OVERLAP,
    PARAMETERS,
    RADIUS,
    Coefficients,
    Prior,
    Problem,
)
from tieline.statistics.least_squares import BoolArray, FloatArray

FITTED, CANNOT_TELL = "fitted", "cannot tell"
_SAME_RADIUS = 1e-4
_CONTRADICTED = 3.0  # standard deviations of the prior


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
    curve with the stated errors, `excess` is the chi_square/dof that they make in 5 % of cases; `scale` is 1, or by how much
    chi_square/dof is larger than expected where p < 0.05: intervals then rest on the scatter, with Student's t. curve,
    sigmas: (n,) fitted D of the crystal, and residuals in standard deviations.
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
    excess: float
    scale: float
    curve: FloatArray
    sigmas: FloatArray
    confidence: float
    theta: FloatArray = field(repr=False)
    log_covariance: FloatArray = field(repr=False)
    problem: Problem | None = field(repr=False, default=None)

    @property
    def free(self) -> BoolArray:
        """(4,) the parameters that were not held fixed."""
        return np.array([one.status != "fixed" for one in (self.D0, self.r0, self.E, self.overlap)])


def outcome(
    data: Coefficients, priors: Mapping[str, Prior], problem: Problem, theta: FloatArray, spread: FloatArray,
    limits: FloatArray, free: BoolArray, scatter: Scatter, confidence: float,
) -> CurveFit:  # fmt: skip
    """The fit of one series from its minimum, its covariance, its profile limits (4, 2) and its scatter."""
    if np.isnan(spread[0, 0]):
        return no_fit(data, "the parameters cannot be told apart with these radii")
    estimates = [
        _estimate(index, theta, spread, limits[index], free, priors.get(name))
        for index, name in enumerate(PARAMETERS)
    ]
    count = len(data.value)
    curve = problem.curve(theta[None, :], problem.radius)[0][0, :count]
    apparent = problem.apparent(theta[None, :], problem.radius)[0][0, :count]
    natural = _stretch(theta)
    natural[0] = 1.0
    verdict, reason = _verdict(problem, estimates, theta, free)
    fit = CurveFit(
        verdict, reason, _remarks(data, problem, theta, scatter.p_value[0], free),
        estimates[0], estimates[1], estimates[2], estimates[3],
        covariance=spread * np.outer(natural, natural),
        chi_square=float(scatter.chi_square[0]), dof=int(scatter.dof[0]), p_value=float(scatter.p_value[0]),
        excess=float(scatter.excess()[0]), scale=float(scatter.scale[0]), curve=curve,
        sigmas=(data.value - apparent) / problem.sd[0, :count], confidence=confidence, theta=theta,
        log_covariance=spread, problem=problem,
    )  # fmt: skip
    return fit if verdict == FITTED else _without_numbers(fit)


def no_fit(data: Coefficients, reason: str) -> CurveFit:
    nothing = Estimate(np.nan, np.nan, np.nan, np.nan, "undetermined")
    blank = np.full(len(data.value), np.nan)
    return CurveFit(
        CANNOT_TELL, reason, (), nothing, nothing, nothing, nothing, np.full((4, 4), np.nan), np.nan, 0, np.nan, np.nan,
        1.0, blank, blank, np.nan, np.full(4, np.nan), np.full((4, 4), np.nan),
    )  # fmt: skip


def different_radii(radius: FloatArray) -> int:
    """How many radii differ by more than 0.0001 Å."""
    return 1 + int(np.sum(np.diff(np.sort(radius)) > _SAME_RADIUS)) if len(radius) else 0


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
    at_bound = free & ((theta <= problem.lower[0] + 1e-9) | (theta >= problem.upper[0] - 1e-9))
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


def _remarks(
    data: Coefficients, problem: Problem, theta: FloatArray, p_value: float, free: BoolArray
) -> tuple[str, ...]:
    remarks = []
    away = np.abs(theta - problem.prior_centre[0]) * problem.prior_weight[0]
    against = [name for name, far in zip(PARAMETERS, away > _CONTRADICTED, strict=True) if far]
    if against:
        remarks.append(f"the values contradict what is known of {', '.join(against)} beforehand")
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
