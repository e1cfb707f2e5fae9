"""A lattice-strain curve or a floor of overlap: both fits, which of them the values prefer, and D without the overlap."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from tieline.statistics.lattice_strain import fit_curves
from tieline.statistics.lattice_strain_few import Linear, f_tail, quantile
from tieline.statistics.lattice_strain_outcome import CurveFit
from tieline.statistics.lattice_strain_prediction import Fits, levels, without_each
from tieline.statistics.lattice_strain_problem import OVERLAP, Coefficients, Prior
from tieline.statistics.least_squares import FloatArray, ProfileSearch, minimise

OVERLAP_FOUND, NO_OVERLAP, CANNOT_TELL = "overlap", "curve alone", "cannot tell"


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
    priors: Mapping[str, Prior] | None = None,
    confidence: float = 0.95,
    correct: bool = True,
) -> OverlapComparison:
    """`compare_overlaps` of a single series, with both its fits."""
    plain, joint = fit_both([data], [temperature_K], priors=[priors or {}], confidence=confidence)
    return compare_overlaps([data], plain, joint, correct=correct)[0]


def fit_both(
    data: Sequence[Coefficients],
    temperature_K: Sequence[float],
    *,
    priors: Sequence[Mapping[str, Prior]] | None = None,
    confidence: float = 0.95,
) -> tuple[list[CurveFit], list[CurveFit]]:
    """The curves of every series without and with an overlap fraction f, D_app = D + f (1 - D)."""
    count = len(data)
    fits = fit_curves(
        [*data, *data], [*temperature_K, *temperature_K], overlap=[False] * count + [True] * count,
        priors=None if priors is None else [*priors, *priors], confidence=confidence,
    )  # fmt: skip
    return fits[:count], fits[count:]


def compare_overlaps(
    data: Sequence[Coefficients],
    plain: Sequence[CurveFit],
    joint: Sequence[CurveFit],
    *,
    correct: bool = True,
) -> list[OverlapComparison]:
    """Compare the fits of `fit_both`, series by series; all by the same confidence.

    correct: give the corrected D even where no overlap is found, which takes longer than the fits.

    p_value: likelihood ratio of f = 0, a boundary, so half a point mass and half chi-square with one degree of freedom
    (Self & Liang 1987, J. Am. Stat. Assoc. 82:605); where the values scatter about the joint fit by more than their errors
    (p < 0.05), or the errors are known from few values, the F distribution takes the place of chi-square. "cannot tell"
    where `tells_overlap` is false.
    """
    told = [row for row, fit in enumerate(joint) if tells_overlap(fit)]
    improvement, p_value = np.full(len(data), np.nan), np.full(len(data), np.nan)
    joint = list(joint)
    if told:
        improvement[told], p_value[told], rise = _tests([joint[row] for row in told])
        for row in np.array(told)[improvement[told] <= rise]:
            # a way round a barrier: f = 0 fits well enough with a curve of another shape
            joint[row] = replace(joint[row], overlap=replace(joint[row].overlap, low=0.0))
    found = p_value < 1 - np.array([fit.confidence for fit in joint])
    wanted = [row for row in told if correct or found[row]]
    corrected = dict(zip(wanted, _corrected([(data[row], joint[row]) for row in wanted]), strict=True))
    comparisons = []
    for row, fit in enumerate(joint):
        blank = np.full(len(data[row].value), np.nan)
        verdict, reason = (OVERLAP_FOUND if found[row] else NO_OVERLAP), ""
        if np.isnan(p_value[row]):
            why = fit.reason or "the values set no limit to the overlap, or none to E besides it"
            verdict, reason = CANNOT_TELL, f"curve and overlap together: {why}"
        comparisons.append(
            OverlapComparison(
                plain[row], fit, float(improvement[row]), float(p_value[row]), verdict, reason,
                corrected.get(row, Corrected(blank, blank, blank)),
            )
        )  # fmt: skip
    return comparisons


def tells_overlap(joint: CurveFit) -> bool:
    """Whether a joint fit determines f; if not, curve and floor look the same, and only the bound f <= smallest D_app remains.

    The limits of f need none of r0: values that are nearly all floor tell f although they leave r0 open. They need those of E:
    from a curve that may be flat, or so narrow that it passes through one value only, no floor can be told.
    """
    if joint.problem is None or joint.overlap.status == "undetermined":
        return False
    return joint.E.status == "fixed" or (joint.E.low > 0 and bool(np.isfinite(joint.E.high)))


def _tests(joint: Sequence[CurveFit]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """How much worse the values fit without overlap, at the joint fit's covariance, and how often that is chance, (fits,).

    Also the rise of the sum of squares at the ends of the interval of f.
    """
    fits = Fits.of(joint)
    problem, theta, free = fits.problem, fits.theta, fits.free
    start = np.tile(theta[:, None, :], (1, 3, 1))
    start[:, :, OVERLAP] = 0.0
    start[:, 1, 0], start[:, 2, 2] = start[:, 1, 0] + 0.3, start[:, 2, 2] - 0.7
    start = np.where(free[:, None, :] | (np.arange(4) == OVERLAP), start, theta[:, None, :])
    others = free & (np.arange(4) != OVERLAP)
    many = problem.take(np.repeat(np.arange(len(theta)), 3))
    without = minimise(
        many.residuals, start.reshape(-1, 4), np.repeat(others, 3, axis=0), many.lower, many.upper,
        subset=many.subset,
    )  # fmt: skip
    lowest = without.sum_of_squares.reshape(-1, 3).min(axis=1)
    improvement = np.maximum(lowest - np.sum(problem.residuals(theta)[0] ** 2, axis=1), 0.0)
    along = np.tile(np.eye(4)[OVERLAP], (len(theta), 1))
    factor, dof = Linear.of(problem, theta, fits.spread).few(along)
    dof = np.where(fits.scale > 1, np.minimum(dof, fits.dof), dof)
    p_value = 0.5 * f_tail(np.ones(len(theta)), dof, improvement / (fits.scale * factor))
    return improvement, p_value, fits.cut(along, joint[0].confidence)


def _corrected(cases: Sequence[tuple[Coefficients, CurveFit]]) -> list[Corrected]:
    """(D_app - f) / (1 - f) with f of the joint fit; its limits from those of D_app and of the f that the others give.

    The element's own value must not enter f and D_app at once: f is fitted again without it, and the limits of the two
    independent parts are combined (Zou & Donner 2008, Stat. Med. 27:1693), for those of f are not symmetric. The interval
    is widened to hold that of the curve at the element's radius too (ours): where f is hardly told from a stiff site, the
    parts alone cover 90 %; the hull covers 98 to 99 % wherever it was measured. D >= 0.
    """
    if not cases:
        return []
    fits = [joint for _data, joint in cases]
    on_curve = levels(fits, [data.radius for data, _joint in cases])
    limits = np.split(_overlap_of_the_others(fits), np.cumsum([len(fit.curve) for fit in fits])[:-1], axis=1)
    found = []
    for (data, joint), curve, (best, least, most) in zip(cases, on_curve, limits, strict=True):
        value = (data.value - joint.overlap.value) / (1 - joint.overlap.value)
        centre = (data.value - best) / (1 - best)
        ends = np.array([(data.value - fraction) / (1 - fraction) for fraction in (least, most)])
        half = _half_width(joint) / (1 - best)
        low = centre - np.hypot(half, centre - ends.min(axis=0))
        high = centre + np.hypot(half, ends.max(axis=0) - centre)
        low, high = np.minimum(low, curve.low), np.maximum(high, curve.high)
        found.append(Corrected(np.maximum(value, 0.0), np.maximum(low, 0.0), np.maximum(high, 0.0)))
    return found


def _half_width(joint: CurveFit) -> FloatArray:
    """Half the interval of each measured value, (n,)."""
    assert joint.problem is not None
    count = len(joint.curve)
    variance, own = joint.problem.sd[0, :count] ** 2, joint.problem.own_variance[0, :count]
    dof = joint.problem.dof[0, :count] * (variance / np.maximum(own, 1e-300)) ** 2
    if joint.scale > 1:
        dof = np.minimum(dof, joint.dof)
    return np.asarray(quantile(dof, joint.confidence) * np.sqrt(joint.scale * variance))


def _overlap_of_the_others(joint: Sequence[CurveFit]) -> FloatArray:
    """f and its limits from all values but one, (3, all values of all fits); 0 to 1 where they do not tell."""
    fits = without_each(joint).fits
    found = np.zeros((3, len(fits.theta)))
    found[2] = fits.problem.upper[:, OVERLAP]
    told = np.flatnonzero(~np.isnan(fits.spread[:, 0, 0]))
    fits = fits.take(told)
    rise = fits.cut(np.tile(np.eye(4)[OVERLAP], (len(told), 1)), joint[0].confidence)
    cost = np.sum(fits.problem.residuals(fits.theta)[0] ** 2, axis=1)
    both = np.tile(np.arange(len(told)), 2)
    twice = fits.take(both)
    search = ProfileSearch(
        twice.problem.residuals, twice.theta, cost[both], twice.spread, rise[both], np.full(len(both), OVERLAP),
        np.repeat([-1.0, 1.0], len(told)), twice.free, twice.problem.lower, twice.problem.upper,
        subset=twice.problem.subset,
    )  # fmt: skip
    low, high = search.run().reshape(2, -1)
    found[:, told] = fits.theta[:, OVERLAP], np.maximum(low, 0.0), np.minimum(high, found[2, told])
    return found
