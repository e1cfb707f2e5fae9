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
from tieline.screen.imprecision import imprecision_result, reference_remarks
from tieline.screen.outliers import outlier_result
from tieline.screen.overlap import Scored, score_overlap
from tieline.screen.overlap_groups import overlap_result
from tieline.screen.resolution import resolve
from tieline.screen.rulings import read_rulings, ruling_findings
from tieline.screen.session import Session, session_of
from tieline.screen.totals import total_findings
from tieline.screen.unmixing import no_unmixing, unmixed_values
from tieline.screen.whole_analyses import WholeAnalyses, whole_analyses
from tieline.screen.zoning import zoning_result
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
    results, scored = _tests(session, settings)
    unmixed = no_unmixing(convert.num_rows)
    if settings.overlap.enabled and settings.overlap.use == "unmix":
        unmixed, not_unmixed = unmixed_values(session, scored, settings.overlap)
        results.append(TestResult(tuple(not_unmixed)))
    findings = (ruled, *(part for result in results for part in result.findings))
    if settings.imprecise.enabled:
        results.append(TestResult(remarks=tuple(reference_remarks(calibrate))))
    resolution = resolve(convert, concentrations, session, findings)
    table = build(
        SCREEN,
        {column.name: convert.column(column.name) for column in VALUE_KEYS}
        | {
            "element": convert.column("element"),
            "use": resolution.use,
            "why": resolution.why(),
            "unmixed_ppm": np.where(resolution.kept, np.nan, unmixed.value),
            "unmixed_sigma_ppm": np.where(resolution.kept, np.nan, unmixed.sigma),
            "unmixed_shared_ppm": np.where(resolution.kept, np.nan, unmixed.shared),
        },
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


def _tests(session: Session, settings: ScreenSettings) -> tuple[list[TestResult], list[Scored]]:
    """Every enabled test on every technique, in document order; and the overlap scores."""
    results: list[TestResult] = []
    scored: list[Scored] = []
    for measured in session.techniques:
        analyses = whole_analyses(measured, settings.total.min_oxides, settings.total.incomplete_below)
        before = _tests_of_compositions(session, analyses, settings)
        results += before
        if settings.overlap.enabled or settings.zoning.enabled:
            whole = bool(analyses.complete.any())
            overlap = score_overlap(session, measured, whole, _dropped(session, before), settings.overlap)
            scored += overlap.scored
            if settings.overlap.enabled:
                results.append(overlap_result(session, overlap, settings.overlap))
    if settings.zoning.enabled:
        results.append(zoning_result(session, scored, settings.zoning))
    dropped = _dropped(session, results)
    for measured in session.techniques:
        if settings.outlier.enabled:
            results.append(outlier_result(session, measured, dropped, settings.outlier))
        if settings.imprecise.enabled:
            results.append(
                imprecision_result(session, measured, settings.overlap.melt_phase, settings.imprecise)
            )
    return results, scored


def _tests_of_compositions(
    session: Session, analyses: WholeAnalyses, settings: ScreenSettings
) -> list[TestResult]:
    """Tests of every spot by itself: total, cation sum, identity."""
    results = []
    if settings.total.enabled:
        results.append(total_findings(session, analyses, settings.total))
    if settings.cations.enabled:
        results.append(cation_findings(session, analyses, settings.cations))
    if settings.identity.enabled:
        results.append(identity_findings(session, analyses, settings.identity))
    return results


def _dropped(session: Session, results: Iterable[TestResult]) -> BoolArray:
    """Spots (spots,) that the tests so far leave out; rulings come last and are not seen here."""
    dropped = np.zeros(session.spots.count, dtype=np.bool_)
    for result in results:
        for part in result.findings:
            dropped |= part.dropped_spots(session.spots.count)
    return dropped
