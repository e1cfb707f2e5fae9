"""Holds every file of a run folder against what is recorded of it, and names each difference for what it is."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from tieline.auditing.folder import Difference, RunFolder, StageFile, settings_against_records
from tieline.columns import TABLES
from tieline.plan import table_path
from tieline.provenance import bytes_digest, fingerprint
from tieline.stages import STAGES, Stage
from tieline.storage import SCHEMA_VERSION


def file_differences(folder: RunFolder) -> list[Difference]:
    """Stage files, inputs, and whether the stages belong together."""
    differences = [
        Difference("missing", f"{name}.parquet", "the manifest records it, but it is not there")
        for name, _ in folder.recorded_files()
        if name not in folder.files
    ]
    wrong = [found for file in folder.files.values() if (found := _stage_file(folder, file)) is not None]
    sound = not wrong and not differences
    differences += [*wrong, *input_differences(folder)]
    # Files that are not their own selves cannot be held against each other.
    return [*differences, *_stale(folder)] if sound else differences


def _stage_file(folder: RunFolder, file: StageFile) -> Difference | None:
    entry = folder.entry(file.name)
    if folder.trusted and entry is None:
        return _difference("edited", file, "is not recorded in the manifest: added after the run")
    if entry is not None and file.sha256 == entry["sha256"]:
        return None
    if entry is not None:
        other = _file_with(folder, "sha256", file.sha256)
        if other is not None:
            return _difference("swapped", file, f"is a copy of {other}.parquet")
    if file.table is None:
        return _difference(
            "damaged", file, f"cannot be read, as after a flipped bit or a broken copy: {file.unreadable}"
        )
    return _readable(folder, file, entry)


def _readable(folder: RunFolder, file: StageFile, entry: Mapping[str, Any] | None) -> Difference | None:
    record = file.record
    if record is None:
        return _difference("swapped", file, "carries no record of its origin: no stage file of this program")
    shape = _shape(file)
    if shape is not None:
        return _difference("swapped", file, shape)
    own = record.get("content")
    if entry is None:
        return (
            None
            if file.content == own
            else _difference("edited", file, "its values are not those it records of itself")
        )
    if file.content == entry["content"]:
        return _difference(
            "rewritten", file, "the values are those recorded, but its bytes or its record of origin changed"
        )
    if record.get("fingerprint") != entry["fingerprint"]:
        return _difference("swapped", file, "is of another run: made with other settings or inputs")
    return _difference("edited", file, "its values are not those that were written")


def _shape(file: StageFile) -> str | None:
    """Words for a file whose columns are those of another stage file, or of none."""
    assert file.table is not None
    names = tuple(file.table.column_names)
    if file.record is not None and file.record.get("schema") != SCHEMA_VERSION:
        return None  # of another version of the program, whose columns are not known here
    if names == TABLES[file.name].names():
        return None
    other = next((spec.name for spec in TABLES.values() if spec.names() == names), None)
    return f"has the columns of {other}.parquet" if other else "its columns are not those of this stage file"


def _file_with(folder: RunFolder, key: str, digest: str) -> str | None:
    return next((name for name, entry in folder.recorded_files() if entry[key] == digest), None)


def input_differences(folder: RunFolder) -> list[Difference]:
    """Input files that are missing or not those the run read."""
    differences: list[Difference] = []
    configuration = folder.configuration()
    if configuration is None:
        return differences
    for path, digest in recorded_inputs(folder).items():
        found = digest_of(configuration.parent / path)
        if found is None:
            detail = f"the input file is not where the run read it, beside {configuration}"
            differences.append(Difference("missing", path, detail))
        elif found != digest:
            differences.append(Difference("edited", path, "the input file changed since the run"))
    return differences


def digest_of(path: Path) -> str | None:
    """SHA-256 of a file; None where it cannot be read."""
    try:
        return bytes_digest(path.read_bytes())
    except OSError:
        return None


def recorded_inputs(folder: RunFolder) -> dict[str, str]:
    """Digest of every input file: from the manifest, or from the stage files where it is not to be trusted."""
    if folder.trusted:
        return dict(folder.manifest["inputs"])
    digests: dict[str, str] = {}
    if folder.settings is None:
        return digests
    for stage in STAGES:
        file = folder.files.get(stage.outputs[0])
        recorded = (file.record or {}).get("inputs", {}) if file is not None else {}
        digests |= {path: recorded[path] for path in stage.files(folder.settings) if path in recorded}
    return digests


def _stale(folder: RunFolder) -> list[Difference]:
    """Stage files made from other settings or other tables than those beside them."""
    differences = []
    if folder.trusted and (lines := settings_against_records(folder)) and not _told(folder):
        differences.append(
            Difference(
                "stale", "effective.toml", f"stage files were made with other settings: {'; '.join(lines)}"
            )
        )
    for stage in STAGES:
        record = _record(folder, stage)
        if record is None:
            continue
        made = fingerprint(stage.name, record["revision"], record["settings"], record["inputs"])
        if made != record["fingerprint"]:
            differences.append(
                _of_stage("edited", stage, "its fingerprint does not fit its record of origin")
            )
        for name, digest in record["inputs"].items():
            source = folder.files.get(name)
            if name in stage.inputs and source is not None and source.content != digest:
                differences.append(
                    _of_stage("stale", stage, f"was made from another {name}.parquet than the one here")
                )
            known = recorded_inputs(folder).get(name, digest)
            if name not in stage.inputs and known != digest:
                differences.append(
                    _of_stage("stale", stage, f"was made from another {name} than the run records")
                )
    return differences


def _told(folder: RunFolder) -> bool:
    return any(difference.file == "effective.toml" for difference in folder.differences)


def _record(folder: RunFolder, stage: Stage) -> dict[str, Any] | None:
    file = folder.files.get(stage.outputs[0])
    return None if file is None else file.record


def _of_stage(kind: str, stage: Stage, detail: str) -> Difference:
    return Difference(kind, table_path(Path(), stage.outputs[0]).name, detail)


def _difference(kind: str, file: StageFile, detail: str) -> Difference:
    return Difference(kind, f"{file.name}.parquet", detail)
