"""Lattice-strain curves of series of elements, from their values alone where they suffice."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from tieline.assess.lattice_series import Series
from tieline.statistics.lattice_strain import FITTED, CurveFit, Prior
from tieline.statistics.lattice_strain_overlap import OverlapComparison, compare_overlaps, fit_both

# E = 1125 Z / (r0 + 1.38 Å)³ GPa, 1.38 Å the radius of oxygen (Wood & Blundy 2003, Treatise on Geochemistry 2.09; from
# memory). Published fits lie within about 40 % of it (from memory).
_ELASTIC_GPA, _OXYGEN_ANGSTROM, _ELASTIC_RELATIVE_SD = 1125.0, 1.38, 0.4


@dataclass(frozen=True)
class CurveResult:
    """One series with its fit; `held` says which priors were needed, empty where the values sufficed."""

    series: Series
    fit: CurveFit
    held: str
    comparison: OverlapComparison


def fit_series(
    series: Series, temperature_K: float, priors: Mapping[str, Prior] | None = None, confidence: float = 0.95
) -> CurveResult:
    """`fit_all_series` of a single series."""
    return fit_all_series([series], [temperature_K], [priors or {}], confidence)[0]


def fit_all_series(
    series: Sequence[Series],
    temperature_K: Sequence[float],
    priors: Sequence[Mapping[str, Prior]],
    confidence: float = 0.95,
) -> list[CurveResult]:
    """Fit every series from its values alone where they suffice, else with what is known beforehand, and say so.

    First no prior; then the given prior of E, or the elastic estimate for an ion as large as the mean of those measured;
    then the given prior of r0 besides. The comparison with an overlap fraction uses the same priors; corrected D are made
    where it finds overlap. The series are fitted side by side, which saves most of the time.
    """
    data = [one.data for one in series]
    steps = [_steps(one, given) for one, given in zip(series, priors, strict=True)]
    used: list[Mapping[str, Prior]] = [{} for _ in series]
    plain, joint = fit_both(data, temperature_K, confidence=confidence)
    for step in range(2):
        rows = [row for row, fit in enumerate(plain) if fit.verdict != FITTED and len(steps[row]) > step]
        again = fit_both(
            [data[row] for row in rows], [temperature_K[row] for row in rows],
            priors=[steps[row][step] for row in rows], confidence=confidence,
        )  # fmt: skip
        for row, *fits in zip(rows, *again, strict=True):
            if fits[0].verdict == FITTED:
                (plain[row], joint[row]), used[row] = fits, steps[row][step]
    comparisons = compare_overlaps(data, plain, joint, correct=False)
    return [
        CurveResult(
            one, fit, "; ".join(f"{name} {prior.value:.4g} ± {prior.sd:.2g} beforehand" for name, prior in known.items()),
            comparison,
        )
        for one, fit, known, comparison in zip(series, plain, used, comparisons, strict=True)
    ]  # fmt: skip


def _steps(series: Series, given: Mapping[str, Prior]) -> list[dict[str, Prior]]:
    """What is brought in, in turn, where the values alone do not suffice."""
    if not len(series.data.radius):
        return []
    size = given["r0"].value if "r0" in given else float(np.mean(series.data.radius))
    elastic = _ELASTIC_GPA * series.charge / (size + _OXYGEN_ANGSTROM) ** 3
    modulus = given.get("E", Prior(elastic, _ELASTIC_RELATIVE_SD * elastic))
    return [{"E": modulus}] + ([{"E": modulus, "r0": given["r0"]}] if "r0" in given else [])
