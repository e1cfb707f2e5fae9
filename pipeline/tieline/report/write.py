"""Writes the report of a run folder: the page, the hand-over files, and on request the pictures on their own."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from tieline.columns import CALIBRATE, CALIBRATE_MATERIALS
from tieline.lock import locked, refuse_if_sealed
from tieline.report.csv_files import csv_bytes
from tieline.report.currency import PAGE, report_verdict
from tieline.report.curves import curves
from tieline.report.latex import partition_document
from tieline.report.left_out import left_out_sheet
from tieline.report.methods import methods
from tieline.report.page import page
from tieline.report.references import bibliography
from tieline.report.sheets import (
    Sheet,
    declared_sheet,
    means_sheet,
    partition_sheet,
    readme_sheet,
    runs_sheet,
    settings_sheet,
)
from tieline.report.source import Source, read_finished, read_source
from tieline.report.spots import SpotUse, spot_use
from tieline.report.values_sheet import spots_sheet
from tieline.report.workbook import workbook_bytes
from tieline.storage import Pending

if TYPE_CHECKING:
    from tieline.configuration import Session


def write_report(session: Session, figures: Path | None = None) -> list[Path]:
    """Writes all files of the report into the run folder, and the pictures into `figures`; returns their paths.

    Everything is made before anything is written. Raises InputError when a stage is missing or stale, or the
    folder is sealed or being written.
    """
    refuse_if_sealed(session.run_folder)  # before anything that a run would have to mend
    source = read_source(session)
    made = {session.run_folder / name: data for name, data in report_files(source).items()}
    if figures is not None:
        from tieline.report.figures import figure_files

        made |= {figures / name: data for name, data in figure_files(source, curves(source)).items()}
    _write(session, made)
    return list(made)


def refresh_report(session: Session) -> None:
    """Right after a run: writes the report unless the one in the run folder is of the same tables."""
    if report_verdict(session).state != "current":
        files = report_files(read_finished(session))
        _write(session, {session.run_folder / name: data for name, data in files.items()})


def _write(session: Session, made: Mapping[Path, bytes]) -> None:
    """All files or, where that is interrupted half-way, no page: the page tells which results the others are of."""
    with locked(session.run_folder), Pending() as pending:
        for path, data in made.items():
            path.parent.mkdir(parents=True, exist_ok=True)
            pending.add_bytes(path, data)
        pending.finish_writes()
        (session.run_folder / PAGE).unlink(missing_ok=True)
        pending.commit()


def report_files(source: Source) -> Mapping[str, bytes]:
    """File name to content: pure, the same tables give the same bytes."""
    spots = spot_use(source.tables)
    left_out = left_out_sheet(source, spots)
    partition = partition_sheet(source)
    paragraph = methods(source, spots)
    return {
        "partition_coefficients.csv": csv_bytes(partition),
        "partition_coefficients.xlsx": workbook_bytes(
            _workbook_sheets(source, spots, partition, left_out), source.title
        ),
        "partition_coefficients.tex": partition_document(source).encode(),
        "left_out.csv": csv_bytes(left_out),
        "methods.txt": paragraph.text().encode(),
        "methods.tex": paragraph.latex().encode(),
        "references.bib": bibliography(paragraph.keys()).encode(),
        PAGE: page(
            source, spots, left_out, paragraph.text(), curves(source)
        ).encode(),  # the last, see `_write`
    }


def _workbook_sheets(source: Source, spots: SpotUse, partition: Sheet, left_out: Sheet) -> list[Sheet]:
    sheets = [
        runs_sheet(source, spots),
        partition,
        means_sheet(source),
        spots_sheet(source, spots),
        left_out,
        declared_sheet("reference materials", source.table("calibrate.materials"), CALIBRATE_MATERIALS),
        declared_sheet("calibration", source.table("calibrate"), CALIBRATE),
        settings_sheet(source),
    ]
    return [readme_sheet(source, sheets), *sheets]
