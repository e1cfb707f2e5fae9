"""Runs the chain: finds what is stale, reads, checks, calls, checks, and writes all results or none.

The only module that connects stages with files. Every stage's new tables are first written beside
their targets under temporary names; only when the whole run has succeeded are they renamed, so that a
problem found late leaves the folder as it was.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import Any

import pyarrow as pa

from tieline import __version__
from tieline.configuration import Session
from tieline.errors import DefectError, InputError, Problem
from tieline.lock import is_sealed, locked, refuse_if_sealed
from tieline.manifest import write_manifest
from tieline.memory import return_unused_memory
from tieline.narrowing import compact
from tieline.plan import Verdict, judge, read_records, stage_fingerprint, table_path
from tieline.provenance import ColumnDigests, bytes_digest, content_digest
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, Remark, StageResult
from tieline.stages import NAMES, STAGES, Stage
from tieline.storage import (
    SCHEMA_VERSION,
    Pending,
    damaged,
    read_input,
    read_table,
    run_folder_for_writing,
)

Progress = Callable[[str, str], None]


@dataclass(frozen=True)
class StageReport:
    """What became of one stage in a run: its verdict before, and its ledger and remarks after."""

    verdict: Verdict
    recomputed: bool
    ledger: Ledger
    remarks: tuple[Remark, ...]


@dataclass
class Workspace:
    """What is known so far in one run: input files, digests of files and tables, tables in memory."""

    session: Session
    files: dict[str, InputFile]
    input_digests: dict[str, str]
    digests: dict[str, str]
    tables: dict[str, pa.Table] = field(default_factory=dict)
    columns: ColumnDigests = field(default_factory=ColumnDigests)

    def table(self, name: str) -> pa.Table:
        if name not in self.tables:
            path = table_path(self.session.run_folder, name)
            table = compact(read_table(path, name))
            if content_digest(table, self.columns) != self.digests[name]:
                raise InputError(damaged(path, "its contents are not those it was written with"))
            self.tables[name] = table
        return self.tables[name]


def status(session: Session) -> list[Verdict]:
    """The verdict on every stage; reads input files and stage-file footers, writes nothing."""
    return _verdicts(_workspace(session), STAGES)


def _verdicts(work: Workspace, stages: Iterable[Stage]) -> list[Verdict]:
    digests = dict(work.digests)
    verdicts = []
    for stage in stages:
        records = read_records(work.session.run_folder, stage)
        verdict = judge(stage, work.session.settings, records, digests)
        if verdict.state == "current":
            digests.update(_recorded_digests(records))
        verdicts.append(verdict)
    return verdicts


def run(
    session: Session,
    *,
    only: str | None = None,
    until: str | None = None,
    fresh: bool = False,
    progress: Progress = lambda stage, state: None,
    planned: Callable[[list[Verdict]], None] = lambda verdicts: None,
    after: Callable[[int], None] = lambda n_stages: None,
) -> list[StageReport]:
    """Brings the run folder up to date and returns what was done, stage by stage.

    `only` recomputes one stage from current files before it; `until` stops after a stage; `fresh`
    recomputes everything. `planned` is told the verdicts before any work is done; `after` is called with the
    number of stages once they are written, while the folder is still locked. Raises InputError with every
    problem found, and then has changed nothing.
    """
    stages = _selected(only, until)
    refuse_if_sealed(session.run_folder)
    work = _workspace(session)
    planned(_verdicts(work, stages))
    with run_folder_for_writing(session.run_folder), locked(session.run_folder) as hold:
        with Pending() as pending:
            reports = [_bring_up_to_date(stage, work, pending, only, fresh, progress) for stage in stages]
            pending.finish_writes()
            hold.check()
            pending.commit()
        write_manifest(work.session, work.input_digests)
        after(len(reports))
    return reports


def tables_of(session: Session, names: Iterable[str]) -> dict[str, pa.Table]:
    """Stage tables of the run folder by name; of those that are not there none."""
    paths = {name: table_path(session.run_folder, name) for name in names}
    return {name: read_table(path, name) for name, path in paths.items() if path.exists()}


def accepted_values(session: Session) -> dict[str, InputFile]:
    """The file of accepted values by its path; nothing where there is none."""
    path = session.settings.ingest.reference_materials.path
    return {} if path is None else {path: _input(session, path)}


def finished(session: Session, until: str) -> tuple[Session, dict[str, pa.Table], dict[str, InputFile]]:
    """The session with its settings in effect, every stage table up to one stage, and the input files.

    Raises InputError where one of these stages is not current: its tables would tell of other settings.
    """
    work = _workspace(session)
    stages = STAGES[: NAMES.index(until) + 1]
    before = _fingerprints(session, stages)
    for verdict in _verdicts(work, stages):
        if verdict.state != "current":
            remedy = (
                "The folder is sealed: bring back the files and settings it was made from, or run into another --out folder."
                if is_sealed(session.run_folder)
                else "Run `tieline run` first."
            )
            raise InputError(Problem(f"{verdict.in_words()}.", remedy=remedy))
    tables = tables_of(session, (name for stage in stages for name in stage.outputs))
    if _fingerprints(session, stages) != before:
        raise InputError(
            Problem(
                "was written by another run while it was read.", str(session.run_folder), remedy="Try again."
            )
        )
    return work.session, tables, work.files


def _fingerprints(session: Session, stages: Iterable[Stage]) -> list[object]:
    """Of all files of some stages: the same before and after reading means that one run's files were read."""
    return [
        (record or {}).get("fingerprint")
        for stage in stages
        for record in read_records(session.run_folder, stage).values()
    ]


