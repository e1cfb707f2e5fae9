"""The run folder's own account: `run.json` with every digest, and the settings in effect as TOML.

The manifest ends with the digest of its own content, and has one spelling only: a byte changed by hand or by
a failing disk shows.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from tieline import __version__
from tieline.configuration import Session
from tieline.plan import read_records, table_path
from tieline.provenance import bytes_digest, json_text
from tieline.stages import STAGES
from tieline.storage import write_text

MANIFEST = "run.json"
EFFECTIVE = "effective.toml"


def write_manifest(session: Session, inputs: Mapping[str, str]) -> None:
    """Records what lies in the run folder. No time and no absolute path: same results, same bytes.

    inputs: the digest of every input file by its path in the configuration.
    """
    import os

    settings = effective_toml(session)
    write_text(session.run_folder / EFFECTIVE, settings)
    known = read_manifest(session.run_folder).get("inputs", {})
    try:
        configuration = Path(os.path.relpath(session.path, session.run_folder)).as_posix()
    except ValueError:  # another drive on Windows: there is no relative way there
        configuration = session.path.as_posix()
    manifest = {
        "format": 1,
        "tieline": __version__,
        "session": session.settings.session,
        "configuration": configuration,
        "overrides": list(session.overrides),
        "effective": {EFFECTIVE: bytes_digest(settings.encode())},
        "inputs": {
            path: inputs.get(path) or known[path]
            for path in _input_paths(session)
            if path in inputs or path in known
        },
        "stages": {
            stage.name: entry for stage in STAGES if (entry := _stage_entry(session.run_folder, stage))
        },
    }
    write_text(session.run_folder / MANIFEST, manifest_text(manifest))


def manifest_text(manifest: Mapping[str, Any]) -> str:
    """The one text of a manifest; its `digest` is put in anew."""
    digest = manifest_digest(manifest)
    return json.dumps({**manifest, "digest": digest}, indent=1, sort_keys=True, ensure_ascii=False) + "\n"


def manifest_digest(manifest: Mapping[str, Any]) -> str:
    """SHA-256 of everything in a manifest but its own digest."""
    content = {key: value for key, value in manifest.items() if key != "digest"}
    return bytes_digest(json_text(content).encode())


def read_manifest(run_folder: Path) -> dict[str, Any]:
    """The manifest, or an empty one where there is none that can be read."""
    try:
        manifest = json.loads((run_folder / MANIFEST).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return manifest if isinstance(manifest, dict) else {}


def effective_toml(session: Session) -> str:
    """The complete settings in effect, defaults included, as a configuration that can be run again."""
    import tomli_w

    return tomli_w.dumps(_without_none(session.settings.model_dump(mode="json")))


def _without_none(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _without_none(item) for key, item in value.items() if item is not None}
    return [_without_none(item) for item in value] if isinstance(value, list) else value


def _input_paths(session: Session) -> list[str]:
    return sorted({path for stage in STAGES for path in stage.files(session.settings)})


def _stage_entry(run_folder: Path, stage: Any) -> dict[str, Any] | None:
    records = read_records(run_folder, stage)
    if any(record is None for record in records.values()):
        return None
    main = records[stage.outputs[0]] or {}
    files = {
        f"{table}.parquet": {
            "sha256": bytes_digest(table_path(run_folder, table).read_bytes()),
            "content": (record or {})["content"],
        }
        for table, record in records.items()
    }
    return {
        "fingerprint": main["fingerprint"],
        "revision": main["revision"],
        "files": files,
        "ledger": main["ledger"],
    }
