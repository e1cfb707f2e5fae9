"""Whether the report in a run folder belongs to the results beside it; light enough for every `status`."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tieline import __version__
from tieline.plan import Verdict, read_records
from tieline.provenance import bytes_digest, json_text
from tieline.stages import STAGES

if TYPE_CHECKING:
    from tieline.configuration import Session
    from tieline.settings import SessionSettings

PAGE = "report.html"
FILES = (
    PAGE,
    "partition_coefficients.csv",
    "partition_coefficients.xlsx",
    "partition_coefficients.tex",
    "left_out.csv",
    "methods.txt",
    "methods.tex",
    "references.bib",
)


def report_verdict(session: Session) -> Verdict:
    """Whether the report that lies in the run folder was made from the stage files that lie there."""
    missing = [name for name in FILES if not (session.run_folder / name).exists()]
    if len(missing) == len(FILES):
        return Verdict("report", "missing")
    if missing:
        return Verdict("report", "stale", tuple(f"{name} is missing" for name in missing))
    records = finished_records(session)
    if not all("fingerprint" in record for record in records.values()):
        return Verdict("report", "stale", ("not all results it was made from are here",))
    if not _holds(session.run_folder / PAGE, stamp(records, session.settings)):
        return Verdict("report", "stale", ("it was made from other results or with other settings",))
    return Verdict("report", "current")


def _holds(path: Path, text: str) -> bool:
    """Whether the first lines of a file hold a text."""
    with path.open("rb") as stream:
        return text.encode() in stream.read(4096)


def finished_records(session: Session) -> dict[str, Mapping[str, Any]]:
    """What every stage's main file records of itself, by stage name."""
    return {stage.name: read_records(session.run_folder, stage)[stage.outputs[0]] or {} for stage in STAGES}


def stamp(records: Mapping[str, Mapping[str, Any]], settings: SessionSettings) -> str:
    """A digest of all that a report is made from; it stands in the page, and tells whether the page is current."""
    parts = {name: record["fingerprint"] for name, record in records.items()}
    made_from = {
        "version": __version__,
        "stages": parts,
        "report": settings.report.model_dump(mode="json"),
    }
    return f"report-{bytes_digest(json_text(made_from).encode())}"