def check(session: Session) -> list[StageReport]:
    """Everything `run` would do, without writing: raises InputError with every problem found."""
    work = _workspace(session)
    return [_compute(stage, work, None, Verdict(stage.name, "missing")) for stage in STAGES]


def problems_of(session: Session) -> tuple[Problem, ...]:
    """Every problem that `run` would meet in the session's files and tables."""
    try:
        check(session)
    except InputError as error:
        return error.problems
    return ()


def _selected(only: str | None, until: str | None) -> tuple[Stage, ...]:
    last = only or until
    if last is not None and last not in NAMES:
        from tieline.errors import nearest

        remedy = nearest(last, NAMES) or f"Stages: {', '.join(NAMES)}."
        raise InputError(Problem(f'no stage is called "{last}".', remedy=remedy))
    return STAGES if last is None else STAGES[: NAMES.index(last) + 1]


def _workspace(session: Session) -> Workspace:
    """Every input file of the session, whichever stages are wanted: they are named and checked together."""
    paths = dict.fromkeys(path for stage in STAGES for path in stage.files(session.settings))
    files: dict[str, InputFile] = {}
    problems: list[Problem] = []
    for path in paths:
        try:
            files[path] = _input(session, path)
        except InputError as error:
            problems += error.problems
        except (OSError, ValueError) as error:
            problems.append(_unreadable(session, path, error))
    if problems:
        problems += _problems_of_files(STAGES, session, files)
        raise InputError([*problems, *_problems_of_tables(session, files)])
    try:
        named = _with_material_names(session, files)
    except InputError:
        problems = _problems_of_files(STAGES, session, files)
        raise InputError([*problems, *_problems_of_tables(session, files)]) from None
    digests = {path: bytes_digest(file.data) for path, file in files.items()}
    return Workspace(named, files, digests, dict(digests))


def _input(session: Session, path: str) -> InputFile:
    """One input file, as large as the settings allow. Raises InputError, OSError or ValueError."""
    largest = session.settings.ingest.limits.expanded_mb * 1_000_000
    return read_input(session.resolve(path), path, largest)


def _with_material_names(session: Session, files: dict[str, InputFile]) -> Session:
    """The session with the names of its reference materials, taken from the accepted values where not given.

    `ingest` must recognise reference-material spots, and depends on the names alone: a revised accepted
    value makes `calibrate` stale, not `ingest`.
    """
    from tieline.accepted import material_names

    materials = session.settings.ingest.reference_materials
    if materials.names or materials.path is None or materials.path not in files:
        return session
    names = material_names({materials.path: files[materials.path]})
    materials = materials.model_copy(update={"names": names})
    ingest = session.settings.ingest.model_copy(update={"reference_materials": materials})
    return replace(session, settings=session.settings.model_copy(update={"ingest": ingest}))


def _bring_up_to_date(
    stage: Stage, work: Workspace, pending: Pending, only: str | None, fresh: bool, progress: Progress
) -> StageReport:
    records = read_records(work.session.run_folder, stage)
    verdict = judge(stage, work.session.settings, records, work.digests)
    wanted = stage.name == only if only is not None else fresh or verdict.state != "current"
    if only is not None and not wanted and verdict.state != "current":
        raise InputError(_refusal(only, verdict))
    if not wanted:
        progress(stage.name, "current")
        work.digests.update(_recorded_digests(records))
        record = records[stage.outputs[0]] or {}
        ledger = Ledger(**record["ledger"])
        return StageReport(verdict, False, ledger, tuple(Remark(**remark) for remark in record["remarks"]))
    progress(stage.name, "running")
    report = _compute(stage, work, pending, verdict)
    return_unused_memory()
    progress(stage.name, "done")
    return report


