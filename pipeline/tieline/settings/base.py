"""What every settings model shares: frozen, and an unknown key is an error."""

from __future__ import annotations

from collections.abc import Callable, Collection
from typing import Annotated, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field

Action = Literal["drop", "mark"]


def as_element(text: str) -> str:
    """The text, which must be the symbol of an element. Raises ValueError."""
    from tieline.chemistry.oxides import parse_oxide

    element = parse_oxide(text).element
    if element != text:
        raise ValueError(f"elements go by their symbols here: {element} for {text}")
    return text


Element = Annotated[str, AfterValidator(as_element)]


class Settings(BaseModel):
    """A frozen section of the configuration; unknown keys are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False, protected_namespaces=())


def phases_into(
    field: str, data: object, known: Collection[str], is_entry: Callable[[object], bool]
) -> object:
    """Moves entries that stand directly in a section, phase = ..., into the mapping they belong to.

    `[screen.total] olivine = [98, 102]` is short for `[screen.total.limits] olivine = [98, 102]`. What does not
    look like an entry stays where it is, to be refused as an unknown key.
    """
    if not isinstance(data, dict):
        return data
    direct = {key: value for key, value in data.items() if key not in known and is_entry(value)}
    rest = {key: value for key, value in data.items() if key not in direct}
    entries = rest.get(field, {})
    if not isinstance(entries, dict):
        return data
    # Behind a validator arrays no longer pass for tuples by themselves.
    together = {
        key: tuple(value) if isinstance(value, list) else value
        for key, value in {**direct, **entries}.items()
    }
    return {**rest, field: together} if together else rest


class TestSettings(Settings):
    """What every screening test has: whether it runs and what a finding does."""

    __test__ = False  # not a pytest class

    enabled: bool = Field(True, description="run this test")
    action: Action = Field("mark", description="what a finding does: drop the value, or only mark it")
