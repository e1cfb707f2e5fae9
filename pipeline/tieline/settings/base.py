"""What every settings model shares: frozen, and an unknown key is an error."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field

Action = Literal["drop", "mark"]


class Settings(BaseModel):
    """A frozen section of the configuration; unknown keys are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


class TestSettings(Settings):
    """What every screening test has: whether it runs and what a finding does."""

    __test__ = False  # not a pytest class

    enabled: bool = Field(True, description="run this test")
    action: Action = Field("mark", description="what a finding does: drop the value, or only mark it")
