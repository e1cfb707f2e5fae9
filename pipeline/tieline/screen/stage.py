"""Stage `screen`: tests in their order, then rulings, then what is used of every value and why."""

from __future__ import annotations

from collections.abc import Mapping

import pyarrow as pa

from tieline.columns import SCREEN, VALUE_KEYS
from tieline.correction import calibrated
from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.screen.cations import cation_findings
from tieline.screen.findings import findings_table
from tieline.screen.groups import TestResult, groups_table
from tieline.screen.resolution import resolve
from tieline.screen.rulings import read_rulings, ruling_findings
from tieline.screen.session import Session, session_of
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
    results = []
    for measured in session.techniques:
        analyses = whole_analyses(measured, settings.total.min_oxides, settings.total.incomplete_below)
        if settings.total.enabled:
            results.append(total_findings(session, analyses, settings.total))
        if settings.cations.enabled:
            results.append(cation_findings(session, analyses, settings.cations))
    return results
