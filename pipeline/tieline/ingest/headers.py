"""Which header of a spot table is meant: exact first, then without regard to case, blanks and unit."""

from __future__ import annotations

import re
from collections.abc import Sequence

from tieline.reading.cell_text import fold, unit_of

_BRACKETED = re.compile(r"[(\[{]([^)\]}]*)[)\]}]")
_JOINTS = re.compile(r"[\s_,;:]+")


def without_unit(header: str) -> str:
    """The folded header without a unit in brackets, or as a separate word at either end."""
    text = fold(_BRACKETED.sub(lambda match: " " if unit_of(match.group(1)) else match.group(), header))
    words = [word for word in _JOINTS.split(text) if word]
    for size in (1, 2):
        if len(words) > size and unit_of(" ".join(words[-size:])):
            return " ".join(words[:-size])
        if len(words) > size and unit_of(" ".join(words[:size])):
            return " ".join(words[size:])
    return " ".join(words)


def find_header(wanted: str, headers: Sequence[str]) -> list[int]:
    """Indices of the columns with this header; those that match exactly go before those that match loosely."""
    exact = [index for index, header in enumerate(headers) if header == wanted]
    if exact:
        return exact
    folded = fold(wanted)
    return [index for index, header in enumerate(headers) if fold(header) == folded]


def column_letter(index: int) -> str:
    """The letter a spreadsheet shows above a column; index 0 is A."""
    letters = ""
    index += 1
    while index:
        index, rest = divmod(index - 1, 26)
        letters = chr(ord("A") + rest) + letters
    return letters
