"""The demo session: where its files are, in an installed package and in the source tree."""

from __future__ import annotations

import shutil
from pathlib import Path

from tieline.errors import InputError, Problem

CONFIGURATION = "ember.toml"


def demo_folder() -> Path:
    """The folder with the demo's configuration: packed beside this module, or `configs/` of the source tree."""
    packed = Path(__file__).parent / "files"
    return packed if (packed / CONFIGURATION).exists() else Path(__file__).parents[3] / "configs"


def copy_demo(folder: Path) -> Path:
    """Copies the demo's configuration and tables and returns the configuration's new path.

    Raises InputError where the folder holds files that are not the demo's own.
    """
    source, target = demo_folder(), folder / "configs"
    if target.exists() and not (target / CONFIGURATION).exists():
        raise InputError(
            Problem("exists and holds something else.", str(target), remedy="Name another folder.")
        )
    target.mkdir(parents=True, exist_ok=True)
    shutil.copyfile(source / CONFIGURATION, target / CONFIGURATION)
    shutil.copytree(source / "ember", target / "ember", dirs_exist_ok=True)
    return target / CONFIGURATION
