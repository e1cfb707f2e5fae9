"""Test `identity`: spots whose composition fits another phase of the session better than the one they are named.

Own method on the log-ratio distance of compositional data (Aitchison 1986): a composition is the logarithms of its
elements, less their mean, so that a wrong total or yield moves nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.findings import spot_findings
from tieline.screen.groups import TestResult
from tieline.screen.padding import few_rows
from tieline.screen.session import Session
from tieline.screen.whole_analyses import WholeAnalyses
from tieline.settings.screen import IdentitySettings

# A phase needs this many spots for a centre that one wrong label cannot move.
FEWEST_SPOTS = 3

# An element counts as present down to this; below, its logarithm is noise. In ppm for whole analyses and for traces.
_FLOOR_PPM = {True: 1000.0, False: 1.0}

# A comparison needs this many elements.
FEWEST_ELEMENTS = 4

# Spots of one phase may always differ by this much, root mean square of the logarithms; own choice.
ORDINARY_DISTANCE = 0.05


@dataclass(frozen=True)
class _Distances:
    """Log-ratio distance of every spot to every phase (n, K), and the usual one of each phase's own spots (K,)."""

    distance: FloatArray
    typical: FloatArray


def identity_findings(session: Session, analyses: WholeAnalyses, settings: IdentitySettings) -> TestResult:
    """Spots at least `ratio` times nearer to another phase's centre than to that of their own.

    Centres are medians over all spots of a phase in the session. Besides, the spot must lie outside what is usual
    for its own phase and within what is usual for the other, both with the same ratio as allowance: a mixture of two
    phases, which is far from either, is a matter for the overlap test. Phases with fewer than three spots have no
    centre.
    """
    measured, phase = analyses.measured, session.spots.phase
    own = phase.codes[measured.spots]
    logs = _log_ratios(analyses)
    distances = _distances(logs, own, len(phase.texts))
    if np.isfinite(distances.typical).sum() < 2:
        return TestResult()
    everyone = np.arange(len(own))
    to_own = distances.distance[everyone, own]
    others = np.where(np.isfinite(distances.distance), distances.distance, np.inf)
    others[everyone, own] = np.inf
    other = np.argmin(others, axis=1)
    to_other = others[everyone, other]
    unlike_own = to_own > settings.ratio * distances.typical[own]
    like_other = to_other <= settings.ratio * distances.typical[other]
    rows = np.flatnonzero(unlike_own & like_other & (to_own > settings.ratio * to_other))
    quotient = to_own[rows] / np.maximum(to_other[rows], np.finfo(float).tiny)
    findings = spot_findings(
        "identity",
        settings.action,
        measured.spots[rows],
        quotient,
        settings.ratio,
        None,
        [
            f"composition fits {phase.texts[other[row]]} better than {phase.texts[own[row]]}: "
            f"log-ratio distances {to_other[row]:.2f} and {to_own[row]:.2f}"
            for row in rows
        ],
    )
    return TestResult((findings,))


def _log_ratios(analyses: WholeAnalyses) -> FloatArray:
    """Logarithms (n, E), NaN where not measured; elements that few spots have are left out."""
    floor = _FLOOR_PPM[bool(analyses.complete.any())]
    value = analyses.value
    kept = np.isfinite(value).mean(axis=0) >= 0.5
    logs = np.empty((len(value), np.count_nonzero(kept)), order="F")
    for rows in few_rows(*value.shape):
        part = value[rows][:, kept]
        known = np.isfinite(part)
        logs[rows] = np.where(known, np.log(np.maximum(np.where(known, part, floor), floor)), np.nan)
    return logs


def _distances(logs: FloatArray, own: IntArray, n_phases: int) -> _Distances:
    distance = np.full((len(logs), n_phases), np.nan)
    typical = np.full(n_phases, np.nan)
    for code in range(n_phases):
        rows = own == code
        if rows.sum() < FEWEST_SPOTS:
            continue
        centre = _medians(logs, rows)
        for part in few_rows(*logs.shape):
            distance[part, code] = _distance(logs[part], centre)
        known = distance[rows, code]
        known = known[np.isfinite(known)]
        if len(known) >= FEWEST_SPOTS:
            typical[code] = max(np.median(known), ORDINARY_DISTANCE)
    return _Distances(distance, typical)


def _distance(logs: FloatArray, centre: FloatArray) -> FloatArray:
    """Root mean square difference (n,) after taking out the mean one; NaN with fewer than four elements in common."""
    known = np.isfinite(logs) & np.isfinite(centre)
    count = known.sum(axis=1)
    difference = np.where(known, logs - centre, 0.0)
    mean = difference.sum(axis=1) / np.maximum(count, 1)
    squares = np.sum(np.where(known, difference - mean[:, None], 0.0) ** 2, axis=1)
    return np.where(count >= FEWEST_ELEMENTS, np.sqrt(squares / np.maximum(count, 1)), np.nan)


def _medians(values: FloatArray, rows: BoolArray) -> FloatArray:
    """Median of every column (p,) over some rows, NaN where fewer than three values are known."""
    medians = np.full(values.shape[1], np.nan)
    for column in range(values.shape[1]):
        known = values[rows & np.isfinite(values[:, column]), column]
        if len(known) >= FEWEST_SPOTS:
            medians[column] = np.median(known)
    return medians
