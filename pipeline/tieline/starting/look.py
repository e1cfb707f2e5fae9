"""Looks at one table: which columns are analytes, uncertainties, limits, labels, and how sure that is."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from tieline.chemistry.names import Analyte, nearest_names, recognise_analyte
from tieline.chemistry.phases import phase_name
from tieline.reading.cell_text import CellStyle
from tieline.reading.cells import parse_cells
from tieline.reading.formats import read_grid
from tieline.reading.grid import Grid
from tieline.reading.input_file import InputFile
from tieline.starting.label_columns import kept, label_columns, rows_of_spots, spot_column

WHOLE_TOTAL_WT = (90.0, 105.0)
MANY_OXIDES = 4  # so many make a total
MOST_EXAMPLES = 3


@dataclass
class Look:
    """What one table shows. Columns are indices into `headers`.

    texts: the labels of the spots, by kind of label. unused: columns of no known meaning, with some of their
    texts. not_spots: how many rows are averages or repeated headers.
    """

    file: str
    headers: tuple[str, ...]
    full: tuple[str, ...]
    analytes: dict[int, Analyte]
    labels: dict[str, int]
    texts: dict[str, list[str]]
    total: int | None
    unused: dict[int, tuple[str, ...]]
    sigma_pattern: str | None = None
    sigma_words: Analyte | None = None
    limit_pattern: str | None = None
    unit: str | None = None
    unit_evidence: str = ""
    isotopes: bool = False
    n_spots: int = 0
    not_spots: dict[str, int] = field(default_factory=dict)
    doubtful: list[str] = field(default_factory=list)


def look_at(file: InputFile) -> Look:
    """Reads a table's cells and columns. Raises InputError where it is no table at all."""
    grid = read_grid(file)
    full = _with_units(grid)
    recognised = {
        index: analyte
        for index, text in enumerate(full)
        if text and (analyte := recognise_analyte(text)) is not None
    }
    values = {i: a for i, a in recognised.items() if a.usable and a.role == "value"}
    doubtful = [grid.headers[i] for i, a in values.items() if not a.certain]
    analytes = {i: a for i, a in values.items() if a.certain}
    total = next((i for i, a in recognised.items() if a.role == "total"), None)
    labels, contents = label_columns(grid, set(recognised))
    keep, not_spots = rows_of_spots(grid, labels, contents)
    if "spot" not in labels and (column := spot_column(labels, contents, keep)) is not None:
        labels = {"spot": column, **labels}
    texts = {index: kept(column, keep) for index, column in contents.items()}
    look = Look(
        file=file.path,
        headers=grid.headers,
        full=full,
        analytes=analytes,
        labels=labels,
        texts={name: texts[index] for name, index in labels.items()},
        total=total,
        unused={i: _examples(column) for i, column in texts.items() if i not in labels.values()},
        isotopes=any(a.kind == "isotope" for a in analytes.values()),
        n_spots=sum(keep),
        not_spots=not_spots,
        doubtful=doubtful,
    )
    look.sigma_pattern, sigma = _partner_pattern(look, recognised, "sigma")
    look.sigma_words = sigma
    look.limit_pattern, _ = _partner_pattern(look, recognised, "limit")
    look.unit, look.unit_evidence = _unit(grid, look)
    return look


def _with_units(grid: Grid) -> tuple[str, ...]:
    units = grid.units or ("",) * grid.width
    return tuple(f"{h} {u}".strip() if h.strip() else "" for h, u in zip(grid.headers, units, strict=True))


def _examples(texts: Sequence[str]) -> tuple[str, ...]:
    """The first different texts of a column."""
    return tuple(dict.fromkeys(text for text in texts if text))[:MOST_EXAMPLES]


def _partner_pattern(
    look: Look, recognised: dict[int, Analyte], role: str
) -> tuple[str | None, Analyte | None]:
    """The pattern that most uncertainty (or limit) headers follow, and what one of them says of itself."""
    patterns: Counter[str] = Counter()
    words: dict[str, Analyte] = {}
    by_name = {analyte.label: look.headers[index] for index, analyte in look.analytes.items()}
    for index, analyte in recognised.items():
        own = by_name.get(analyte.label)
        if analyte.role != role or own is None:
            continue
        pattern = _as_pattern(look.headers[index], own, analyte)
        if pattern is not None:
            patterns[pattern] += 1
            words.setdefault(pattern, analyte)
    if not patterns:
        bare = _bare_partner(look, role)
        return (bare, recognise_analyte(f"Ni {bare}")) if bare else (None, None)
    best = patterns.most_common(1)[0][0]
    return best, words[best]


def _as_pattern(header: str, own: str, analyte: Analyte) -> str | None:
    """The header with {analyte} for the analyte's own header, with or without its unit; None where it is not in it."""
    without_unit = re.split(r"[\s_(\[]", own.strip(), maxsplit=1)[0]
    for text in (own.strip(), without_unit, analyte.label, analyte.name):
        if text and text in header:
            return header.replace(text, "{analyte}", 1).strip()
    return None


def _bare_partner(look: Look, role: str) -> str | None:
    """A header such as `1s` or `DL` that stands again and again beside the analytes."""
    counts = Counter(header.strip() for header in look.headers if header.strip())
    for header, count in counts.most_common():
        analyte = recognise_analyte(f"Ni {header}")
        if count > 1 and analyte is not None and analyte.role == role:
            return header
    return None


def _unit(grid: Grid, look: Look) -> tuple[str | None, str]:
    """The table's unit where headers do not say: wt% when oxides add up to about 100."""
    silent = [index for index, analyte in look.analytes.items() if analyte.unit is None]
    if not silent:
        return None, ""
    oxides = [index for index in silent if look.analytes[index].kind == "oxide"]
    if len(oxides) < MANY_OXIDES or not grid.row_count:
        return None, "?"
    style = CellStyle(decimal=grid.found.decimal, not_measured=("", "-", "n.d.", "bdl"))
    cells = [
        np.concatenate([parse_cells(block.cells[index], style).value for block in grid.blocks])
        for index in oxides
    ]
    totals = np.nansum(np.array(cells), axis=0)
    middle = float(np.median(totals[totals > 0])) if (totals > 0).any() else np.nan
    if WHOLE_TOTAL_WT[0] <= middle <= WHOLE_TOTAL_WT[1]:
        return "wt%", f"the oxides add up to {middle:.1f} in the middle row"
    return None, f"the oxides add up to {middle:.3g} in the middle row, which is no total in wt%"


def phases_of(texts: Sequence[str]) -> tuple[dict[str, list[str]], dict[str, tuple[int, list[str]]]]:
    """Recognised phase -> spellings, and unrecognised label -> (how often, nearest phases)."""
    known: dict[str, list[str]] = {}
    unknown: dict[str, tuple[int, list[str]]] = {}
    for text, count in Counter(text for text in texts if text).items():
        name = phase_name(text)
        if name is None:
            unknown[text] = (count, nearest_names(text, _phase_words()))
        else:
            known.setdefault(name, []).append(text)
    return known, unknown


def _phase_words() -> list[str]:
    from tieline.chemistry.phases import all_phases

    return list(all_phases())
