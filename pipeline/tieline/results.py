"""What a stage hands back: its tables, an account of every value, and remarks for a person to read."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import pyarrow as pa

from tieline.errors import DefectError


@dataclass(frozen=True)
class Ledger:
    """How many things entered a stage and what became of each; the parts must add up to the whole."""

    unit: str
    entered: int
    outcomes: Mapping[str, int]

    def check(self, stage: str) -> None:
        """Raises DefectError when anything was lost or counted twice."""
        total = sum(self.outcomes.values())
        if total != self.entered or min(self.outcomes.values(), default=0) < 0:
            raise DefectError(
                f"{stage}: {self.entered} {self.unit} entered but {total} are accounted for: {dict(self.outcomes)}"
            )


@dataclass(frozen=True)
class Remark:
    """Something a person should know that does not stop the run."""

    message: str
    place: str = ""

    def __str__(self) -> str:
        return f"{self.place}: {self.message}" if self.place else self.message


@dataclass(frozen=True)
class StageResult:
    """The tables of one stage, main table first, with the ledger and the remarks."""

    tables: Mapping[str, pa.Table]
    ledger: Ledger
    remarks: tuple[Remark, ...] = field(default=())
