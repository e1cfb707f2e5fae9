"""A lattice-strain curve or a floor of overlap: both fits, which of them the values prefer, and D without the overlap."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from tieline.statistics.lattice_strain import FITTED, CurveFit, fit_curve, free_parameters
from tieline.statistics.lattice_strain_prediction import predict, rest_spreads
from tieline.statistics.lattice_strain_problem import OVERLAP, Coefficients, Prior
from tieline.statistics.least_squares import FloatArray, ProfileSearch, minimise

OVERLAP_FOUND, NO_OVERLAP, CANNOT_TELL = "overlap", "curve alone", "cannot tell"
_EXCESS = 0.05


@dataclass(frozen=True)
class Corrected:
    """D of the measured elements with the fitted overlap taken off, (n,), with their intervals."""

    value: FloatArray
    low: FloatArray
    high: FloatArray


@dataclass(frozen=True)
class OverlapComparison:
    """Both fits; improvement: fall of the sum of squares; p_value of no overlap; the verdict and the corrected D."""

    plain: CurveFit
    joint: CurveFit
    improvement: float
    p_value: float
    verdict: str
    reason: str
    corrected: Corrected


def compare_overlap(
    data: Coefficients,
    temperature_K: float,
    *,
    plain: CurveFit | None = None,
    priors: Mapping[str, Prior] | None = None,
    confidence: float = 0.95,
    correct: bool = True,
) -> OverlapComparison:
    """Fit the curve with and without an overlap fraction f, D_app = D + f (1 - D), and compare the two.

    plain: the fit without overlap by the same priors, where it has been made already. correct: give the corrected D even
    where no overlap is found, which takes longer than the fits.

    p_value: likelihood ratio of f = 0, a boundary, so half a point mass and half chi-square with one degree of freedom
    (Self & Liang 1987, J. Am. Stat. Assoc. 82:605); where the values scatter about the joint fit by more than their errors
    (p < 0.05), the F distribution takes the place of chi-square. "cannot tell" where the joint fit is not determined: then
    a curve and a floor look the same, and only the bound f <= smallest D_app remains.
    """
    if plain is None:
        plain = fit_curve(data, temperature_K, priors=priors, confidence=confidence)
    joint = fit_curve(data, temperature_K, overlap=True, priors=priors, confidence=confidence)
    blank = np.full(len(data.value), np.nan)
    if joint.verdict != FITTED or joint.problem is None:
        reason = f"curve and overlap together: {joint.reason}"
        return OverlapComparison(
            plain, joint, np.nan, np.nan, CANNOT_TELL, reason, Corrected(blank, blank, blank)
        )
    improvement = _improvement(joint)
    if joint.scale > 1:
        p_value = 0.5 * float(special.fdtrc(1, joint.dof, improvement / joint.scale))
    else:
        p_value = 0.5 * float(special.chdtrc(1, improvement))
    verdict = OVERLAP_FOUND if p_value < 1 - confidence else NO_OVERLAP
    corrected = Corrected(blank, blank, blank)
    if correct or verdict == OVERLAP_FOUND:
        corrected = _corrected(data, joint)
    return OverlapComparison(plain, joint, improvement, p_value, verdict, "", corrected)


def _improvement(joint: CurveFit) -> float:
    """How much worse the values fit without overlap, at the joint fit's covariance."""
    assert joint.problem is not None
    start = np.tile(joint.theta, (3, 1))
    start[:, OVERLAP] = 0.0
    start[1, 0], start[2, 2] = start[1, 0] + 0.3, start[2, 2] - 0.7
    free = free_parameters(joint)
    free[OVERLAP] = False
    start[:, ~free] = np.where(np.arange(4) == OVERLAP, 0.0, joint.theta)[~free]
    without = minimise(joint.problem.residuals, start, np.tile(free, (3, 1)), *joint.problem.bounds)
    residuals, _jacobian = joint.problem.residuals(joint.theta[None, :])
    return max(float(without.sum_of_squares.min() - np.sum(residuals**2)), 0.0)


def _corrected(data: Coefficients, joint: CurveFit) -> Corrected:
    """(D_app - f) / (1 - f) with f of the joint fit; its limits from those of D_app and of the f that the others give.

    The element's own value must not enter f and D_app at once: f is fitted again without it, and the limits of the two
    independent parts are combined (Zou & Donner 2008, Stat. Med. 27:1693), for those of f are not symmetric. The interval
    is widened to hold that of the curve at the element's radius too (ours): where f is hardly told from a stiff site, the
    parts alone cover 90 %; the hull covers 98 to 99 % wherever it was measured. D >= 0.
    """
    assert joint.problem is not None
    value = (data.value - joint.overlap.value) / (1 - joint.overlap.value)
    half = joint.quantile * np.sqrt(joint.scale * np.diag(joint.problem.covariance))
    best, least, most = _overlap_of_the_others(joint)
    centre = (data.value - best) / (1 - best)
    ends = np.array([(data.value - fraction) / (1 - fraction) for fraction in (least, most)])
    half = half / (1 - best)
    low = centre - np.hypot(half, centre - ends.min(axis=0))
    high = centre + np.hypot(half, ends.max(axis=0) - centre)
    on_curve = predict(joint, data.radius)
    low, high = np.minimum(low, on_curve.low), np.maximum(high, on_curve.high)
    return Corrected(np.maximum(value, 0.0), np.maximum(low, 0.0), np.maximum(high, 0.0))


def _overlap_of_the_others(joint: CurveFit) -> tuple[FloatArray, FloatArray, FloatArray]:
    """f and its limits from all values but one, (n,) each; 0 to 1 where they do not tell."""
    assert joint.problem is not None
    count = len(joint.problem.data.value)
    rest = replace(joint.problem, left_out=np.arange(count))
    free = free_parameters(joint)
    start = np.tile(joint.theta, (count, 1))
    found = minimise(rest.residuals, start, np.tile(free, (count, 1)), *rest.bounds)
    uncertain = rest_spreads(rest, found.theta, free)
    told = np.array([one is not None for one in uncertain])
    theta, cost = np.tile(found.theta, (2, 1)), np.tile(found.sum_of_squares, 2)
    around = np.array([np.eye(4) if one is None else one for one in uncertain])
    rest = replace(rest, left_out=np.tile(np.arange(count), 2))
    search = ProfileSearch(
        rest.residuals, theta, cost, np.tile(around, (2, 1, 1)), joint.scale * joint.quantile**2,
        np.full(2 * count, OVERLAP), np.repeat([-1.0, 1.0], count), free, *rest.bounds,
    )  # fmt: skip
    low, high = search.run().reshape(2, -1)
    most = rest.bounds[1][OVERLAP]
    return (
        np.where(told, found.theta[:, OVERLAP], 0.0),
        np.where(told, np.maximum(low, 0.0), 0.0),
        np.where(told, np.minimum(high, most), most),
    )
