"""What is known of a spot table while its columns are being given their roles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from tieline.chemistry.header_words import normalise_header, read_words
from tieline.chemistry.names import Analyte, nearest_names
from tieline.errors import Problem
from tieline.ingest.asides import shown
from tieline.results import Remark
from tieline.settings.ingest import Table


@dataclass
class Assigning:
    """What is known while the columns of one table are being assigned."""

    path: str
    table: Table
    headers: Sequence[str]
    full: Sequence[str]  # header with the text of the units row
    header_row: int
    problems: list[Problem] = field(default_factory=list)
    remarks: list[Remark] = field(default_factory=list)

    def problem(self, message: str, column: str | None = None, remedy: str = "") -> None:
        self.problems.append(Problem(message, self.path, self.header_row, column, remedy))

    def remark(self, message: str) -> None:
        self.remarks.append(Remark(message, self.path))


def did_you_mean(text: str) -> str:
    """The nearest names of analytes, as a question."""
    names = nearest_names(text)
    return f"Did you mean {' or '.join(names)}?" if names else ""


def role_words(header: str, analyte: Analyte | None) -> str:
    """The role a header's words tell, even where no analyte stands beside them (`1s`, `2SE`)."""
    if analyte is not None:
        return analyte.role
    words = read_words(normalise_header(header))
    return words.role if not words.rest.strip(" ()[]") else ""


def listed(texts: Sequence[str], most: int = 8) -> str:
    """Texts in quotation marks, the first ones and a count."""
    first = ", ".join(f'"{shown(text)}"' for text in texts[:most])
    return first if len(texts) <= most else f"{first} and {len(texts) - most} more"
