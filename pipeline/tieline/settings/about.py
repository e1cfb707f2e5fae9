"""Settings that only describe a session to others: who made it and under which terms. No result depends on them."""

from __future__ import annotations

import datetime

from pydantic import Field, field_validator

from tieline.settings.base import Settings


class Person(Settings):
    """Somebody who made the reduction or the measurements."""

    name: str = Field(min_length=1, description="name as it is to be cited")
    orcid: str | None = Field(
        None, pattern=r"^\d{4}-\d{4}-\d{4}-\d{3}[\dX]$", description="ORCID, such as 0000-0000-0000-0000"
    )
    affiliation: str | None = Field(None, min_length=1, description="institution")


class AboutSettings(Settings):
    """Section [about]: what a repository asks of a folder that is handed to it."""

    description: str | None = Field(
        None, min_length=1, description="what the session is, in one or two sentences"
    )
    people: tuple[Person, ...] = Field(
        (), description="who made it: [[about.people]] with name, orcid, affiliation"
    )
    licence: str | None = Field(
        None,
        pattern=r"^(https?://\S+|[A-Za-z0-9.+-]+)$",
        description="terms of use: an SPDX identifier such as CC-BY-4.0, or an address",
    )
    laboratory: str | None = Field(
        None,
        pattern=r"^[A-Za-z0-9][A-Za-z0-9 ._-]{0,79}$",
        description="whose measurements: `lab` in an archive; the first folder below its root where not given",
    )
    publisher: str | None = Field(None, min_length=1, description="institution that publishes the folder")
    date: str | None = Field(None, description="date of publication, YYYY-MM-DD")

    @field_validator("date")
    @classmethod
    def _is_a_date(cls, date: str | None) -> str | None:
        if date is not None:
            datetime.date.fromisoformat(date)
        return date