def _compute(stage: Stage, work: Workspace, pending: Pending | None, verdict: Verdict) -> StageReport:
    settings = work.session.settings
    inputs = {name.replace(".", "_"): work.table(name) for name in stage.inputs}
    extra = stage.file_arguments(settings, work.files)
    try:
        result = stage.function()(**inputs, **extra, settings=stage.settings(settings))
    except InputError as error:
        later = STAGES[NAMES.index(stage.name) + 1 :]
        more = _problems_of_files(later, work.session, work.files)
        # Two stages read the rulings: what is wrong with them is told once.
        raise InputError(dict.fromkeys([*error.problems, *more])) from None
    return_unused_memory()
    _check_result(stage, result, work)
    del inputs, extra  # what no later stage reads need not wait until the outputs are written
    work.tables.update(result.tables)
    _forget(stage, work)
    used = {name: work.digests[name] for name in (*stage.inputs, *stage.files(settings))}
    record = {
        "version": __version__,
        "schema": SCHEMA_VERSION,
        "stage": stage.name,
        "revision": stage.revision,
        "fingerprint": stage_fingerprint(stage, settings, used),
        "inputs": used,
        "settings": stage.own_settings(settings),
        "ledger": {
            "unit": result.ledger.unit,
            "entered": result.ledger.entered,
            "outcomes": dict(result.ledger.outcomes),
        },
        "remarks": [{"message": remark.message, "place": remark.place} for remark in result.remarks],
    }
    for name in reversed(stage.outputs):
        work.digests[name] = content_digest(result.tables[name], work.columns)
        if pending is not None:
            path = table_path(work.session.run_folder, name)
            pending.add(path, name, result.tables[name], {**record, "content": work.digests[name]})
    return StageReport(verdict, True, result.ledger, result.remarks)


def _check_result(stage: Stage, result: StageResult, work: Workspace) -> None:
    if tuple(result.tables) != stage.outputs:
        raise DefectError(f"{stage.name} returned {tuple(result.tables)}, declared are {stage.outputs}")
    result.ledger.check(stage.name)
    if stage.counted is not None and result.ledger.entered != work.table(stage.counted).num_rows:
        raise DefectError(
            f"{stage.name}: {result.ledger.entered} {result.ledger.unit} entered, "
            f"but {stage.counted} has {work.table(stage.counted).num_rows} rows"
        )


def _forget(stage: Stage, work: Workspace) -> None:
    """Drops tables and input files from memory that no later stage reads."""
    stages = STAGES[NAMES.index(stage.name) + 1 :]
    later = {name for other in stages for name in (*other.inputs, other.counted)}
    work.tables = {name: table for name, table in work.tables.items() if name in later}
    work.columns.keep(work.tables.values())
    files = {path for other in stages for path in other.files(work.session.settings)}
    work.files = {path: file for path, file in work.files.items() if path in files}


def _recorded_digests(records: dict[str, dict[str, Any] | None]) -> dict[str, str]:
    return {table: record["content"] for table, record in records.items() if record is not None}


def _problems_of_files(
    stages: Iterable[Stage], session: Session, files: dict[str, InputFile]
) -> list[Problem]:
    """Problems of the small files that later stages read, so that they are all told at once."""
    problems: list[Problem] = []
    for stage in stages:
        own = {path: files[path] for path in stage.files_apart(session.settings) if path in files}
        try:
            stage.read_files(own)
        except InputError as error:
            problems += error.problems
    return problems


def _problems_of_tables(session: Session, files: dict[str, InputFile]) -> tuple[Problem, ...]:
    """Problems of those spot tables that can be read, where others cannot."""
    try:
        ingest = _with_material_names(session, files).settings.ingest
    except InputError:
        ingest = session.settings.ingest
    tables = tuple(table for table in ingest.tables if table.path in files)
    experiments = ingest.experiments if ingest.experiments and ingest.experiments.path in files else None
    if not tables:
        return ()
    try:
        STAGES[0].function()(
            files=files, settings=ingest.model_copy(update={"tables": tables, "experiments": experiments})
        )
    except InputError as error:
        return error.problems
    return ()


def _unreadable(session: Session, path: str, error: Exception) -> Problem:
    from tieline.errors import nearest

    target = session.resolve(path)
    missing = isinstance(error, FileNotFoundError | NotADirectoryError)
    reason = "no such file" if missing else f"cannot be read ({getattr(error, 'strerror', None) or error})"
    try:
        others = [other.name for other in target.parent.iterdir()]
    except (OSError, ValueError):
        others = []
    remedy = nearest(target.name, others) or f"The path is relative to {session.path}."
    return Problem(f"{reason}.", path, remedy=remedy)


def _refusal(only: str, verdict: Verdict) -> Problem:
    return Problem(
        f"--only {only} needs current files of the stages before it, but {verdict.in_words()}.",
        remedy=f"Run without --only, or with --until {verdict.stage} first.",
    )
