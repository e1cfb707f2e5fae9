"""Findings as parallel arrays, and the table they become."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.columns import FINDINGS
from tieline.ruled_spots import RULING as RULING
from tieline.ruled_spots import WHOLE_SPOT as WHOLE_SPOT
from tieline.screen.session import Session
from tieline.tables import build, empty

# Document order, and the order of precedence when several apply to one value: rulings first, for a ruling
# beats a test; then what makes a spot useless for all its analytes; then what is a matter of degree.
TESTS = (
    "total",
    "cations",
    "identity",
    "glass-overlap",
    "crystal-overlap",
    "zoned",
    "outlier",
    "imprecise",
)


@dataclass(frozen=True)
class Findings:
    """Findings of one code: arrays of equal length.

    `analyte` is a code of the session's analytes, or WHOLE_SPOT. `action` is drop, mark or keep; only a
    ruling keeps.
    """

    code: str
    spot: IntArray
    analyte: IntArray
    statistic: FloatArray
    threshold: FloatArray
    p_value: FloatArray
    action: Sequence[str]
    detail: Sequence[str]

    def __len__(self) -> int:
        return len(self.spot)

    def drops(self) -> BoolArray:
        """Which of the findings leave their values out."""
        return np.array([action == "drop" for action in self.action], dtype=np.bool_)

    def dropped_spots(self, n_spots: int) -> BoolArray:
        """Spots that these findings leave out as a whole."""
        out = np.zeros(n_spots, dtype=np.bool_)
        out[self.spot[self.drops() & (self.analyte == WHOLE_SPOT)]] = True
        return out


def spot_findings(
    code: str,
    action: str,
    spot: IntArray,
    statistic: FloatArray,
    threshold: FloatArray | float,
    p_value: FloatArray | None,
    detail: Sequence[str],
) -> Findings:
    """Findings on whole spots that all have the same action."""
    return Findings(
        code,
        np.asarray(spot, dtype=np.int64),
        np.full(len(spot), WHOLE_SPOT, dtype=np.int64),
        np.asarray(statistic, dtype=np.float64),
        np.broadcast_to(np.asarray(threshold, dtype=np.float64), (len(spot),)),
        np.full(len(spot), np.nan) if p_value is None else np.asarray(p_value, dtype=np.float64),
        [action] * len(spot),
        detail,
    )


def no_findings(code: str) -> Findings:
    """No findings of this code."""
    nothing = np.empty(0)
    whole = np.empty(0, dtype=np.int64)
    return Findings(code, whole, whole, nothing, nothing, nothing, [], [])


def joined(code: str, parts: Sequence[Findings]) -> Findings:
    """Findings of one code put together."""
    if not parts:
        return no_findings(code)
    return Findings(
        code,
        np.concatenate([part.spot for part in parts]),
        np.concatenate([part.analyte for part in parts]),
        np.concatenate([part.statistic for part in parts]),
        np.concatenate([part.threshold for part in parts]),
        np.concatenate([part.p_value for part in parts]),
        action=[entry for part in parts for entry in part.action],
        detail=[entry for part in parts for entry in part.detail],
    )


def findings_table(parts: Sequence[Findings], session: Session) -> pa.Table:
    """The table of findings: rulings, then tests in document order; within a code by spot and analyte."""
    parts = [part for part in parts if len(part)]
    if not parts:
        return empty(FINDINGS)
    rank = {code: position for position, code in enumerate((RULING, *TESTS))}
    code = np.concatenate([np.full(len(part), rank[part.code]) for part in parts])
    spot = np.concatenate([part.spot for part in parts])
    analyte = np.concatenate([part.analyte for part in parts])
    order = np.lexsort((analyte, spot, code))
    texts = np.array([*session.analyte.texts, None], dtype=object)
    keys = session.spots.keys.take(pa.array(spot[order]))

    def number(name: str) -> FloatArray:
        joined: FloatArray = np.concatenate([getattr(part, name) for part in parts])[order]
        return joined

    def text(name: str) -> list[str]:
        joined = [entry for part in parts for entry in getattr(part, name)]
        return [joined[position] for position in order]

    columns = {name: keys.column(name) for name in ("spot", "table", "row", "experiment", "phase")}
    columns |= {name: number(name) for name in ("statistic", "threshold", "p_value")}
    columns |= {name: text(name) for name in ("action", "detail")}
    columns |= {
        "analyte": texts[analyte[order]].tolist(),
        "code": [(RULING, *TESTS)[position] for position in code[order]],
    }
    return build(FINDINGS, columns)
