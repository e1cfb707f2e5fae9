"""The one way to a terminal: nothing that a table or a file name says can drive it.

Control characters of any kind (escape sequences, bidirectional overrides, line separators) are shown as a
replacement mark, square brackets are no markup, and what the output's encoding lacks is replaced.
"""

from __future__ import annotations

import json
import re
import sys
from collections.abc import Iterable
from typing import Any

from rich.console import Console, ConsoleOptions, RenderableType
from rich.segment import Segment

_NOT_PRINTED = re.compile(r"[^\x20-\x7e]")


class PlainConsole(Console):
    """A console whose output holds no control character but the line ends and the colours of rich itself."""

    def render(self, renderable: RenderableType, options: ConsoleOptions | None = None) -> Iterable[Segment]:
        for segment in super().render(renderable, options):
            if segment.control or segment.text.isprintable() or segment.text == "\n":
                yield segment
            else:
                lines = [printable(line) for line in segment.text.split("\n")]
                yield Segment("\n".join(lines), segment.style)


def console(*, stderr: bool = False, soft_wrap: bool = False) -> Console:
    """A console on standard output or standard error."""
    return PlainConsole(stderr=stderr, soft_wrap=soft_wrap, highlight=False, markup=False, emoji=False)


def printable(text: object) -> str:
    """The text without control characters, which a table from a stranger could use to drive the terminal."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in str(text))


def json_for_output(value: Any) -> str:
    """JSON that can be shown on any terminal: what is not printable, or not in the output's encoding, is escaped."""
    unicode = (getattr(sys.stdout, "encoding", None) or "ascii").lower().startswith("utf")
    text = json.dumps(value, ensure_ascii=not unicode, indent=1, allow_nan=False)
    return _NOT_PRINTED.sub(_escaped, text)


def _escaped(match: re.Match[str]) -> str:
    character = match.group()
    return character if character.isprintable() or character == "\n" else json.dumps(character)[1:-1]
