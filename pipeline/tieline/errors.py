"""What a user can get wrong, and how it is said: place, expected, found, remedy."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing wrong with an input, with its place as a spreadsheet would show it.

    `row` counts lines from 1 with the header included; `column` is the header text or a key path.
    """

    message: str
    file: str | None = None
    row: int | None = None
    column: str | None = None
    remedy: str = ""

    def place(self) -> str:
        """`file, row 12, column "MgO"`, or as much of it as is known."""
        parts = [self.file] if self.file else []
        if self.row is not None:
            parts.append(f"row {self.row}")
        if self.column is not None:
            parts.append(f'column "{self.column}"')
        return ", ".join(parts)

    def __str__(self) -> str:
        place = self.place()
        text = f"{place}: {self.message}" if place else self.message
        return f"{text} {self.remedy}" if self.remedy else text


class InputError(Exception):
    """The command line, the configuration or an input is wrong; carries every problem found."""

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class DefectError(Exception):
    """The program contradicts itself: a ledger that does not add up, a column that breaks its declaration."""


def nearest(word: str, known: Iterable[str]) -> str:
    """` Did you mean "..."?` for a word close to a known one, else an empty text."""
    from difflib import get_close_matches

    candidates = sorted(set(known))
    folded = {candidate.casefold(): candidate for candidate in candidates}
    match = get_close_matches(word.casefold(), folded, n=1, cutoff=0.6)
    return f'Did you mean "{folded[match[0]]}"?' if match else ""
