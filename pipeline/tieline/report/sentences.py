"""Small words of a written account: counts with their noun, and lists."""

from __future__ import annotations

from collections.abc import Sequence


def count(number: int, one: str, many: str = "") -> str:
    """`1 spot`, `2 spots`."""
    return f"{number} {one if number == 1 else many or one + 's'}"


def and_(parts: Sequence[str]) -> str:
    """`a; b; and c`: the parts may hold commas."""
    if len(parts) < 2:
        return "".join(parts)
    return f"{'; '.join(parts[:-1])}; and {parts[-1]}"
