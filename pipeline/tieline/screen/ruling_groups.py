"""Rulings looked at together: hand exclusions that all fall on one side of the mean, or shrink the spread."""

from __future__ import annotations

import numpy as np

from tieline.arrays import BoolArray, FloatArray
from tieline.screen.findings import RULING, WHOLE_SPOT, Findings
from tieline.screen.groups import FOUND, NOT_FOUND, TestResult, Verdict, remarks_by_phase
from tieline.screen.session import Measured, Session

# One exclusion is always on one side; two is where a pattern can begin.
FEWEST_EXCLUSIONS = 2

# Share of its spread that a group loses at least when hand exclusions decide its uncertainty.
LARGE_LOSS = 0.5


def ruling_result(session: Session, ruled: Findings, dropped: BoolArray) -> TestResult:
    """Verdicts on every group with values dropped by hand; spots left out by tests (`dropped`) are not looked at.

    One-sided: in more than half of its analytes all hand-excluded values, two or more, lie on one side of the mean of
    all. Shrunk: in more than half of its analytes the standard deviation loses more than half.
    """
    verdicts = []
    by_hand = np.array([action == "drop" for action in ruled.action], dtype=np.bool_)
    for measured in session.techniques:
        excluded = _excluded(measured, ruled, by_hand)
        excluded &= np.isfinite(measured.value) & ~dropped[measured.spots][:, None]
        for group in np.unique(measured.group[excluded.any(axis=1)]):
            rows = measured.of_group(int(group))
            kept = ~dropped[measured.spots[rows]]
            verdict = _verdict(int(group), measured.value[rows][kept], excluded[rows][kept])
            if verdict is not None:
                verdicts.append(verdict)
    suspect = [verdict.group for verdict in verdicts if verdict.verdict == FOUND]
    remarks = remarks_by_phase(
        "hand exclusions lie on one side of the mean or shrink the spread by more than half",
        suspect,
        session.spots,
    )
    return TestResult((), tuple(verdicts), tuple(remarks))


def _excluded(measured: Measured, ruled: Findings, by_hand: BoolArray) -> BoolArray:
    """Cells (n, p) that a ruling drops and none on the analyte itself keeps."""
    excluded = np.zeros(measured.value.shape, dtype=np.bool_)
    for whole in (True, False):
        for at in np.flatnonzero((ruled.analyte == WHOLE_SPOT) == whole):
            row = int(np.searchsorted(measured.spots, ruled.spot[at]))
            if row == len(measured.spots) or measured.spots[row] != ruled.spot[at]:
                continue
            columns = slice(None) if whole else measured.analyte_codes == ruled.analyte[at]
            excluded[row, columns] = by_hand[at]
    return excluded


def _verdict(group: int, values: FloatArray, excluded: BoolArray) -> Verdict | None:
    """values, excluded: (n, p) of one group. None where no analyte has a value kept beside an excluded one."""
    measured = np.isfinite(values)
    kept = measured & ~excluded
    compared = excluded.any(axis=0) & (kept.sum(axis=0) >= 2)
    if not compared.any():
        return None
    values, measured = values[:, compared], measured[:, compared]
    kept, excluded = kept[:, compared], excluded[:, compared]
    number = excluded.sum(axis=0)
    above = np.sum(excluded & (values > _mean(values, measured)), axis=0)
    one_sided = (number >= FEWEST_EXCLUSIONS) & ((above == 0) | (above == number))
    shrunk = _sd(values, kept) < (1.0 - LARGE_LOSS) * _sd(values, measured)
    n_analytes = int(compared.sum())
    found = 2 * one_sided.sum() > n_analytes or 2 * shrunk.sum() > n_analytes
    return Verdict(
        group,
        RULING,
        int(excluded.any(axis=1).sum()),
        FOUND if found else NOT_FOUND,
        f"{excluded.any(axis=1).sum()} spots excluded by hand, in full or in part: all on one side of the mean in "
        f"{one_sided.sum()} of {n_analytes} analytes, spread less than half in {shrunk.sum()}",
        float(max(one_sided.sum(), shrunk.sum())) / n_analytes,
        0.5,
    )


def _mean(values: FloatArray, chosen: BoolArray) -> FloatArray:
    return np.asarray(np.sum(np.where(chosen, values, 0.0), axis=0) / np.maximum(chosen.sum(axis=0), 1))


def _sd(values: FloatArray, chosen: BoolArray) -> FloatArray:
    deviation = np.where(chosen, values - _mean(values, chosen), 0.0)
    return np.asarray(np.sqrt(np.sum(deviation**2, axis=0) / np.maximum(chosen.sum(axis=0) - 1, 1)))
