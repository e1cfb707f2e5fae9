"""What is current, what is stale and because of what: judged from stage-file footers and input digests alone."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import zip_longest
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

    def in_words(self) -> str:
        """`screen is stale (rulings.csv changed)`."""
        reasons = f" ({'; '.join(self.reasons)})" if self.reasons else ""
        return f"{self.stage} is {self.state}{reasons}"


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
    missing = [
        f"{table}.parquet is missing or unreadable" for table in stage.outputs if records.get(table) is None
    ]
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
    waiting = dict.fromkeys(producer(name) for name in stage.inputs if name not in digests)
    if waiting:
        reason = f"recomputed only if {' or '.join(waiting)} comes out different"
        return Verdict(stage.name, "waiting", (reason,))
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


class _NotSet:
    """Stands for a key that one of two settings does not have."""


NOT_SET = _NotSet()


def settings_differences(old: Any, new: Any, key: str = "", *, longest: int | None = 60) -> list[str]:
    """`total.limits.olivine[1] 98.5 → 98.0` for every setting that differs between two nested values.

    A value longer than `longest` characters is cut; None shows all of it.
    """
    if isinstance(old, dict) and isinstance(new, dict):
        return [
            line
            for name in sorted({*old, *new})
            for line in settings_differences(
                old.get(name, NOT_SET),
                new.get(name, NOT_SET),
                f"{key}.{name}" if key else name,
                longest=longest,
            )
        ]
    if isinstance(old, list) and isinstance(new, list) and _item_by_item(old, new):
        return [
            line
            for position, (before, after) in enumerate(zip_longest(old, new, fillvalue=NOT_SET), start=1)
            for line in settings_differences(before, after, f"{key}[{position}]", longest=longest)
        ]
    if old == new:
        return []
    return [f"{key} {_short(old, longest)} \N{RIGHTWARDS ARROW} {_short(new, longest)}"]


def _item_by_item(old: list[Any], new: list[Any]) -> bool:
    """Lists of one length, and lists of sections, are compared item by item; others as a whole."""
    return len(old) == len(new) or any(isinstance(item, dict) for item in (*old, *new))


def _short(value: Any, longest: int | None) -> str:
    if isinstance(value, _NotSet):
        return "not set"
    text = "none" if value is None else str(value)
    return text if longest is None or len(text) <= longest else f"{text[: longest - 3]}..."
