"""The stage files of one run folder with what they record of themselves: all that a report is made from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import numbers
from tieline.columns import TABLES
from tieline.configuration import Session
from tieline.correction import Concentrations, calibrated
from tieline.errors import InputError, Problem
from tieline.plan import Verdict, table_path
from tieline.reading.input_file import InputFile
from tieline.report.currency import finished_records
from tieline.rulings import Ruling, read_rulings
from tieline.settings import SessionSettings
from tieline.stages import STAGES
from tieline.storage import read_table


@dataclass(frozen=True)
class Source:
    """Tables by name, the stages' records by stage name, the settings in effect, the rulings as filed and, where
    there are any, the file of accepted values."""

    tables: Mapping[str, pa.Table]
    records: Mapping[str, Mapping[str, Any]]
    settings: SessionSettings
    rulings: tuple[Ruling, ...] = ()
    accepted: Mapping[str, InputFile] = field(default_factory=dict)

    def table(self, name: str) -> pa.Table:
        return self.tables[name]

    @property
    def title(self) -> str:
        return self.settings.report.title or self.settings.session

    @property
    def confidence(self) -> float:
        return self.settings.partition.confidence

    @property
    def version(self) -> str:
        return str(self.records["classify"]["version"])

    @property
    def fingerprint(self) -> str:
        """Identity of the classified D's: the same inputs and settings give the same."""
        return str(self.records["classify"]["fingerprint"])

    def concentrations(self) -> Concentrations:
        """The values as the phase means used them: calibrated and unmixed where that is configured."""
        screen = self.table("screen")
        values = calibrated(
            self.table("convert"),
            self.table("calibrate"),
            self.table("ingest.spots"),
            self.table("convert.standards"),
        )
        unmixed = numbers(screen, "unmixed_ppm")
        taken = np.isfinite(unmixed)
        return Concentrations(
            np.where(taken, unmixed, values.value),
            np.where(taken, numbers(screen, "unmixed_sigma_ppm"), values.sigma),
            values.limit,
        )


def read_source(session: Session) -> Source:
    """Reads a complete and current run folder; raises InputError where a stage is missing or stale."""
    from tieline import runner

    _refuse_unless_current(runner.status(session), session)
    return read_finished(session)


def read_finished(session: Session) -> Source:
    """As `read_source`, for a run folder that is known to be current."""
    from tieline import runner

    names = [name for stage in STAGES for name in stage.outputs]
    records = finished_records(session)
    tables = {name: read_table(table_path(session.run_folder, name), name) for name in names}
    if finished_records(session) != records:
        message = "was written by another run while it was read."
        raise InputError(Problem(message, str(session.run_folder), remedy="Try again."))
    rulings = _filed_rulings(session)
    accepted = runner.accepted_values(session) if rulings else {}
    return Source(tables, records, session.settings, rulings, accepted)


def optional_table(source: Source, name: str) -> pa.Table | None:
    """A table that not every version of the chain writes; None where it is not there or has no rows."""
    table = source.tables.get(name)
    return table if name in TABLES and table is not None and table.num_rows else None


def _refuse_unless_current(verdicts: list[Verdict], session: Session) -> None:
    for verdict in verdicts:
        if verdict.state != "current":
            message = f"{verdict.in_words()}: a report would describe other settings."
            raise InputError(Problem(message, remedy=f"Run `tieline run {session.path}` first."))


def _filed_rulings(session: Session) -> tuple[Ruling, ...]:
    """The rulings as they stand in their file: the page hands all of them back with the new ones."""
    path = session.settings.screen.rulings
    if path is None:
        return ()
    return read_rulings({path: InputFile.from_bytes(path, session.resolve(path).read_bytes())})
