"""What a run folder still lacks before it may be sealed, and whether its configuration says what was run."""

from __future__ import annotations

import os

from tieline.auditing.folder import RunFolder
from tieline.configuration import load
from tieline.errors import InputError
from tieline.plan import settings_differences
from tieline.report.currency import FILES
from tieline.stages import STAGES


def obstacles(folder: RunFolder) -> list[str]:
    """Why a folder without differences is not sealed yet, each with the next thing to do; empty where it may be.

    A seal closes a whole reduction: all stages, the report of them, and nothing decided since, such as a ruling
    or a threshold, that stands in the configuration and not in the results.
    """
    configuration = folder.configuration()
    name = "CONFIG" if configuration is None else os.path.normpath(configuration)
    now = [
        f"{text}; undo that, or run `tieline run {name} --report`"
        for text in configuration_now(folder)
        if configuration is not None and configuration.is_file()
    ]
    missing = missing_stages(folder)
    if missing:
        return [f"not run: {', '.join(missing)}; run `tieline run {name} --report`", *now]
    report = _report(folder)
    return [*now, f"{report}; run `tieline report {name}`"] if report else now


def missing_stages(folder: RunFolder) -> list[str]:
    """Stages of which no main file is there."""
    return [stage.name for stage in STAGES if stage.outputs[0] not in folder.files]


def _report(folder: RunFolder) -> str:
    """What the folder lacks of its report; one of other results is a difference, and told as such."""
    missing = [name for name in FILES if not (folder.path / name).exists()]
    if len(missing) == len(FILES):
        return "the report is missing"
    return f"the report lacks {', '.join(missing)}" if missing else ""


def configuration_now(folder: RunFolder) -> list[str]:
    """Whether the configuration still says what was run; a later edit does not make the run wrong."""
    path = folder.configuration()
    if folder.settings is None or path is None:
        return []
    if not path.is_file():
        return [f"the configuration is no longer at {path}"]
    try:
        now = load(path, overrides=[str(text) for text in folder.manifest.get("overrides", [])]).settings
    except InputError:
        return [
            f"the configuration {path} can no longer be read; the settings in effect are in effective.toml"
        ]
    before, after = (settings.model_dump(mode="json") for settings in (folder.settings, now))
    for dump in (before, after):
        dump["ingest"]["reference_materials"]["names"] = None  # filled in from the accepted values by a run
    lines = settings_differences(before, after)
    return [f"the configuration was changed after the run: {'; '.join(lines)}"] if lines else []
