"""How many spots every test caught, and how many only it caught."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import counts, labels
from tieline.screen.findings import RULING, TESTS


@dataclass(frozen=True)
class TestCount:
    """How many spots one code caught.

    caught: spots with such a finding; only_caught: those of them without a finding of any other code;
    left_out: spots that lose at least one value by it.
    """

    __test__ = False  # not a pytest class

    code: str
    caught: int
    only_caught: int
    left_out: int


def counts_by_test(screen: pa.Table, findings: pa.Table) -> tuple[TestCount, ...]:
    """One count per code that has findings, rulings first, then tests in document order.

    screen, findings: the tables of this stage. `caught` counts marks as well as drops.
    """
    spot = _spots(findings)
    code = labels(findings, "code")
    pairs = np.unique(spot * (len(code.texts) + 1) + code.codes) if len(spot) else np.empty(0, dtype=np.int64)
    spot_of_pair, code_of_pair = np.divmod(pairs, len(code.texts) + 1)
    n_codes = np.bincount(spot_of_pair, minlength=1)
    alone = n_codes[spot_of_pair] == 1 if len(pairs) else np.empty(0, dtype=np.bool_)
    left_out = _left_out(screen)
    return tuple(
        TestCount(
            name,
            int(np.sum(code_of_pair == code.texts.index(name))),
            int(np.sum(alone & (code_of_pair == code.texts.index(name)))),
            left_out.get(name, 0),
        )
        for name in (RULING, *TESTS)
        if name in code.texts
    )


def _spots(table: pa.Table) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    """A number per row for its spot: table and row there."""
    if not table.num_rows:
        return np.empty(0, dtype=np.int64)
    tables = labels(table, "table")
    rows = counts(table, "row")
    return np.asarray(np.unique(tables.codes * (rows.max() + 1) + rows, return_inverse=True)[1].reshape(-1))


def _left_out(screen: pa.Table) -> dict[str, int]:
    why = labels(screen, "why")
    result: dict[str, int] = {}
    wanted = [text for text in why.texts if text]
    rows = screen.filter(pa.array(why.is_one_of(wanted)))
    spot, why = _spots(rows), labels(rows, "why") if rows.num_rows else why
    for code in (RULING, *TESTS):
        containing = [text for text in wanted if code in text.split(", ")]
        if containing:
            result[code] = len(np.unique(spot[why.is_one_of(containing)]))
    return result
