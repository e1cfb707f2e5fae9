"""A label column as codes into its distinct texts, so that every text is looked at once."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import compress

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import one_array
from tieline.reading.cell_text import clean

# Blank, or with something that `clean` changes: blanks at the ends or in a row, control and odd characters.
UNCLEAN = r"^ | $|  |^$|[^\x20-\x7e]"

Codes = npt.NDArray[np.int32]
Mask = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Texts:
    """`codes` has one entry per row, -1 for none; `known` holds the distinct texts."""

    codes: Codes
    known: tuple[str, ...]

    @staticmethod
    def from_column(column: pa.ChunkedArray) -> Texts:
        """Trimmed texts of a column; a blank cell is none."""
        if len(column) == 0:
            return Texts(np.empty(0, np.int32), ())
        # In one piece: joining the dictionaries of pieces takes ten times as long.
        encoded = one_array(column).dictionary_encode()
        texts = Texts(encoded.indices.to_numpy(), tuple(encoded.dictionary.to_pylist()))
        if pc.any(pc.match_substring_regex(encoded.dictionary, UNCLEAN)).as_py():
            return texts.renamed(lambda text: clean(text) or None)
        return texts

    @staticmethod
    def constant(text: str | None, count: int) -> Texts:
        """The same text, or none, in every row."""
        if text is None:
            return Texts(np.full(count, -1, np.int32), ())
        return Texts(np.zeros(count, np.int32), (text,))

    @staticmethod
    def from_list(texts: Sequence[str | None]) -> Texts:
        """One text per row."""
        place: dict[str, int] = {}
        codes = [-1 if text is None else place.setdefault(text, len(place)) for text in texts]
        return Texts(np.array(codes, np.int32), tuple(place))

    def __len__(self) -> int:
        return len(self.codes)

    def renamed(self, rename: Callable[[str], str | None], among: Mask | None = None) -> Texts:
        """Every text replaced by what `rename` makes of it; equal results become one text, None becomes none.

        Where `among` the known texts is false, the text becomes none without being looked at.
        """
        place: dict[str, int] = {}
        new = [
            -1 if (name := rename(text)) is None else place.setdefault(name, len(place))
            for text in (self.known if among is None else compress(self.known, among))
        ]
        codes = np.full(len(self.known) + 1, -1, np.int32)
        codes[:-1][slice(None) if among is None else among] = new
        return Texts(codes[self.codes], tuple(place))

    def is_missing(self) -> Mask:
        return self.codes < 0

    def fitting(self, pattern: str) -> Mask:
        """Rows whose text fits a regular expression, without regard to case; the syntax is Arrow's (RE2)."""
        fits = pc.match_substring_regex(self.dictionary(), pattern, ignore_case=True)
        return np.append(fits.to_numpy(zero_copy_only=False), False)[self.codes]

    def where(self, test: Callable[[str], bool]) -> Mask:
        """Rows whose text passes a test."""
        return np.array([*(test(text) for text in self.known), False])[self.codes]

    def kept(self, keep: Mask) -> Texts:
        """The rows that are kept; texts no longer in use are dropped."""
        if keep.all():
            return self
        codes = self.codes[keep]
        used = np.zeros(len(self.known) + 1, dtype=bool)
        used[codes] = True
        place = np.cumsum(used[:-1], dtype=np.int32) - 1
        texts = tuple(text for text, is_used in zip(self.known, used, strict=False) if is_used)
        return Texts(np.append(place, np.int32(-1))[codes].astype(np.int32), texts)

    def filled(self, other: Texts) -> Texts:
        """This text, or the other one where it is missing."""
        if not self.is_missing().any():
            return self
        offset = len(self.known)
        shifted = np.where(other.codes < 0, np.int32(-1), other.codes + np.int32(offset))
        codes = np.where(self.codes < 0, shifted, self.codes).astype(np.int32)
        return Texts(codes, self.known + other.known).renamed(lambda text: text)

    def replaced(self, mask: Mask, other: Texts) -> Texts:
        """The other text where `mask`, missing included."""
        masked = Texts(np.where(mask, np.int32(-1), self.codes).astype(np.int32), self.known)
        only = Texts(np.where(mask, other.codes, np.int32(-1)).astype(np.int32), other.known)
        return masked.filled(only)

    def text(self, row: int) -> str | None:
        code = self.codes[row]
        return None if code < 0 else self.known[code]

    def counts(self) -> dict[str, int]:
        """How often each text occurs."""
        found = np.bincount(self.codes[self.codes >= 0], minlength=len(self.known))
        return {text: int(count) for text, count in zip(self.known, found, strict=True) if count}

    def dictionary(self) -> pa.StringArray:
        return pa.array(self.known, pa.string())

    def arrow(self) -> pa.DictionaryArray:
        indices = pa.array(self.codes, pa.int32(), mask=self.codes < 0)
        return pa.DictionaryArray.from_arrays(indices, self.dictionary())
