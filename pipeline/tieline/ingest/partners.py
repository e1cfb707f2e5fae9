"""The uncertainty or limit column that belongs to each analyte column, by a header pattern."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

from tieline.chemistry.names import recognise_analyte
from tieline.ingest.assigning import Assigning
from tieline.ingest.headers import without_unit
from tieline.reading.cell_text import fold

HOLE = "{analyte}"


def find_partners(
    work: Assigning, pattern: str | None, values: list[int], taken: set[int], what: str
) -> dict[int, int]:
    """Analyte column -> partner column.

    `values` loses the columns that turn out to be partners: with the pattern `{analyte}` they carry an
    analyte's own header. Adds a problem when the pattern fits no column, or a remark on analytes without one.
    """
    if pattern is None:
        return {}
    if pattern.strip() == HOLE:
        found = _same_header(work.headers, values)
    elif HOLE in pattern:
        found = _by_header(work, pattern, values, taken)
    else:
        found = _neighbours(work.headers, pattern, values)
    values[:] = [index for index in values if index not in set(found.values())]
    for partner, count in Counter(found.values()).items():
        if count > 1:
            work.problem(f"{what}.pattern gives this column to {count} analytes.", work.headers[partner])
    if not found and values:
        work.problem(
            f"no column fits {what}.pattern.",
            pattern,
            f'{HOLE} stands for the analyte\'s header, for example "{work.headers[values[0]]}".',
        )
    elif missing := [work.headers[index] for index in values if index not in found]:
        shown = ", ".join(missing[:8]) + (f" and {len(missing) - 8} more" if len(missing) > 8 else "")
        work.remark(f"no {what} column for {shown}.")
    return found


def _by_header(work: Assigning, pattern: str, values: Sequence[int], taken: set[int]) -> dict[int, int]:
    by_text: dict[str, int] = {}
    for index, header in enumerate(work.headers):
        if header.strip() and index not in taken:
            by_text.setdefault(without_unit(header), index)
    for index, header in enumerate(work.headers):  # a full match goes before one that leaves the unit out
        if header.strip() and index not in taken:
            by_text[fold(header)] = index
    for index, header in enumerate(work.full):  # the word for the uncertainty may stand in the units row
        if header.strip() and index not in taken:
            by_text.setdefault(fold(header), index)
    found = {}
    for index in values:
        for variant in _variants(work, index):
            text = pattern.replace(HOLE, variant)
            partner = by_text.get(fold(text), by_text.get(without_unit(text)))
            if partner is not None and partner != index:
                found[index] = partner
                break
    return found


def _variants(work: Assigning, index: int) -> list[str]:
    """What {analyte} may stand for: the header, the header without unit, the canonical name."""
    analyte = recognise_analyte(work.full[index])
    names = [analyte.label, analyte.name] if analyte is not None else []
    return list(dict.fromkeys([work.headers[index], without_unit(work.headers[index]), *names]))


def _neighbours(headers: Sequence[str], pattern: str, values: Sequence[int]) -> dict[int, int]:
    """The next column with the pattern's text, before the next analyte."""
    wanted = (fold(pattern), without_unit(pattern))
    found = {}
    for position, index in enumerate(values):
        stop = values[position + 1] if position + 1 < len(values) else len(headers)
        for other in range(index + 1, stop):
            if fold(headers[other]) == wanted[0] or without_unit(headers[other]) == wanted[1]:
                found[index] = other
                break
    return found


def _same_header(headers: Sequence[str], values: Sequence[int]) -> dict[int, int]:
    """A second block under the same headers."""
    found: dict[int, int] = {}
    first: dict[str, int] = {}
    for index in values:
        key = fold(headers[index])
        if key not in first:
            first[key] = index
        elif first[key] not in found:
            found[first[key]] = index
    return found
