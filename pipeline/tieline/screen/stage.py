"""Stage `screen`: tests in their order, then rulings, then what is used of every value and why."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, flags
from tieline.columns import SCREEN, VALUE_KEYS
from tieline.correction import calibrated
from tieline.memory import return_unused_memory
from tieline.narrowing import no_numbers
from tieline.reading.input_file import InputFile
from tieline.results import Remark, StageResult
from tieline.rulings import rulings_as_written
from tieline.screen.cations import cation_findings
from tieline.screen.findings import findings_table
from tieline.screen.groups import TestResult, groups_table
from tieline.screen.identity import identity_findings
from tieline.screen.imprecision import imprecision_result, reference_remarks
from tieline.screen.outliers import outlier_result
from tieline.screen.overlap import Overlap, score_overlap
from tieline.screen.overlap_groups import overlap_result
from tieline.screen.resolution import resolve
from tieline.screen.rulings import ruling_findings
from tieline.screen.session import Measured, Session, session_of
from tieline.screen.totals import total_findings
from tieline.screen.unmixing import UnmixedValues, unmixed_values
from tieline.screen.whole_analyses import whole_analyses
from tieline.screen.zoning import NO_ZONING, zoning_result
from tieline.settings.screen import ScreenSettings
from tieline.tables import build

UNMIXED = ("unmixed_ppm", "unmixed_sigma_ppm", "unmixed_shared_ppm")


def screen(
    convert: pa.Table,
    calibrate: pa.Table,
    ingest_spots: pa.Table,
    convert_standards: pa.Table | None = None,
    *,
    files: Mapping[str, InputFile],
    settings: ScreenSettings,
) -> StageResult:
    """Findings on every spot, and the resulting use of every value of `convert`, in its order of rows.

    Raises InputError for rulings that are incomplete, contradict each other or name spots that do not exist.
    """
    rulings, malformed = rulings_as_written(files)
    concentrations = calibrated(convert, calibrate, ingest_spots, convert_standards)
    known = np.isfinite(concentrations.limit) & flags(convert, "below_limit")
    known |= np.isfinite(concentrations.value)
    session = session_of(convert, concentrations)
    del concentrations  # the matrices of the session hold them from here on
    ruled = ruling_findings(rulings, session, malformed)
    results, unmixed = _tests(session, settings)
    findings = (ruled, *(part for result in results for part in result.findings))
    if settings.imprecise.enabled:
        results.append(TestResult(remarks=tuple(reference_remarks(calibrate))))
    resolution = resolve(convert, known, session, findings)
    table = build(
        SCREEN,
        {column.name: convert.column(column.name) for column in VALUE_KEYS}
        | {
            "element": convert.column("element"),
            "use": resolution.use,
            "why": resolution.why(),
            **_unmixed_columns(unmixed, resolution.kept),
        },
    )
    tables = {
        "screen": table,
        "screen.findings": findings_table(findings, session),
        "screen.groups": groups_table(
            (verdict for result in results for verdict in result.verdicts), session.spots
        ),
    }
    remarks = (
        *_without_uncertainties(session),
        *(remark for result in results for remark in result.remarks),
    )
    return StageResult(tables, resolution.ledger(), remarks)


def _unmixed_columns(unmixed: UnmixedValues | None, kept: BoolArray) -> dict[str, Any]:
    """What stands for the measured values where overlap was taken out and no ruling keeps them."""
    if unmixed is None:
        return dict.fromkeys(UNMIXED, no_numbers(len(kept)))
    values = (unmixed.value, unmixed.sigma, unmixed.shared)
    return {name: np.where(kept, np.nan, value) for name, value in zip(UNMIXED, values, strict=True)}


def _without_uncertainties(session: Session) -> list[Remark]:
    """Techniques of which no uncertainty was reported: what that keeps from being tested."""
    return [
        Remark(
            f"{measured.technique}: no uncertainties are reported, so that glass in crystals, zoning and the precision of "
            "totals and cation sums are not tested; state them in ingest.tables.sigma"
        )
        for measured in session.techniques
        if not np.isfinite(measured.sigma).any()
    ]


def _tests(session: Session, settings: ScreenSettings) -> tuple[list[TestResult], UnmixedValues | None]:
    """Every enabled test on every technique, in document order; and what overlap was taken out, if that was asked."""
    results: list[TestResult] = []
    overlaps: list[Overlap] = []
    for measured in session.techniques:
        before, whole = _tests_of_compositions(session, measured, settings)
        results += before
        if settings.overlap.enabled or settings.zoning.enabled:
            dropped = _dropped(session, before)
            overlaps.append(score_overlap(session, measured, whole, dropped, settings.overlap))
    scored = [part for overlap in overlaps for part in overlap.scored]
    # The overlap findings need to know what is zoned, though they come first.
    zoning = zoning_result(session, scored, settings.zoning) if settings.zoning.enabled else NO_ZONING
    unmixed = None
    if settings.overlap.enabled:
        results += [overlap_result(session, each, settings.overlap, zoning.phases) for each in overlaps]
        if settings.overlap.use == "unmix":
            unmixed, not_unmixed = unmixed_values(session, scored, settings.overlap, zoning.phases)
            results.append(TestResult(tuple(not_unmixed)))
    results.append(zoning.result)
    dropped = _dropped(session, results)
    del overlaps, scored
    return_unused_memory()
    for measured in session.techniques:
        if settings.outlier.enabled:
            results.append(outlier_result(session, measured, dropped, settings.outlier))
        if settings.imprecise.enabled:
            melt = settings.overlap.melt_phase
            results.append(imprecision_result(session, measured, melt, settings.imprecise))
    return results, unmixed


def _tests_of_compositions(
    session: Session, measured: Measured, settings: ScreenSettings
) -> tuple[list[TestResult], bool]:
    """Tests of every spot by itself: total, cation sum, identity; and whether there are whole analyses."""
    analyses = whole_analyses(measured, settings.total.min_oxides, settings.total.incomplete_below)
    results = []
    if settings.total.enabled:
        results.append(total_findings(session, analyses, settings.total))
    if settings.cations.enabled:
        results.append(cation_findings(session, analyses, settings.cations))
    if settings.identity.enabled:
        results.append(identity_findings(session, analyses, settings.identity))
    return results, bool(analyses.complete.any())


def _dropped(session: Session, results: Iterable[TestResult]) -> BoolArray:
    """Spots (spots,) that the tests so far leave out; rulings come last and are not seen here."""
    dropped = np.zeros(session.spots.count, dtype=np.bool_)
    for result in results:
        for part in result.findings:
            dropped |= part.dropped_spots(session.spots.count)
    return dropped
