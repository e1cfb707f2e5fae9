"""Test `outlier`: spots that stand out in many analytes together; single analytes on request.

Joint by default, and only to mark: rejecting single analytes automatically costs coverage even on clean data. The
statistics and their sources are in `tieline.statistics.outliers`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.results import Remark
from tieline.screen.findings import Findings, no_findings, spot_findings
from tieline.screen.groups import TestResult
from tieline.screen.padding import FEW_CELLS, Block, blocks
from tieline.screen.session import Measured, Session
from tieline.settings.screen import OutlierSettings
from tieline.statistics.outliers import (
    generalized_esd,
    grubbs,
    grubbs_critical,
    holm,
    joint_outliers,
    modified_z,
)
from tieline.statistics.threads import side_by_side

Result = TypeVar("Result")


@dataclass(frozen=True)
class _Found:
    """Outlying cells of one block: rows and columns of `Measured`, with statistic, threshold and p-value."""

    row: IntArray
    column: IntArray
    statistic: FloatArray
    threshold: FloatArray
    p_value: FloatArray


def outlier_result(
    session: Session, measured: Measured, dropped: BoolArray, settings: OutlierSettings
) -> TestResult:
    """Outliers of one technique among the spots that are not left out so far (`dropped`, all spots).

    Only values that were measured take part, also those below their limit; values given as a limit do not.
    """
    tested = _Tested(measured, dropped[measured.spots], settings.min_spots)
    findings = [_joint(tested, settings)]
    remarks: tuple[Remark, ...] = ()
    if settings.per_analyte != "off":
        findings.append(_per_analyte(tested, settings))
        if settings.action == "drop" and len(findings[1]):
            remarks = (
                Remark(
                    "values are left out by a single-analyte outlier test: intervals then cover less than stated",
                    measured.technique,
                ),
            )
    return TestResult(tuple(findings), (), remarks)


@dataclass(frozen=True)
class _Tested:
    """What is tested: values of spots that are not left out (`dropped`, (n,)), in groups of enough spots."""

    measured: Measured
    dropped: BoolArray
    min_spots: int

    def results(self, test: Callable[[Block, FloatArray], Result]) -> list[Result]:
        """What a test gives of every block of groups of one size and its values (G, n, p), in the order of blocks."""

        def result(block: Block) -> Result | None:
            value = block.of(self.measured.value)
            value[self.dropped[block.rows]] = np.nan
            enough = np.isfinite(value).any(axis=2).sum(axis=1) >= self.min_spots
            if not enough.any():
                return None
            return test(Block(block.groups[enough], block.rows[enough]), value[enough])

        # Nothing is padded, so that no result depends on which groups share a block.
        parts = list(blocks(self.measured, np.unique(self.measured.group), exact=True, cells=FEW_CELLS))
        return [part for part in side_by_side(result, parts) if part is not None]


def _joint(tested: _Tested, settings: OutlierSettings) -> Findings:
    def found(block: Block, value: FloatArray) -> tuple[IntArray, IntArray, IntArray, FloatArray]:
        joint = joint_outliers(value, settings.alpha, settings.p)
        at = np.nonzero(joint.outlier)
        return block.rows[at], joint.analytes[at], joint.needed[at[0]], joint.p_value[at]

    parts = tested.results(found)
    if not parts:
        return no_findings("outlier")
    row, count, least, p_value = (np.concatenate(column) for column in zip(*parts, strict=True))
    return spot_findings(
        "outlier",
        settings.action,
        tested.measured.spots[row],
        count.astype(np.float64),
        least.astype(np.float64),
        p_value,
        [
            f"{number} analytes are the extreme of their group at once; {enough} or more are improbable"
            for number, enough in zip(count, least, strict=True)
        ],
    )


def _per_analyte(tested: _Tested, settings: OutlierSettings) -> Findings:
    measured = tested.measured
    test = {"grubbs": _grubbs, "esd": _generalized_esd, "modified-z": _modified_z}[settings.per_analyte]
    parts = tested.results(lambda block, value: test(block, value, settings))
    if not parts:
        return no_findings("outlier")
    row, column, statistic, threshold, p_value = (
        np.concatenate([getattr(part, name) for part in parts])
        for name in ("row", "column", "statistic", "threshold", "p_value")
    )
    return Findings(
        "outlier",
        measured.spots[row],
        measured.analyte_codes[column],
        statistic,
        threshold,
        p_value,
        [settings.action] * len(row),
        [
            f"{measured.analytes[at]} {measured.value[spot, at]:.4g} ppm stands out ({settings.per_analyte})"
            for spot, at in zip(row, column, strict=True)
        ],
    )


def _grubbs(block: Block, value: FloatArray, settings: OutlierSettings) -> _Found:
    """The farthest value of each analyte, p-values after Holm over the analytes of the group."""
    result = grubbs(np.swapaxes(value, 1, 2))
    adjusted = holm(result.p_value)
    group, column = np.nonzero(np.nan_to_num(adjusted, nan=1.0) < settings.alpha)
    number = np.isfinite(value).sum(axis=1)[group, column]
    return _Found(
        block.rows[group, result.place[group, column]],
        column,
        result.statistic[group, column],
        grubbs_critical(number, settings.alpha),
        adjusted[group, column],
    )


def _generalized_esd(block: Block, value: FloatArray, settings: OutlierSettings) -> _Found:
    """Up to a third of the values of each analyte, at a level divided by the number of analytes (Bonferroni)."""
    spots, analytes = value.shape[1:]
    result = generalized_esd(np.swapaxes(value, 1, 2), max(1, spots // 3), settings.alpha / analytes)
    group, column, spot = np.nonzero(result.outlier)
    last = result.number[group, column] - 1
    return _Found(
        block.rows[group, spot],
        column,
        result.statistic[group, column, last],
        result.critical[group, column, last],
        np.full(len(group), np.nan),
    )


def _modified_z(block: Block, value: FloatArray, settings: OutlierSettings) -> _Found:
    """Every value beyond the threshold; this test has no p-value to correct for the number of analytes."""
    score = np.abs(modified_z(np.swapaxes(value, 1, 2)))
    group, column, spot = np.nonzero(np.nan_to_num(score) > settings.threshold)
    return _Found(
        block.rows[group, spot],
        column,
        score[group, column, spot],
        np.full(len(group), settings.threshold),
        np.full(len(group), np.nan),
    )
