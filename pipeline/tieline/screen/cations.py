"""Test `cations`: cation sums that do not fit the formula of the phase."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.chemistry.formula import atoms_from_ppm, ferric_iron
from tieline.chemistry.phases import PHASES
from tieline.screen.findings import spot_findings
from tieline.screen.groups import FOUND, NOT_FOUND, TestResult, Verdict
from tieline.screen.padding import few_rows
from tieline.screen.session import Session
from tieline.screen.whole_analyses import WholeAnalyses
from tieline.settings.screen import CationRule, CationSettings
from tieline.statistics.threads import side_by_side


@dataclass(frozen=True)
class _Judged:
    """Per spot (n,), NaN where the phase has no rule: the sum, its uncertainty, and what it was held against."""

    total: FloatArray
    sd: FloatArray
    limit: FloatArray
    found: BoolArray
    detail: dict[int, str]


def cation_findings(session: Session, analyses: WholeAnalyses, settings: CationSettings) -> TestResult:
    """Spots whose cation sum is off by more than the tolerance and `sigmas` of its own standard
    uncertainties.

    For phases that take ferric iron, a sum that is too high only for want of Fe3+ is no finding: charge
    balance (Droop 1987, Mineral. Mag. 51:431) brings it down to the expected sum as long as the spot has
    iron enough.
    """
    measured = analyses.measured
    judged = _judged(session, analyses, settings)
    rows = np.flatnonzero(judged.found)
    findings = spot_findings(
        "cations",
        settings.action,
        measured.spots[rows],
        judged.total[rows],
        judged.limit[rows],
        None,
        [judged.detail[int(row)] for row in rows],
    )
    return TestResult((findings,), tuple(_verdicts(session, analyses, judged)))


def _judged(session: Session, analyses: WholeAnalyses, settings: CationSettings) -> _Judged:
    measured, phase = analyses.measured, session.spots.phase
    size = len(measured.spots)
    total, sd, limit = np.full((3, size), np.nan)
    found = np.zeros(size, dtype=np.bool_)
    detail: dict[int, str] = {}
    phase_of_spot = phase.codes[measured.spots]
    for code, name in enumerate(phase.texts):
        rule = _rule(name, settings)
        rows = np.flatnonzero((phase_of_spot == code) & analyses.complete)
        if rule is None or not len(rows):
            continue
        ferric = settings.ferric and name in PHASES and PHASES[name].ferric
        sums, low, high = _against_rule(analyses, rows, rule, ferric, settings.sigmas)
        total[rows], sd[rows] = sums
        limit[rows] = np.where(low, rule.sum - rule.tolerance, rule.sum + rule.tolerance)
        found[rows] = low | high
        more = ", more than ferric iron can explain" if ferric else ""
        for at in np.flatnonzero(low | high):
            detail[int(rows[at])] = (
                f"cation sum {sums[0, at]:.3f} \N{PLUS-MINUS SIGN} {sums[1, at]:.3f} per {rule.oxygens:g} "
                f"oxygens; expected {rule.sum:g} \N{PLUS-MINUS SIGN} {rule.tolerance:g}{more if high[at] else ''}"
            )
    return _Judged(total, sd, limit, found, detail)


def _against_rule(
    analyses: WholeAnalyses, rows: IntArray, rule: CationRule, ferric: bool, sigmas: float
) -> tuple[FloatArray, BoolArray, BoolArray]:
    """Sums and their uncertainties (2, rows), and which are too low and too high."""

    def of_part(part: slice) -> tuple[FloatArray, BoolArray, BoolArray]:
        return _few_against_rule(analyses, rows[part], rule, ferric, sigmas)

    parts = side_by_side(of_part, list(few_rows(len(rows), len(analyses.elements))))
    sums, low, high = zip(*parts, strict=True)
    return np.concatenate(sums, axis=1), np.concatenate(low), np.concatenate(high)


def _few_against_rule(
    analyses: WholeAnalyses, rows: IntArray, rule: CationRule, ferric: bool, sigmas: float
) -> tuple[FloatArray, BoolArray, BoolArray]:
    columns = np.array([at for at, element in enumerate(analyses.elements) if element != "O"])
    units = atoms_from_ppm(
        analyses.value[np.ix_(rows, columns)],
        [analyses.elements[at] for at in columns],
        rule.oxygens,
        np.nan_to_num(analyses.sigma[np.ix_(rows, columns)]),
    )
    total, sd = units.cation_sum, units.cation_sum_sigma
    margin = rule.tolerance + sigmas * sd
    low = total < rule.sum - margin
    high = total > rule.sum + margin
    if ferric and high.any():
        iron = ferric_iron(units, rule.sum)
        # What all the iron as Fe3+ cannot bring down by charge balance is not explained by it.
        unexplained = iron.balance - iron.fe3
        high &= unexplained > sigmas * iron.balance_sigma + 2.0 * rule.oxygens * rule.tolerance / rule.sum
    return np.stack([total, sd]), low, high


def _rule(phase: str, settings: CationSettings) -> CationRule | None:
    if phase in settings.rules:
        return settings.rules[phase]
    facts = PHASES.get(phase)
    if facts is None or facts.cation_sum is None or facts.cation_tolerance is None or facts.oxygens is None:
        return None
    return CationRule(oxygens=facts.oxygens, sum=facts.cation_sum, tolerance=facts.cation_tolerance)


def _verdicts(session: Session, analyses: WholeAnalyses, judged: _Judged) -> list[Verdict]:
    size = session.spots.groups.count
    group = analyses.measured.group
    n_judged, n_found = (
        np.bincount(group[rows], minlength=size) for rows in (np.isfinite(judged.total), judged.found)
    )
    return [
        Verdict(
            int(code),
            "cations",
            int(n_judged[code]),
            FOUND if n_found[code] else NOT_FOUND,
            f"{n_found[code]} of {n_judged[code]} cation sums do not fit the formula",
        )
        for code in np.flatnonzero(n_judged)
    ]
