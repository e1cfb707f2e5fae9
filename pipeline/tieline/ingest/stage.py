"""The stage `ingest`: spot tables as they are, every cell accounted for."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from typing import TypeVar

from tieline.errors import InputError, Problem
from tieline.ingest.asides import set_aside_table
from tieline.ingest.conditions import conditions_table
from tieline.ingest.long_table import SharedCodes, long_table, spot_table
from tieline.ingest.matching import check_spellings
from tieline.ingest.one_table import TableRead, read_table
from tieline.ingest.spots import batch_of_path
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, Remark, StageResult
from tieline.settings.ingest import IngestSettings, Table

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
    _collect(problems, lambda: check_spellings(settings.phases, names))
    if problems:  # the tables are looked at all the same
        settings = settings.model_copy(update={"phases": {}})
    conditions = _collect(problems, lambda: conditions_table(files, settings.experiments))
    reads: list[TableRead] = []
    shared = SharedCodes()
    for table, name in zip(settings.tables, table_names(settings.tables), strict=True):
        read = _collect(problems, lambda t=table, n=name: read_table(files, t, n, settings, shared))  # type: ignore[misc]
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
        remarks=(*shared_batches(settings.tables), *(remark for read in reads for remark in read.remarks)),
    )


def table_names(tables: Sequence[Table]) -> list[str]:
    """What tables are called: their path, and their sheet as well where several are in one file."""
    times = Counter(table.path for table in tables)
    names: list[str] = []
    for table in tables:
        name = table.path if times[table.path] == 1 else f"{table.path} [{table.sheet or 1}]"
        same = sum(1 for other in names if other == name or other.startswith(f"{name} ("))
        names.append(f"{name} ({same + 1})" if same else name)
    return names


def shared_batches(tables: Sequence[Table]) -> list[Remark]:
    """Tables that share a batch only because their file names are alike."""
    paths: dict[str, list[str]] = {}
    for table in tables:
        if table.batch is None and table.columns.batch is None:
            paths.setdefault(batch_of_path(table.path), []).append(table.path)
    return [
        Remark(
            f'{", ".join(sorted(set(found)))} count as one batch, "{batch}"; state batch where they are not.'
        )
        for batch, found in paths.items()
        if len(found) > 1
    ]


def _collect(problems: list[Problem], read: Callable[[], Result]) -> Result | None:
    try:
        return read()
    except InputError as error:
        problems += error.problems
        return None
