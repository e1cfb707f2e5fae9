"""The checks that a lattice-strain curve makes: its fit, and the overlap that the values show against it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tieline.assess.evidence import CANNOT_TELL, CONSISTENT, DIFFERS, EXCESS, check
from tieline.assess.lattice_fits import CurveResult
from tieline.assess.lattice_series import NO_RADIUS
from tieline.statistics.lattice_strain import FITTED
from tieline.statistics.lattice_strain_overlap import OVERLAP_FOUND


def curve_checks(pair: Mapping[str, Any], result: CurveResult, confidence: float) -> list[dict[str, Any]]:
    """One row on the curve's fit, one on the overlap that the values show against it."""
    held = f" Held by what is known: {result.held}." if result.held else ""
    return [_of_curve(pair, result, held, confidence), _of_overlap(pair, result, held, confidence)]


def _of_curve(pair: Mapping[str, Any], result: CurveResult, held: str, confidence: float) -> dict[str, Any]:
    fit, subject = result.fit, f"{result.series.charge}+ curve"
    if fit.verdict != FITTED:
        return check("lattice-strain", pair, subject, CANNOT_TELL, f"No curve: {fit.reason}.{held}")
    words = (
        f"D0 {fit.D0.value:.3g} ({fit.D0.low:.3g} to {fit.D0.high:.3g}, {fit.D0.status}), r0 {fit.r0.value:.4g} Å "
        f"({fit.r0.low:.4g} to {fit.r0.high:.4g}, {fit.r0.status}), E {fit.E.value:.3g} GPa ({fit.E.low:.3g} to "
        f"{fit.E.high:.3g}, {fit.E.status}) at {100 * confidence:g}%; Blundy & Wood (1994). value: chi-square over degrees "
        f"of freedom. A curve shows consistency between elements; it is no proof of equilibrium.{held}"
    )
    words += "".join(f" {remark[0].upper()}{remark[1:]}." for remark in fit.remarks)
    without = [element for element, why in result.series.missing.items() if why.startswith(NO_RADIUS)]
    if without:
        words += f" No radius in coordination {result.series.coordination} for {', '.join(without)}."
    if fit.dof == 0:
        return check("lattice-strain", pair, subject, CANNOT_TELL, f"As many parameters as values. {words}")
    return check(
        "lattice-strain", pair, subject, DIFFERS if fit.p_value < EXCESS else CONSISTENT, words,
        value=fit.chi_square / fit.dof, expected_lo=0.0, expected_hi=fit.excess,
    )  # fmt: skip


def _of_overlap(pair: Mapping[str, Any], result: CurveResult, held: str, confidence: float) -> dict[str, Any]:
    both, subject = result.comparison, f"{result.series.charge}+ overlap"
    if both.verdict == CANNOT_TELL:
        return check("overlap", pair, subject, CANNOT_TELL, f"No overlap fraction: {both.reason}.")
    f, found = both.joint.overlap, both.verdict == OVERLAP_FOUND
    words = (
        f"Fraction of {pair['beta']} in {pair['alpha']} from curve and floor together: {f.value:.3g}, {f.low:.3g} to "
        f"{f.high:.3g} at {100 * confidence:g}%; p {both.p_value:.2g} that there is none."
    )
    if found:
        words += " That is if one curve holds for all of them: an element with a site of its own looks alike."
        words += " Without a floor they fit no curve." if result.fit.verdict != FITTED else ""
    return check(
        "overlap", pair, subject, DIFFERS if found else CONSISTENT, words + held,
        value=f.value, sd=f.sd, expected_lo=0.0, expected_hi=0.0,
    )  # fmt: skip
