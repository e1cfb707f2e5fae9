"""Test `total`: oxide totals outside the window of their phase."""

from __future__ import annotations

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.chemistry.phases import PHASES
from tieline.screen.findings import spot_findings
from tieline.screen.groups import CANNOT_TELL, FOUND, NOT_FOUND, TestResult, Verdict, remarks_by_phase
from tieline.screen.session import Session
from tieline.screen.whole_analyses import WholeAnalyses
from tieline.settings.screen import TotalSettings

Window = tuple[float, float]

# Spots that must agree before a phase's totals are called short as a whole instead of bad one by one.
FEWEST_ALIKE = 3


def total_findings(session: Session, analyses: WholeAnalyses, settings: TotalSettings) -> TestResult:
    """Spots whose total is outside its window by more than `sigmas` of its own standard uncertainties.

    Where a hydrous phase (glass, amphibole) falls short in all of an experiment alike, water that was not
    measured is the likely reason: then its spots are held against their median, with half the width of the
    window to either side, and the verdict says so.
    """
    measured = analyses.measured
    low, high, short = _windows(session, analyses, settings)
    judged = analyses.complete & np.isfinite(low)
    sd = analyses.total_sd
    below = judged & (analyses.total < low - settings.sigmas * sd)
    above = judged & (analyses.total > high + settings.sigmas * sd)
    found = np.flatnonzero(below | above)
    threshold = np.where(below, low, high)
    findings = spot_findings(
        "total",
        settings.action,
        measured.spots[found],
        analyses.total[found],
        threshold[found],
        _p_value(np.abs(analyses.total - threshold)[found], sd[found]),
        [
            _detail(analyses, int(row), threshold[row], below[row], measured.group[row] in short)
            for row in found
        ],
    )
    remarks = remarks_by_phase(
        "totals fall short as a whole; if water was not measured, set screen.total.limits",
        short,
        session.spots,
    )
    return TestResult((findings,), tuple(_verdicts(session, analyses, judged, found, short)), tuple(remarks))


def _windows(
    session: Session, analyses: WholeAnalyses, settings: TotalSettings
) -> tuple[FloatArray, FloatArray, dict[int, float]]:
    """Window of every spot (n,), NaN where the phase has none; and the groups that fall short as a whole."""
    measured, phase = analyses.measured, session.spots.phase
    low, high = np.full((2, len(measured.spots)), np.nan)
    short: dict[int, float] = {}
    phase_of_spot = phase.codes[measured.spots]
    for code, name in enumerate(phase.texts):
        window = _window(name, settings)
        if window is None:
            continue
        rows = phase_of_spot == code
        low[rows], high[rows] = window
        if name in PHASES and PHASES[name].hydrous and name not in settings.limits:
            short |= _short_groups(analyses, rows, window[0])
    half = {
        name: 0.5 * (window[1] - window[0]) for name in phase.texts if (window := _window(name, settings))
    }
    for group, median in short.items():
        rows_of_group = measured.of_group(group)
        allowed = half[session.spots.group_key(group)[1]]
        low[rows_of_group], high[rows_of_group] = median - allowed, median + allowed
    return low, high, short


def _window(phase: str, settings: TotalSettings) -> Window | None:
    if phase in settings.limits:
        return settings.limits[phase]
    return PHASES[phase].total_window if phase in PHASES else None


def _short_groups(analyses: WholeAnalyses, rows: BoolArray, low: float) -> dict[int, float]:
    """Groups with at least three whole analyses whose median total is below the window: group -> median."""
    chosen = np.flatnonzero(rows & analyses.complete)
    group, start, count = np.unique(analyses.measured.group[chosen], return_index=True, return_counts=True)
    medians = [
        float(np.median(analyses.total[chosen[first : first + number]]))
        for first, number in zip(start, count, strict=True)
    ]
    return {
        int(code): median
        for code, median, number in zip(group, medians, count, strict=True)
        if number >= FEWEST_ALIKE and median < low
    }


def _p_value(beyond: FloatArray, sd: FloatArray) -> FloatArray:
    from scipy.special import ndtr

    known = sd > 0
    return np.where(known, ndtr(-beyond / np.where(known, sd, 1.0)), np.nan)


def _detail(analyses: WholeAnalyses, row: int, threshold: float, below: bool, is_short: bool) -> str:
    side = "below" if below else "above"
    against = "the range about its group's median, which ends at " if is_short else ""
    return (
        f"total {analyses.total[row]:.2f} \N{PLUS-MINUS SIGN} {analyses.total_sd[row]:.2f} wt% is {side} "
        f"{against}{threshold:.2f}"
    )


def _verdicts(
    session: Session, analyses: WholeAnalyses, judged: BoolArray, found: IntArray, short: dict[int, float]
) -> list[Verdict]:
    size = session.spots.groups.count
    measured = analyses.measured
    n_judged = np.bincount(measured.group[judged], minlength=size)
    n_found = np.bincount(measured.group[found], minlength=size)
    verdicts = []
    for group in np.unique(measured.group):
        if group in short:
            detail = (
                f"the totals fall short as a whole (median {short[group]:.2f} wt%), as if water or another "
                f"volatile had not been measured; {n_found[group]} of "
                f"{n_judged[group]} spots differ from that median"
            )
            word = FOUND if n_found[group] else CANNOT_TELL
        elif n_judged[group]:
            word = FOUND if n_found[group] else NOT_FOUND
            detail = f"{n_found[group]} of {n_judged[group]} totals outside their window"
        else:
            continue
        verdicts.append(Verdict(int(group), "total", int(n_judged[group]), word, detail, short.get(group)))
    return verdicts
