"""Test `outlier`: spots that stand out in many analytes together; single analytes on request.

Joint by default, and only to mark: rejecting single analytes automatically costs coverage even on clean data. The
statistics and their sources are in `tieline.statistics.outliers`.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.results import Remark
from tieline.screen.findings import Findings, no_findings, spot_findings
from tieline.screen.groups import TestResult
from tieline.screen.padding import Block, blocks
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
    values = np.where(dropped[measured.spots][:, None], np.nan, measured.value)
    findings = [_joint(measured, values, settings)]
    remarks: tuple[Remark, ...] = ()
    if settings.per_analyte != "off":
        findings.append(_per_analyte(measured, values, settings))
        if settings.action == "drop" and len(findings[1]):
            remarks = (
                Remark(
                    "values are left out by a single-analyte outlier test: intervals then cover less than stated",
                    measured.technique,
                ),
            )
    return TestResult(tuple(findings), (), remarks)


def _tested(
    measured: Measured, values: FloatArray, settings: OutlierSettings
) -> Iterator[tuple[Block, FloatArray]]:
    """Blocks of groups of one size each, without groups of too few spots."""
    for block in blocks(measured, np.unique(measured.group), exact=True):
        value = block.of(values)
        enough = np.isfinite(value).any(axis=2).sum(axis=1) >= settings.min_spots
        if enough.any():
            yield Block(block.groups[enough], block.rows[enough]), value[enough]


def _joint(measured: Measured, values: FloatArray, settings: OutlierSettings) -> Findings:
    rows, counts, needed, p_values = [], [], [], []
    for block, value in _tested(measured, values, settings):
        joint = joint_outliers(value, settings.alpha, settings.p)
        at = np.nonzero(joint.outlier)
        rows.append(block.rows[at])
        counts.append(joint.analytes[at])
        needed.append(joint.needed[at[0]])
        p_values.append(joint.p_value[at])
    if not rows:
        return no_findings("outlier")
    row, count, least = np.concatenate(rows), np.concatenate(counts), np.concatenate(needed)
    return spot_findings(
        "outlier",
        settings.action,
        measured.spots[row],
        count.astype(np.float64),
        least.astype(np.float64),
        np.concatenate(p_values),
        [
            f"{number} analytes are the extreme of their group at once; {enough} or more are improbable"
            for number, enough in zip(count, least, strict=True)
        ],
    )


def _per_analyte(measured: Measured, values: FloatArray, settings: OutlierSettings) -> Findings:
    test = {"grubbs": _grubbs, "esd": _generalized_esd, "modified-z": _modified_z}[settings.per_analyte]
    parts = [test(block, value, settings) for block, value in _tested(measured, values, settings)]
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
            f"{measured.analytes[at]} {values[spot, at]:.4g} ppm stands out ({settings.per_analyte})"
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
