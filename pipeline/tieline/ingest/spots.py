"""The labels of every spot of one table: split, matched to phases and reference materials, and made unique."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from pathlib import PurePosixPath
from typing import Any

import numpy as np
import numpy.typing as npt

from tieline.errors import Problem
from tieline.ingest.texts import Mask, Texts
from tieline.reading.formats import ending
from tieline.results import Remark
from tieline.settings.ingest import LABEL_GROUPS, Table

Ints = npt.NDArray[np.int32]


@dataclass(frozen=True)
class Spots:
    """One entry per spot; distance and sequence as texts still. `material` is filled by `with_materials`."""

    row: Ints
    spot: Texts
    experiment: Texts
    phase: Texts
    grain: Texts
    zone: Texts
    batch: Texts
    technique: Texts
    distance_um: Texts
    sequence: Texts
    comment: Texts
    material: Texts

    def kept(self, keep: Mask) -> Spots:
        """The spots that are kept."""
        parts: dict[str, Any] = {field.name: _kept(getattr(self, field.name), keep) for field in fields(self)}
        return Spots(**parts)

    def __len__(self) -> int:
        return len(self.row)


def _kept(column: Ints | Texts, keep: Mask) -> Ints | Texts:
    return column.kept(keep) if isinstance(column, Texts) else column[keep]


def read_spots(table: Table, rows: Ints, labels: Mapping[str, Texts]) -> tuple[Spots, Mask]:
    """Labels of every row, and which rows have a combined label that the pattern does not fit.

    A group of the label pattern goes before the column of the same name only where that column is not given.
    """
    n = len(rows)
    none = Texts.constant(None, n)
    split, unmatched = _split(table, labels, n)

    def column(name: str, constant: str | None = None) -> Texts:
        found = labels.get(name, split.get(name, none))
        return found if constant is None else found.filled(Texts.constant(constant, n))

    spot = column("spot")
    if "spot" not in labels and "spot" not in split:
        spot = Texts(np.arange(n, dtype=np.int32), tuple(map(str, rows.tolist())))
    spots = Spots(
        row=rows,
        spot=spot,
        experiment=column("experiment", table.experiment),
        phase=column("phase", table.phase),
        grain=column("grain"),
        zone=column("zone"),
        batch=column("batch", table.batch or batch_of_path(table.path)),
        technique=column("technique", table.technique),
        distance_um=column("distance_um"),
        sequence=column("sequence"),
        comment=column("comment"),
        material=none,
    )
    return spots, unmatched


def batch_of_path(path: str) -> str:
    """The file name without the ending of its format."""
    name = PurePosixPath(path.replace("\\", "/")).name
    return name[: len(name) - len(ending(name))] or name


def _split(table: Table, labels: Mapping[str, Texts], n: int) -> tuple[dict[str, Texts], Mask]:
    if table.labels is None or "labels" not in labels:
        return {}, np.zeros(n, dtype=bool)
    pattern = re.compile(table.labels.pattern)
    combined = labels["labels"]
    matches = {text: pattern.fullmatch(text) for text in combined.known}
    split = {
        name: combined.renamed(lambda text, name=name: _group(matches[text], name))  # type: ignore[misc]
        for name in LABEL_GROUPS
        if name in pattern.groupindex
    }
    return split, combined.where(lambda text: matches[text] is None)


def _group(match: re.Match[str] | None, name: str) -> str | None:
    return None if match is None else ((match[name] or "").strip() or None)


def duplicates(spots: Spots) -> dict[str, list[int]]:
    """Spot label -> the rows it stands in, for labels that stand in more than one."""
    codes = spots.spot.codes
    counts = np.bincount(codes[codes >= 0], minlength=len(spots.spot.known))
    repeated = np.flatnonzero(np.append(counts, 0)[codes] > 1)
    found: dict[str, list[int]] = {}
    for place in repeated.tolist():
        found.setdefault(spots.spot.known[spots.spot.codes[place]], []).append(int(spots.row[place]))
    return found


def duplicate_problems(path: str, column: str | None, repeated: Mapping[str, list[int]]) -> list[Problem]:
    """One problem per label, with all its rows."""
    remedy = 'Rename them, or set on_duplicate_spot = "number" in [ingest].'
    return [
        Problem(f'the spot label "{label}" stands in rows {_and(rows)}.', path, rows[1], column, remedy)
        for label, rows in repeated.items()
    ]


def numbered(spots: Spots, repeated: Mapping[str, list[int]], path: str) -> tuple[Spots, list[Remark]]:
    """Spots with unique labels: the second `a` becomes `a (2)`, and so on past labels in use."""
    taken = set(spots.spot.known)
    seen: Counter[str] = Counter()
    labels: list[str | None] = []
    for code in spots.spot.codes.tolist():
        label = spots.spot.known[code]
        if label in repeated:
            seen[label] += 1
            name = label
            while seen[label] > 1 and (name := f"{label} ({seen[label]})") in taken:
                seen[label] += 1
            taken.add(name)
            label = name
        labels.append(label)
    remarks = [
        Remark(f'the spot label "{label}" stands in rows {_and(rows)}; numbered from the second on.', path)
        for label, rows in list(repeated.items())[:20]
    ]
    if len(repeated) > 20:
        remarks.append(Remark(f"{len(repeated) - 20} more spot labels stand twice and were numbered.", path))
    return replace(spots, spot=Texts.from_list(labels)), remarks


def _and(rows: list[int]) -> str:
    return ", ".join(map(str, rows[:-1])) + f" and {rows[-1]}"
