"""Whether a path given as a run folder is one, and which one was meant."""

from __future__ import annotations

from pathlib import Path

from tieline.errors import Problem
from tieline.manifest import MANIFEST
from tieline.plan import table_path
from tieline.stages import STAGES

MOST_NAMED = 5


def run_folder_problem(path: Path) -> Problem | None:
    """Why the path is no run folder, with the next thing to do; None where it holds anything that a run wrote."""
    if path.is_dir():
        if _is_run_folder(path):
            return None
        message = f"is no run folder: it holds neither {MANIFEST} nor a stage file."
    else:
        message = "is a file, not a run folder." if path.exists() else "no such run folder."
    return Problem(message, str(path), remedy=_remedy(path))


def _is_run_folder(path: Path) -> bool:
    names = (name for stage in STAGES for name in stage.outputs)
    return (path / MANIFEST).exists() or any(table_path(path, name).exists() for name in names)


def _remedy(path: Path) -> str:
    below = sorted(str(one.parent) for one in path.glob(f"*/{MANIFEST}")) if path.is_dir() else []
    if below:
        return (
            f"Run folders in it: {', '.join(below[:MOST_NAMED])}{', ...' if len(below) > MOST_NAMED else ''}."
        )
    return "Name a folder that a run wrote, such as <out>/<session>."
