"""Tables as compact columns for the page's embedded data."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from typing import Any

import pyarrow as pa


def rounded(values: Iterable[float | None], digits: int) -> list[float | int | None]:
    """Numbers to so many significant digits, null for what is not finite: for pictures, never for tables of D."""
    return [_short(value, digits) for value in values]


def _short(value: float | None, digits: int) -> float | int | None:
    if value is None or not math.isfinite(value):
        return None
    short = float(f"{value:.{digits}g}")
    return int(short) if short.is_integer() and abs(short) < 1e15 else short


def finite(values: Iterable[float | None]) -> list[float | None]:
    """Numbers with all their digits, null for what is not finite."""
    return [value if value is not None and math.isfinite(value) else None for value in values]


def coded(texts: Sequence[str | None]) -> dict[str, list[Any]]:
    """Texts as codes into a list of the different ones, -1 for none."""
    known = sorted({text for text in texts if text is not None})
    place = {text: code for code, text in enumerate(known)}
    return {"t": known, "c": [-1 if text is None else place[text] for text in texts]}


def columns_of(
    table: pa.Table, labels: Sequence[str], numbers: Sequence[str], digits: int | None
) -> dict[str, Any]:
    """Label columns coded; number columns to `digits`, or all digits where None."""
    data: dict[str, Any] = {name: coded(table.column(name).to_pylist()) for name in labels}
    for name in numbers:
        values = table.column(name).to_pylist()
        data[name] = finite(values) if digits is None else rounded(values, digits)
    return data


def script_json(data: Any) -> str:
    """JSON that may stand inside a script element whatever the labels hold."""
    text = json.dumps(data, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    for character in "<>&\N{LINE SEPARATOR}\N{PARAGRAPH SEPARATOR}":
        text = text.replace(character, f"\\u{ord(character):04x}")
    return text
