"""Findings and rulings combined into `use` and `why` of every value: the one place where values are left out.

Precedence. A reference material and a value that was not measured are never used. Then rulings: one on an
analyte goes before one on its whole spot, and either beats every test. Then the tests, in document order
(`findings.TESTS`): a finding whose action is drop leaves out its value, or all values of its spot. Findings
stay, whatever becomes of the value. Nothing here depends on the order of rows, and no test sees a ruling.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.arrays import BoolArray, IntArray, is_labelled, portions
from tieline.results import Ledger
from tieline.screen.findings import RULING, TESTS, WHOLE_SPOT, Findings
from tieline.screen.session import Session

REFERENCE_MATERIAL, NOT_MEASURED = "reference-material", "not-measured"
_CODES = (REFERENCE_MATERIAL, NOT_MEASURED, RULING, *TESTS)
_REFERENCE_BIT, _MISSING_BIT, _RULING_BIT = 1, 2, 4


@dataclass(frozen=True)
class Resolution:
    """`reasons` (rows,): powers of two for the codes that keep the value out, added up; 0 when it is used.

    `kept` (rows,): a ruling keeps the value, as it was measured.
    """

    reasons: npt.NDArray[np.int16]
    kept: BoolArray

    @property
    def use(self) -> BoolArray:
        return np.asarray(self.reasons == 0)

    def why(self) -> pa.DictionaryArray:
        """The codes that keep each value out, in order of precedence, joined by commas; empty when used."""
        present = np.flatnonzero(self._number())
        position = np.zeros(present.max(initial=0) + 1, dtype=np.int16)
        position[present] = np.arange(len(present))
        texts = [
            ", ".join(code for bit, code in enumerate(_CODES) if reasons >> bit & 1)
            for reasons in present.tolist()
        ]
        return pa.DictionaryArray.from_arrays(pa.array(position[self.reasons]), pa.array(texts, pa.string()))

    def ledger(self) -> Ledger:
        """Every value once, under the first of its reasons."""
        number = self._number()
        present = np.flatnonzero(number)
        number = number[present]
        outcomes = {"used": 0, REFERENCE_MATERIAL: 0, NOT_MEASURED: 0}
        for bit, code in enumerate(_CODES):
            first = (present & ((1 << (bit + 1)) - 1)) == 1 << bit
            if first.any():
                outcomes[code if code in outcomes else f"left out by {code}"] = int(number[first].sum())
        outcomes["used"] = int(np.sum(self.use))
        return Ledger("values", len(self.reasons), outcomes)

    def _number(self) -> IntArray:
        """How many values have each sum of reasons."""
        number = np.zeros(1 << len(_CODES), dtype=np.int64)
        for rows in portions(len(self.reasons)):
            number += np.bincount(self.reasons[rows], minlength=len(number))
        return number


def resolve(
    convert: pa.Table, known: BoolArray, session: Session, findings: Sequence[Findings]
) -> Resolution:
    """What keeps every row of `convert` out, from all findings, rulings among them. known: rows with a value or a limit."""
    cells = _Cells(session)
    reasons = np.zeros(convert.num_rows, dtype=np.int16)
    kept = np.zeros(convert.num_rows, dtype=np.bool_)
    for part in findings:
        if part.code != RULING and len(part):
            reasons[cells.marked(part, part.drops())] |= 1 << _CODES.index(part.code)
    for whole in (True, False):
        # Rulings on single analytes come last, and so go before those on whole spots.
        for part in (part for part in findings if part.code == RULING):
            chosen = (part.analyte == WHOLE_SPOT) == whole
            keeps = np.array([action == "keep" for action in part.action], dtype=np.bool_)
            keep, drop = cells.marked(part, chosen & keeps), cells.marked(part, chosen & ~keeps)
            reasons[keep] = 0
            reasons[drop] |= _RULING_BIT
            kept = (kept | keep) & ~drop
    reasons[~known] = _MISSING_BIT
    reasons[is_labelled(convert, "material")] = _REFERENCE_BIT
    return Resolution(reasons, kept)


class _Cells:
    """Finds the rows of `convert` that a finding is about."""

    def __init__(self, session: Session) -> None:
        self._of_row = session.spots.of_row
        self._n_spots = session.spots.count
        self._n_analytes = len(session.analyte.texts)
        self._analyte_of_row = session.analyte.codes

    def marked(self, part: Findings, chosen: BoolArray) -> BoolArray:
        """Rows (rows,) of the chosen findings: all of a spot, or one of its analytes."""
        whole = chosen & (part.analyte == WHOLE_SPOT)
        spots = np.zeros(self._n_spots, dtype=np.bool_)
        spots[part.spot[whole]] = True
        single = chosen & ~whole
        table = np.zeros((self._n_spots, self._n_analytes if single.any() else 0), dtype=np.bool_)
        table[part.spot[single], part.analyte[single]] = True
        marked = np.zeros(len(self._of_row), dtype=np.bool_)
        for rows in portions(len(marked)):
            spot = self._of_row[rows]
            if whole.any():
                marked[rows] = spots[spot]
            if single.any():
                marked[rows] |= table[spot, self._analyte_of_row[rows]]
        return marked
