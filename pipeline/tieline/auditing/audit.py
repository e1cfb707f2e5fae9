"""The whole audit of a run folder as plain data."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from tieline import __version__
from tieline.auditing import summary
from tieline.auditing.deviations import deviations
from tieline.auditing.files import file_differences, recorded_inputs
from tieline.auditing.folder import Difference, RunFolder, read_run_folder
from tieline.auditing.recompute import Recomputation, ledger_differences, recompute
from tieline.auditing.seal import is_sealed, seal, seal_differences
from tieline.auditing.sealable import configuration_now, missing_stages, obstacles
from tieline.stages import STAGES


@dataclass
class Audit:
    """What the audit of one run folder found; `differences` empty means that everything is as recorded."""

    run_folder: str
    session: str
    differences: list[Difference]
    notes: list[str]
    checked: dict[str, int]
    account: list[dict[str, Any]]
    used_values: dict[str, int] | None
    left_out: dict[str, Any]
    leaning: list[str]
    deviations_from: str
    deviations: list[str]
    overrides: list[str]
    reference_materials: list[dict[str, Any]]
    unmatched_labels: list[str]
    remarks: list[str]
    inputs: dict[str, str] = field(default_factory=dict)
    sealed: bool = False

    def as_json(self) -> dict[str, Any]:
        return asdict(self)


def audit(run_folder: Path, *, against: Path | None = None, with_seal: bool = False) -> Audit:
    """Verifies a run folder and says what a person should know of it.

    Files against recorded digests, the accounts against the files, and everything against the chain run
    again. With `with_seal` a folder without differences that lacks nothing (see `sealable`) is sealed; where it
    is not, the notes say why. Raises InputError where there is no run folder, or the file given as `against`
    cannot be read.
    """
    folder = read_run_folder(run_folder)
    differs = deviations(folder.settings, against) if folder.settings is not None else []
    differences = verify(folder)
    again = recompute(folder)
    differences += again.differences
    notes = _notes(folder, again)
    if not again.done:
        differences += _not_recomputed(differences, again)
    result = Audit(
        run_folder=str(run_folder),
        session=folder.settings.session if folder.settings is not None else "",
        differences=_unique(differences),
        notes=notes,
        checked=_checked(folder, again),
        account=summary.account(folder),
        used_values=summary.used_values(folder),
        left_out=summary.left_out(folder),
        leaning=summary.leaning(folder),
        deviations_from=str(against) if against is not None else "the defaults",
        deviations=differs,
        overrides=[str(text) for text in folder.manifest.get("overrides", [])],
        reference_materials=summary.reference_materials(folder),
        unmatched_labels=summary.unmatched_labels(folder),
        remarks=summary.remarks(folder),
        inputs=recorded_inputs(folder),
        sealed=is_sealed(run_folder),
    )
    if with_seal:
        _seal(result, folder)
    return result


def _seal(result: Audit, folder: RunFolder) -> None:
    if result.differences:
        result.notes.append("not sealed: only a folder without differences is; mend or rerun it first")
    elif not result.sealed:
        lacking = obstacles(folder)
        result.notes += [f"not sealed: {text}" for text in lacking]
        if not lacking:
            result.notes.append(f"sealed: {seal(folder.path)} files")
            result.sealed = True


def verify(folder: RunFolder) -> list[Difference]:
    """Every difference that shows without running the chain again."""
    return [
        *folder.differences,
        *file_differences(folder),
        *ledger_differences(folder),
        *seal_differences(folder.path),
    ]


def _unique(differences: list[Difference]) -> list[Difference]:
    return list(dict.fromkeys(differences))


def _not_recomputed(known: list[Difference], again: Recomputation) -> list[Difference]:
    """A chain that cannot be run again is a difference of its own, unless another one explains it."""
    return (
        []
        if known
        else [Difference("recomputed", "run.json", f"the chain cannot be run again: {again.why_not}")]
    )


def _checked(folder: RunFolder, again: Recomputation) -> dict[str, int]:
    return {
        "stage_files": len(folder.files),
        "inputs": len(recorded_inputs(folder)),
        "recomputed_alike": again.same + len(again.last_digits),
        "report_files": again.report,
    }


def _notes(folder: RunFolder, again: Recomputation) -> list[str]:
    notes = []
    version = folder.manifest.get("tieline")
    if version is not None and version != __version__:
        notes.append(f"the run was made by version {version}, this is {__version__}")
    missing = missing_stages(folder)
    if missing:
        notes.append(f"stages that were not run: {', '.join(missing)}")
    if again.why_not:
        notes.append(f"the chain was not run again: {again.why_not}")
    if again.last_digits:
        notes.append(f"equal but for the last digits when recomputed: {', '.join(again.last_digits)}")
    revised = [
        f"{stage.name} {record['revision']} → {stage.revision}"
        for stage in STAGES
        if (file := folder.files.get(stage.name)) is not None
        and (record := file.record) is not None
        and record.get("revision") != stage.revision
    ]
    if revised:
        notes.append(f"stages revised since the run: {', '.join(revised)}")
    notes += configuration_now(folder)
    return notes
