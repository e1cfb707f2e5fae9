"""Stage `screen`: tests in their order, then rulings, then what is used of every value and why."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray
from tieline.columns import SCREEN, VALUE_KEYS
from tieline.correction import calibrated
from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.screen.cations import cation_findings
from tieline.screen.findings import findings_table
from tieline.screen.groups import TestResult, groups_table
from tieline.screen.identity import identity_findings
from tieline.screen.overlap import score_overlap
from tieline.screen.overlap_groups import overlap_result
from tieline.screen.resolution import resolve
from tieline.screen.rulings import read_rulings, ruling_findings
from tieline.screen.session import Measured, Session, session_of
from tieline.screen.totals import total_findings
from tieline.screen.whole_analyses import whole_analyses
from tieline.settings.screen import ScreenSettings
from tieline.tables import build


def screen(
    convert: pa.Table,
    calibrate: pa.Table,
    ingest_spots: pa.Table,
    *,
    files: Mapping[str, InputFile],
    settings: ScreenSettings,
) -> StageResult:
    """Findings on every spot, and the resulting use of every value of `convert`, in its order of rows.

    Raises InputError for rulings that are incomplete, contradict each other or name spots that do not exist.
    """
    rulings = read_rulings(files)
    concentrations = calibrated(convert, calibrate, ingest_spots)
    session = session_of(convert, concentrations)
    ruled = ruling_findings(rulings, session)
    results = _tests(session, settings)
    findings = (ruled, *(part for result in results for part in result.findings))
    resolution = resolve(convert, concentrations, session, findings)
    table = build(
        SCREEN,
        {column.name: convert.column(column.name) for column in VALUE_KEYS}
        | {"element": convert.column("element"), "use": resolution.use, "why": resolution.why()},
    )
    tables = {
        "screen": table,
        "screen.findings": findings_table(findings, session),
        "screen.groups": groups_table(
            (verdict for result in results for verdict in result.verdicts), session.spots
        ),
    }
    remarks = tuple(remark for result in results for remark in result.remarks)
    return StageResult(tables, resolution.ledger(), remarks)


def _tests(session: Session, settings: ScreenSettings) -> list[TestResult]:
    """Every enabled test on every technique, in document order."""
    results: list[TestResult] = []
    for measured in session.techniques:
        results += _tests_of(session, measured, settings)
    return results


def _tests_of(session: Session, measured: Measured, settings: ScreenSettings) -> list[TestResult]:
    analyses = whole_analyses(measured, settings.total.min_oxides, settings.total.incomplete_below)
    results = []
    if settings.total.enabled:
        results.append(total_findings(session, analyses, settings.total))
    if settings.cations.enabled:
        results.append(cation_findings(session, analyses, settings.cations))
    if settings.identity.enabled:
        results.append(identity_findings(session, analyses, settings.identity))
    if settings.overlap.enabled:
        whole = bool(analyses.complete.any())
        overlap = score_overlap(session, measured, whole, _dropped(session, results), settings.overlap)
        results.append(overlap_result(session, overlap, settings.overlap))
    return results


def _dropped(session: Session, results: Iterable[TestResult]) -> BoolArray:
    """Spots (spots,) that the tests so far leave out; rulings come last and are not seen here."""
    dropped = np.zeros(session.spots.count, dtype=np.bool_)
    for result in results:
        for part in result.findings:
            dropped |= part.dropped_spots(session.spots.count)
    return dropped
