"""Which columns name the spots, by the words of their headers and by what stands in them; and which rows are spots."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from itertools import compress

import pyarrow as pa

from tieline.chemistry.phases import phase_name
from tieline.ingest.rows import summary_pattern
from tieline.reading.cell_text import clean, fold
from tieline.reading.grid import Grid
from tieline.settings.ingest import Table

# Words of a header, in small letters, that name what a label column holds; common practice.
LABEL_WORDS: dict[str, tuple[str, ...]] = {
    "spot": ("spot", "point", "analysis", "label", "sample", "name", "no", "no.", "#", "id", "spot id", "datapoint"),
    "experiment": ("experiment", "run", "exp", "exp.", "charge", "capsule", "run no", "run no.", "experiment no"),
    "phase": ("phase", "mineral", "material"),
    "grain": ("grain", "crystal", "grain no", "crystal no"),
    "zone": ("zone", "position", "area", "domain", "core/rim", "rim/core", "where"),
    "distance_um": ("distance", "dist", "rim um", "distance um", "distance (um)", "dist um", "distance_um", "rim (um)"),
    "batch": ("session", "batch", "date", "day", "block"),
    "technique": ("technique", "method"),
    "sequence": ("sequence", "order", "run order", "seq", "time"),
    "comment": ("comment", "comments", "note", "notes", "remark", "remarks"),
}  # fmt: skip
# Words of a cell that say where in its crystal a spot lies; single letters may mean anything.
ZONE_WORDS = ("rim", "edge", "mantle", "core", "centre", "center")
MOSTLY = 0.6
SUMMARY, HEADER = "averages and the like", "repeated headers"


def label_columns(grid: Grid, taken: set[int]) -> tuple[dict[str, int], dict[int, list[str]]]:
    """Kind of label -> its column, and the texts of every column that is not among `taken`."""
    contents = {
        index: [clean(text) for text in grid.column(index).to_pylist()]
        for index in range(grid.width)
        if index not in taken and grid.headers[index].strip()
    }
    labels: dict[str, int] = {}
    for name, words in LABEL_WORDS.items():
        for index in contents:
            if fold(grid.headers[index]) in words and index not in labels.values():
                labels[name] = index
                break
    by_content: dict[str, Callable[[str], bool]] = {
        "phase": lambda text: phase_name(text) is not None,
        "zone": lambda text: fold(text) in ZONE_WORDS,
    }
    for name, is_one in by_content.items():
        if name not in labels:
            free = (index for index in contents if index not in labels.values())
            found = next((index for index in free if _mostly(contents[index], is_one)), None)
            if found is not None:
                labels[name] = found
    return labels, contents


def _mostly(texts: Iterable[str], is_one: Callable[[str], bool]) -> bool:
    filled = [text for text in texts if text]
    return bool(filled) and sum(map(is_one, filled)) >= MOSTLY * len(filled)


def rows_of_spots(
    grid: Grid, labels: Mapping[str, int], contents: Mapping[int, Sequence[str]]
) -> tuple[list[bool], dict[str, int]]:
    """Which rows are spots, shape (rows,), and how many are averages or repeated headers; as `ingest` will see it."""
    pattern = re.compile(summary_pattern(Table.model_fields["skip_row_labels"].default), re.IGNORECASE)
    if not contents:
        return [True] * grid.row_count, {}
    first, spot = contents[min(contents)], contents.get(labels.get("spot", -1))
    names = [first] if spot is None else [first, spot]
    others = [contents[labels[name]] for name in ("experiment", "phase", "grain") if name in labels]
    headed = [(contents[index], clean(grid.headers[index])) for index in (*labels.values(), min(contents))]
    keep, counts = [True] * grid.row_count, Counter[str]()
    blank = _blank_rows(
        grid, [row for row, texts in enumerate(zip(*contents.values(), strict=True)) if not any(texts)]
    )
    for row in range(grid.row_count):
        unnamed = spot is not None and not spot[row]
        sums_up = (texts[row] for texts in (*names, *(others if unnamed else ())))
        if any(texts[row] and texts[row] == header for texts, header in headed):
            counts[HEADER] += 1
        elif any(pattern.search(text) for text in sums_up):
            counts[SUMMARY] += 1
        elif row not in blank:
            continue
        keep[row] = False
    return keep, dict(counts)


def _blank_rows(grid: Grid, rows: list[int]) -> set[int]:
    """The rows among these of which every cell is blank."""
    for index in range(grid.width):
        if not rows:
            break
        texts = grid.column(index).take(pa.array(rows, pa.int64())).to_pylist()
        rows = [row for row, text in zip(rows, texts, strict=True) if not text.strip()]
    return set(rows)


def spot_column(
    labels: Mapping[str, int], contents: Mapping[int, Sequence[str]], keep: Sequence[bool]
) -> int | None:
    """The first column, where nothing else is known of it and no two spots have the same text there."""
    first = min(contents, default=None)
    if first is None or first in labels.values():
        return None
    texts = kept(contents[first], keep)
    return first if len(texts) > 2 and all(texts) and len(set(texts)) == len(texts) else None


def kept(texts: Iterable[str], keep: Sequence[bool]) -> list[str]:
    """The texts of the rows that are spots."""
    return list(compress(texts, keep))
