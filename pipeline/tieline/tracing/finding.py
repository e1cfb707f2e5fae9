"""Which row of `classify` is meant, and what to say where there is none."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import pyarrow as pa

from tieline.chemistry.phases import phase_name
from tieline.errors import InputError, Problem, nearest

Row = Mapping[str, Any]


def find_coefficient(
    classify: pa.Table,
    experiment: str,
    alpha: str,
    beta: str,
    element: str,
    spellings: Mapping[str, Iterable[str]],
) -> Row:
    """The row of one D.

    spellings: phase -> further spellings, as in `[ingest.phases]`. Raises InputError where there is no such D,
    naming the nearest one, or what there is.
    """
    rows = _of(classify.to_pylist(), "experiment", experiment, "")
    pairs = list(dict.fromkeys((row["alpha"], row["beta"]) for row in rows))
    if (alpha, beta) not in pairs:
        remedy = _pair_meant(alpha, beta, pairs, spellings)
        raise InputError(Problem(f'no D of the pair "{alpha}/{beta}" in {experiment}.', remedy=remedy))
    rows = [row for row in rows if (row["alpha"], row["beta"]) == (alpha, beta)]
    return _of(rows, "element", element, f" of {alpha}/{beta} in {experiment}")[0]


def _of(rows: list[Row], name: str, wanted: str, where: str) -> list[Row]:
    found = [row for row in rows if row[name] == wanted]
    if not found:
        known = list(dict.fromkeys(str(row[name]) for row in rows))
        remedy = nearest(wanted, known) or f"There are: {', '.join(known)}."
        raise InputError(Problem(f'no D with the {name} "{wanted}"{where}.', remedy=remedy))
    return found


def _pair_meant(
    alpha: str, beta: str, pairs: Sequence[tuple[str, str]], spellings: Mapping[str, Iterable[str]]
) -> str:
    """The pair that other spellings or the other order of the two phases mean; else all pairs."""
    one, other = (phase_name(phase, spellings) or phase for phase in (alpha, beta))
    texts = ["/".join(pair) for pair in pairs]
    for text in (f"{one}/{other}", f"{other}/{one}"):
        if text in texts:
            return f'Did you mean "{text}"?'
    return nearest(f"{one}/{other}", texts) or f"There are: {', '.join(texts)}."
