"""The settings of a session: one frozen model per stage, every default in one place."""

from __future__ import annotations

from pydantic import Field, field_validator

from tieline.settings.about import AboutSettings
from tieline.settings.assess import AssessSettings
from tieline.settings.base import Settings
from tieline.settings.chemistry import CalibrateSettings, ConvertSettings
from tieline.settings.ingest import IngestSettings
from tieline.settings.results import (
    ClassifySettings,
    PairSettings,
    PartitionSettings,
    ReportSettings,
)
from tieline.settings.screen import ScreenSettings

__all__ = ["SessionSettings"]


RESERVED_ON_WINDOWS = {
    "CON",
    "PRN",
    "AUX",
    "NUL",
    *(f"{port}{n}" for port in ("COM", "LPT") for n in range(1, 10)),
}


class SessionSettings(Settings):
    """A whole configuration file."""

    session: str = Field(
        pattern=r"^[A-Za-z0-9][A-Za-z0-9 ._-]{0,79}$", description="names the run folder: <out>/<session>"
    )

    @field_validator("session")
    @classmethod
    def _a_folder_name_everywhere(cls, name: str) -> str:
        if name.split(".")[0].upper() in RESERVED_ON_WINDOWS or name.endswith((".", " ")):
            raise ValueError("must be a name that every file system takes for a folder")
        return name

    out: str = Field(".", description="folder of run folders, relative to the configuration")
    ingest: IngestSettings
    convert: ConvertSettings = ConvertSettings()
    calibrate: CalibrateSettings = CalibrateSettings()
    screen: ScreenSettings = ScreenSettings()
    pair: PairSettings = PairSettings()
    partition: PartitionSettings = PartitionSettings()
    classify: ClassifySettings = ClassifySettings()
    assess: AssessSettings = AssessSettings()
    report: ReportSettings = ReportSettings()
    about: AboutSettings = AboutSettings()
