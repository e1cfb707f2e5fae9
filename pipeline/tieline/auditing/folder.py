"""What lies in a run folder, read without trusting it."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from tieline.columns import TABLES
from tieline.configuration import validate
from tieline.errors import DefectError, InputError
from tieline.manifest import EFFECTIVE, MANIFEST, manifest_digest, manifest_text
from tieline.provenance import bytes_digest, content_digest
from tieline.run_folders import run_folder_problem
from tieline.settings import SessionSettings
from tieline.stages import STAGES
from tieline.storage import METADATA_KEY
from tieline.tables import declared


@dataclass(frozen=True)
class Difference:
    """One thing that is not as recorded: what kind of difference, in which file, and in words.

    Kinds: missing, damaged, edited, swapped, rewritten, stale, ledger, recomputed, seal.
    """

    kind: str
    file: str
    detail: str


@dataclass
class StageFile:
    """One stage file as it lies there; `table` and `record` are None where it cannot be read."""

    name: str
    stage: str
    sha256: str
    record: dict[str, Any] | None = None
    table: pa.Table | None = None
    content: str | None = None
    unreadable: str = ""


@dataclass
class RunFolder:
    """A run folder's manifest, settings in effect and stage files, with what is wrong about the first two."""

    path: Path
    manifest: dict[str, Any] = field(default_factory=dict)
    trusted: bool = False
    settings: SessionSettings | None = None
    files: dict[str, StageFile] = field(default_factory=dict)
    differences: list[Difference] = field(default_factory=list)

    def entry(self, name: str) -> Mapping[str, Any] | None:
        """What a trusted manifest records of a stage file."""
        if not self.trusted:
            return None
        stage = self.manifest["stages"].get(name.partition(".")[0], {})
        entry = stage.get("files", {}).get(f"{name}.parquet")
        return None if entry is None else {**entry, "fingerprint": stage["fingerprint"]}

    def recorded_files(self) -> Iterator[tuple[str, Mapping[str, Any]]]:
        """Every stage file that the manifest records, by table name."""
        for stage in STAGES:
            for name in stage.outputs:
                entry = self.entry(name)
                if entry is not None:
                    yield name, entry

    def configuration(self) -> Path | None:
        """Where the configuration stood, from which the inputs' paths are counted; only the manifest tells."""
        place = self.manifest.get("configuration")
        return None if place is None else self.path / str(place)

    def table(self, name: str) -> pa.Table | None:
        """A stage table with the declared columns; None where it is missing, damaged or of another kind."""
        file = self.files.get(name)
        if file is None or file.table is None:
            return None
        try:
            return declared(file.table.replace_schema_metadata(None), TABLES[name])
        except DefectError:
            return None


def read_run_folder(path: Path) -> RunFolder:
    """Reads everything there is. Raises InputError where the folder is no run folder."""
    problem = run_folder_problem(path)
    if problem is not None:
        raise InputError(problem)
    folder = RunFolder(path)
    for stage in STAGES:
        for name in stage.outputs:
            file = path / f"{name}.parquet"
            if file.exists():
                folder.files[name] = read_stage_file(file, name, stage.name)
    _read_manifest(folder)
    _read_settings(folder)
    return folder


def read_stage_file(path: Path, name: str, stage: str) -> StageFile:
    """Bytes, record and table of one stage file, as far as they can be read."""
    data = path.read_bytes()
    file = StageFile(name, stage, bytes_digest(data))
    try:
        table = pq.read_table(pa.BufferReader(data), page_checksum_verification=True)
        file.content = content_digest(table)
        file.table = table
    # A damaged file can fail in any way the reader knows.
    except Exception as error:
        file.unreadable = (str(error).strip() or type(error).__name__).splitlines()[0]
        return file
    try:
        record = json.loads((table.schema.metadata or {})[METADATA_KEY])
        file.record = record if isinstance(record, dict) else None
    except (KeyError, ValueError):
        file.record = None
    return file


def _read_manifest(folder: RunFolder) -> None:
    def wrong(kind: str, detail: str) -> None:
        folder.differences.append(Difference(kind, MANIFEST, detail))

    path = folder.path / MANIFEST
    if not path.exists():
        return wrong("missing", "the manifest is missing: files are held against their own records only")
    try:
        text = path.read_bytes().decode()
        manifest = json.loads(text)
        folder.manifest = dict(manifest)
    except (ValueError, TypeError):
        return wrong("damaged", "the manifest cannot be read: a damaged copy, or edited")
    if manifest_digest(manifest) != manifest.get("digest"):
        return wrong("edited", "the manifest was edited: its contents do not fit its own digest")
    if manifest_text(manifest) != text:
        return wrong("rewritten", "the manifest was rewritten: the same contents in other bytes")
    folder.trusted = True
    return None


def _read_settings(folder: RunFolder) -> None:
    def wrong(kind: str, detail: str) -> None:
        folder.differences.append(Difference(kind, EFFECTIVE, detail))

    path = folder.path / EFFECTIVE
    if not path.exists():
        return wrong("missing", "the settings in effect are missing")
    data = path.read_bytes()
    try:
        folder.settings = validate(tomllib.loads(data.decode()), EFFECTIVE)[0]
    except (ValueError, InputError):
        return wrong("damaged", "the settings in effect cannot be read: a damaged copy, or edited")
    if folder.trusted and bytes_digest(data) != folder.manifest["effective"].get(EFFECTIVE):
        return wrong("edited", f"the settings in effect were edited{_which_settings(folder)}")
    return None


def _which_settings(folder: RunFolder) -> str:
    """The settings that are not those the stage files were made with."""
    lines = settings_against_records(folder)
    return f": {'; '.join(lines)}" if lines else ", in comments or layout only"


def settings_against_records(folder: RunFolder) -> list[str]:
    """`screen.total.sigmas 2.0 → 3.0` for what stage files record and `effective.toml` says differently."""
    from tieline.plan import settings_differences

    if folder.settings is None:
        return []
    lines = []
    for stage in STAGES:
        file = folder.files.get(stage.outputs[0])
        if file is not None and file.record is not None:
            recorded = file.record.get("settings", {})
            lines += settings_differences(recorded, stage.own_settings(folder.settings), stage.name)
    return lines
