"""Runs the chain again from the inputs and the settings in effect, in a temporary place, and compares."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from tieline import __version__, runner
from tieline.arrays import flags, labels, numbers
from tieline.auditing.contents import compare_tables
from tieline.auditing.folder import Difference, RunFolder, read_stage_file
from tieline.auditing.summary import values_ruled_out
from tieline.configuration import Session
from tieline.errors import InputError
from tieline.plan import table_path
from tieline.settings import SessionSettings
from tieline.stages import NAMES, STAGES


@dataclass
class Recomputation:
    """`done` tells whether the chain could be run; `why_not` why it could not; `report` how many files of it were compared."""

    done: bool = False
    why_not: str = ""
    same: int = 0
    report: int = 0
    last_digits: list[str] = field(default_factory=list)
    differences: list[Difference] = field(default_factory=list)


def recompute(folder: RunFolder) -> Recomputation:
    """Every stage file that the folder has, made anew from the inputs as they are now."""
    result = Recomputation()
    if folder.settings is None:
        result.why_not = "the settings in effect cannot be read"
        return result
    configuration = folder.configuration()
    if configuration is None:
        result.why_not = "only the manifest tells where the inputs are"
        return result
    wanted = [stage.name for stage in STAGES if any(name in folder.files for name in stage.outputs)]
    if not wanted:
        result.why_not = "there is no stage file"
        return result
    with tempfile.TemporaryDirectory(prefix="tieline-audit-") as temporary:
        session = Session(configuration, folder.settings, Path(temporary) / "run")
        try:
            reports = runner.run(session, until=max(wanted, key=NAMES.index))
        except InputError as error:
            more = f" and {len(error.problems) - 1} more" if len(error.problems) > 1 else ""
            result.why_not = f"{error.problems[0]}{more}"
            return result
        _compare_files(folder, session.run_folder, result)
        _compare_report(folder, session, result)
    ledgers = {report.verdict.stage: vars(report.ledger) for report in reports}
    result.differences += _ledger_differences(folder, ledgers)
    result.done = True
    return result


def _compare_files(folder: RunFolder, made: Path, result: Recomputation) -> None:
    for stage in STAGES:
        for name in stage.outputs:
            filed, path = folder.files.get(name), table_path(made, name)
            if filed is None or filed.table is None or not path.exists():
                continue
            anew = read_stage_file(path, name, stage.name)
            if anew.content == filed.content:
                result.same += 1
                continue
            assert anew.table is not None
            comparison = compare_tables(filed.table, anew.table)
            if comparison.same:
                result.last_digits.append(f"{name}.parquet")
            else:
                result.differences.append(Difference("recomputed", f"{name}.parquet", comparison.detail))


def _compare_report(folder: RunFolder, again: Session, result: Recomputation) -> None:
    """Report files that are not what the recomputed results give; `again` is the recomputed run."""
    from tieline.report.currency import FILES, report_verdict

    present = {name: (folder.path / name).read_bytes() for name in FILES if (folder.path / name).exists()}
    complete = all(stage.name in folder.files for stage in STAGES)
    if not present or not complete or folder.manifest.get("tieline") != __version__:
        return
    result.report = len(present)
    verdict = report_verdict(replace(again, run_folder=folder.path))
    if verdict.state != "current":
        words = f"the report does not belong to these results: {'; '.join(verdict.reasons)}"
        result.differences.append(Difference("stale", next(iter(present)), words))
        return
    result.differences += [
        Difference("edited", name, "is not what the results give: changed after the report was written")
        for name in _unlike(present, again)
    ]


def _unlike(present: Mapping[str, bytes], again: Session) -> list[str]:
    """Report files that differ from those of the recomputed results."""
    from tieline.report.source import read_finished
    from tieline.report.write import report_files

    # A run fills in the names of the reference materials where the configuration leaves them to the accepted
    # values; the report lists the configuration's own settings, and which it was can no longer be told.
    possible = []
    for settings in (_without_material_names(again.settings), again.settings):
        made = report_files(read_finished(replace(again, settings=settings)))
        possible.append([name for name, data in present.items() if made.get(name) != data])
        if not possible[-1]:
            break
    return min(possible, key=len)


def _without_material_names(settings: SessionSettings) -> SessionSettings:
    materials = settings.ingest.reference_materials
    if materials.path is None:
        return settings
    ingest = settings.ingest.model_copy(
        update={"reference_materials": materials.model_copy(update={"names": {}})}
    )
    return settings.model_copy(update={"ingest": ingest})


def _ledger_differences(folder: RunFolder, ledgers: Mapping[str, Mapping[str, Any]]) -> list[Difference]:
    """Recorded accounts that are not those of the recomputed chain."""
    return [
        Difference(
            "ledger",
            f"{stage.name}.parquet",
            f"its recorded account of {stage.outputs[0]} is not the recomputed one",
        )
        for stage in STAGES
        if (record := _record(folder, stage.name)) is not None
        and stage.name in ledgers
        and record["ledger"] != dict(ledgers[stage.name])
    ]


def ledger_differences(folder: RunFolder) -> list[Difference]:
    """Recorded accounts that the stage files themselves do not bear out, counted from their rows."""
    differences = []
    for stage in STAGES:
        record = _record(folder, stage.name)
        if record is None:
            continue
        ledger, file = record["ledger"], f"{stage.name}.parquet"
        parts = sum(ledger["outcomes"].values())
        if parts != ledger["entered"]:
            differences.append(
                Difference(
                    "ledger", file, f"{ledger['entered']} {ledger['unit']} entered, {parts} accounted for"
                )
            )
        source = folder.table(stage.counted) if stage.counted is not None else None
        if source is not None and source.num_rows != ledger["entered"]:
            differences.append(
                Difference(
                    "ledger",
                    file,
                    f"{ledger['entered']} {ledger['unit']} recorded as entered, {stage.counted} has {source.num_rows}",
                )
            )
        for what, recorded, counted in _counted(folder, stage.name, ledger["outcomes"]):
            if recorded != counted:
                differences.append(
                    Difference("ledger", file, f"{what}: {recorded} recorded, {counted} counted")
                )
    return differences


def _counted(folder: RunFolder, stage: str, outcomes: Mapping[str, int]) -> list[tuple[str, int, int]]:
    """Outcomes that can be counted from the stage's own rows: (what, recorded, counted)."""
    table = folder.table(stage)
    if table is None:
        return []
    if stage == "calibrate":
        return _counted_references(folder, outcomes)
    if stage == "screen":
        return [("used", outcomes.get("used", 0), int(flags(table, "use").sum()))]
    if stage == "pair":
        recorded = outcomes.get("in a phase mean", 0) + outcomes.get("in a phase mean as a limit", 0)
        return [("in phase means", recorded, int(numbers(table, "n_used").sum()))]
    if stage == "classify":
        classes = labels(table, "class").text().tolist()
        return [(name, count, classes.count(name)) for name, count in outcomes.items()]
    return []


def _counted_references(folder: RunFolder, outcomes: Mapping[str, int]) -> list[tuple[str, int, int]]:
    """Values of reference materials behind the calibration, and those ruled out where `screen` read the same rulings."""
    counted = []
    materials = folder.table("calibrate.materials")
    if materials is not None:
        words = ("reference values with an accepted value", "reference values without one")
        recorded = sum(outcomes.get(name, 0) for name in words)
        counted.append(("reference values", recorded, int(numbers(materials, "n_spots").sum())))
    path = None if folder.settings is None else folder.settings.screen.rulings
    digests = [
        None if record is None else record.get("inputs", {}).get(path)
        for record in (_record(folder, name) for name in ("calibrate", "screen"))
    ]
    if digests[0] == digests[1] and folder.table("screen.findings") is not None:
        what = "reference values ruled out"
        counted.append((what, outcomes.get(what, 0), len(values_ruled_out(folder))))
    return counted


def _record(folder: RunFolder, stage: str) -> dict[str, Any] | None:
    file = folder.files.get(stage)
    return None if file is None else file.record
