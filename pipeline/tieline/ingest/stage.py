"""The stage `ingest`: spot tables as they are, every cell accounted for."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TypeVar

from tieline.errors import InputError, Problem
from tieline.ingest.asides import set_aside_table
from tieline.ingest.conditions import conditions_table
from tieline.ingest.long_table import SharedCodes, long_table, spot_table
from tieline.ingest.matching import check_spellings
from tieline.ingest.one_table import TableRead, read_table
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, StageResult
from tieline.settings.ingest import IngestSettings

OUTCOMES = ("values", "below limit only", "not measured", "set aside", "labels", "sigma", "limit", "not read")
Result = TypeVar("Result")


def ingest(files: Mapping[str, InputFile], *, settings: IngestSettings) -> StageResult:
    """Reads the spot tables.

    files: configured path -> file, for every spot table and the table of conditions. Returns `ingest`, one
    row per spot and analyte, ordered by table, row and column; `ingest.spots`; `ingest.set_aside`; and
    `ingest.experiments`.

    The ledger counts the cells of all rows below the header (and units line) that are not wholly blank: as
    many as the table has columns, in rows of another length as many as they have. Repeated header lines and
    summary rows are set aside; cells of a Total column, of unused and of ignored columns are "not read".
    Raises InputError with every problem of every file.
    """
    problems: list[Problem] = []
    names = settings.reference_materials.names
    spellings_agree = _collect(problems, lambda: check_spellings(settings.phases, names))
    conditions = _collect(problems, lambda: conditions_table(files, settings.experiments))
    reads: list[TableRead] = []
    shared = SharedCodes()
    for table in settings.tables if spellings_agree else ():
        read = _collect(problems, lambda table=table: read_table(files, table, settings, shared))  # type: ignore[misc]
        if read is not None:
            problems += read.problems
            reads.append(read)
    if problems or conditions is None:
        raise InputError(problems)
    parts = [read.parts for read in reads if read.parts is not None]
    return StageResult(
        tables={
            "ingest": long_table(parts),
            "ingest.spots": spot_table(parts),
            "ingest.set_aside": set_aside_table([read.asides for read in reads]),
            "ingest.experiments": conditions,
        },
        ledger=Ledger(
            "cells",
            sum(read.entered for read in reads),
            {name: sum(read.outcomes[name] for read in reads) for name in OUTCOMES},
        ),
        remarks=tuple(remark for read in reads for remark in read.remarks),
    )


def _collect(problems: list[Problem], read: Callable[[], Result]) -> Result | None:
    try:
        return read()
    except InputError as error:
        problems += error.problems
        return None
