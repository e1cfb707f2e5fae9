"""What is current, what is stale and because of what: judged from stage-file footers and input digests alone."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tieline.provenance import fingerprint
from tieline.settings import SessionSettings
from tieline.stages import Stage, producer
from tieline.storage import SCHEMA_VERSION, read_record


@dataclass(frozen=True)
class Verdict:
    """The state of one stage: `current`, `stale`, `missing`, or `waiting` for an earlier stage's result."""

    stage: str
    state: str
    reasons: tuple[str, ...] = ()


def table_path(run_folder: Path, table: str) -> Path:
    return run_folder / f"{table}.parquet"


def stage_fingerprint(stage: Stage, settings: SessionSettings, inputs: Mapping[str, str]) -> str:
    """Fingerprint of a stage with its inputs' content digests by table or file name."""
    return fingerprint(stage.name, stage.revision, stage.own_settings(settings), inputs)


def judge(
    stage: Stage,
    settings: SessionSettings,
    records: Mapping[str, dict[str, Any] | None],
    digests: Mapping[str, str],
) -> Verdict:
    """Compares what a stage's files say of themselves with what would be computed now.

    `records` holds the recorded origin of each output table, `digests` the content digest of every
    input that is already known; an input that is missing there has still to be recomputed.
    """
    missing = [f"{table}.parquet is missing" for table in stage.outputs if records.get(table) is None]
    if len(missing) == len(stage.outputs):
        return Verdict(stage.name, "missing")
    if missing:
        return Verdict(stage.name, "stale", tuple(missing))
    record = records[stage.outputs[0]] or {}
    names = (*stage.inputs, *stage.files(settings))
    reasons = _differences(
        stage, settings, record, {name: digests[name] for name in names if name in digests}
    )
    if reasons:
        return Verdict(stage.name, "stale", tuple(reasons))
    waiting = sorted({producer(name) for name in stage.inputs if name not in digests})
    if waiting:
        return Verdict(stage.name, "waiting", tuple(f"{name} is recomputed first" for name in waiting))
    expected = stage_fingerprint(stage, settings, {name: digests[name] for name in names})
    odd = [table for table in stage.outputs if (records[table] or {}).get("fingerprint") != expected]
    if odd:
        return Verdict(stage.name, "stale", tuple(f"{table}.parquet is of another run" for table in odd))
    return Verdict(stage.name, "current")


def read_records(run_folder: Path, stage: Stage) -> dict[str, dict[str, Any] | None]:
    """The recorded origins of a stage's files; None for a file that is missing or unreadable."""
    return {table: read_record(table_path(run_folder, table)) for table in stage.outputs}


def _differences(
    stage: Stage, settings: SessionSettings, record: Mapping[str, Any], digests: Mapping[str, str]
) -> list[str]:
    if record.get("schema") != SCHEMA_VERSION:
        return [f"written with stage-file version {record.get('schema')}, now {SCHEMA_VERSION}"]
    reasons = []
    if record.get("revision") != stage.revision:
        reasons.append(f"written by revision {record.get('revision')}, now {stage.revision}")
    reasons += settings_differences(record.get("settings", {}), stage.own_settings(settings))
    recorded = record.get("inputs", {})
    names = {*stage.inputs, *stage.files(settings)}
    reasons += [f"{name} is no longer an input" for name in sorted(set(recorded) - names)]
    for name, digest in digests.items():
        if name not in recorded:
            reasons.append(f"{name} is a new input")
        elif recorded[name] != digest:
            reasons.append(f"{name} changed" if name not in stage.inputs else f"{name} came out different")
    return reasons


def settings_differences(old: Any, new: Any, key: str = "") -> list[str]:
    """`total.olivine 98.5 -> 98.0` for every setting that differs between two nested values."""
    if isinstance(old, dict) and isinstance(new, dict):
        lines = []
        for name in sorted({*old, *new}):
            path = f"{key}.{name}" if key else name
            lines += settings_differences(old.get(name), new.get(name), path)
        return lines
    if isinstance(old, list) and isinstance(new, list) and len(old) == len(new):
        return [
            line
            for position, (before, after) in enumerate(zip(old, new, strict=True), start=1)
            for line in settings_differences(before, after, f"{key}[{position}]")
        ]
    return [] if old == new else [f"{key} {_short(old)} -> {_short(new)}"]


def _short(value: Any) -> str:
    text = "(none)" if value is None else str(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
