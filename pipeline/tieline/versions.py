"""The versions that a result depends on, without importing what they are versions of."""

from __future__ import annotations

import platform
from importlib.metadata import version

from tieline import __version__

LIBRARIES = ("numpy", "scipy", "pyarrow", "pandas", "uncertainties", "pydantic")


def versions() -> str:
    """Program, stage files and stages, Python and machine, and the libraries that numbers pass through."""
    from tieline.stages import STAGES
    from tieline.storage import SCHEMA_VERSION

    revisions = ", ".join(f"{stage.name} {stage.revision}" for stage in STAGES)
    libraries = ", ".join(f"{name} {version(name)}" for name in LIBRARIES)
    return (
        f"tieline {__version__}\n"
        f"stage files version {SCHEMA_VERSION}; revisions: {revisions}\n"
        f"Python {platform.python_version()}, {platform.system()} {platform.machine()}\n"
        f"{libraries}"
    )
