"""What every column of a spot table is: label, analyte, uncertainty, limit, total, or not read."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from tieline.chemistry.header_words import PPM_PER_UNIT, normalise_header, read_words
from tieline.chemistry.names import Analyte, recognise_analyte
from tieline.errors import nearest
from tieline.ingest.assigning import Assigning, did_you_mean, listed, role_words
from tieline.ingest.headers import column_letter, find_header
from tieline.ingest.partners import find_partners
from tieline.ingest.unread import remark_unread
from tieline.reading.cell_text import fold

LABELS = (
    "spot", "experiment", "phase", "grain", "zone", "distance_um", "batch", "technique", "sequence", "comment",
)  # fmt: skip


@dataclass(frozen=True)
class AnalyteColumn:
    """One analyte: its columns, its unit, and the factors that bring sigma and limit to that unit."""

    index: int
    header: str
    name: str
    unit: str
    sigma_index: int | None = None
    sigma_factor: float = 1.0
    sigma_header: str | None = None
    limit_index: int | None = None
    limit_factor: float = 1.0
    limit_header: str | None = None
    limit: float | None = None


@dataclass(frozen=True)
class Roles:
    """All columns of one table. `labels` maps label names, and "labels" for the combined one, to columns."""

    labels: dict[str, int]
    analytes: tuple[AnalyteColumn, ...]
    total_index: int | None = None
    not_read: tuple[int, ...] = ()


def assign_roles(work: Assigning) -> Roles:
    """The role of every column; with problems, where the configuration and the headers disagree."""
    labels = _label_columns(work)
    ignored = _ignored_columns(work)
    taken = set(labels.values()) | ignored
    recognised = [recognise_analyte(text) if text.strip() else None for text in work.full]
    values = _value_columns(work, recognised, taken)
    sigmas = find_partners(
        work, work.table.sigma.pattern if work.table.sigma else None, values, taken, "sigma"
    )
    limit = work.table.limit
    limits = find_partners(
        work, limit.pattern if limit else None, values, taken | set(sigmas.values()), "limit"
    )
    partners = set(sigmas.values()) | set(limits.values())
    _check_stated_sigmas(work, recognised, taken | partners)
    _check_duplicates(work, recognised, values, partners, ignored)
    analytes = _analytes(work, recognised, values, sigmas, limits)
    total = _total_column(work, recognised, taken | partners)
    read = set(labels.values()) | set(values) | partners
    read_or_known = read | ignored | (set() if total is None else {total})
    remark_unread(work, recognised, set(range(len(work.headers))) - read_or_known)
    return Roles(labels, analytes, total, tuple(sorted(set(range(len(work.headers))) - read)))


def _label_columns(work: Assigning) -> dict[str, int]:
    wanted = {name: getattr(work.table.columns, name) for name in LABELS}
    if work.table.labels is not None:
        wanted["labels"] = work.table.labels.column
    found = {}
    for name, header in wanted.items():
        if header is None:
            continue
        index = _one_column(work, header, f"the {name} column")
        if index is not None:
            found[name] = index
    return found


def _one_column(work: Assigning, header: str, what: str) -> int | None:
    matches = find_header(header, work.headers)
    if len(matches) == 1:
        return matches[0]
    if matches:
        letters = " and ".join(column_letter(index) for index in matches)
        work.problem(f"{what} stands twice, in columns {letters}.", header, "Give one of them another name.")
    else:
        work.problem(
            f"there is no such header ({what}).", header, nearest(header, filter(None, work.headers))
        )
    return None


def _ignored_columns(work: Assigning) -> set[int]:
    ignored: set[int] = set()
    for header in work.table.columns.ignore:
        matches = find_header(header, work.headers)
        if not matches:
            work.problem("there is no such header (columns.ignore).", header, nearest(header, work.headers))
        ignored.update(matches)
    return ignored


def _value_columns(work: Assigning, recognised: Sequence[Analyte | None], taken: set[int]) -> list[int]:
    if work.table.analytes is not None:
        return _listed_columns(work, recognised, taken)
    usable = [
        index
        for index, analyte in enumerate(recognised)
        if analyte is not None and analyte.usable and analyte.role == "value" and index not in taken
    ]
    certain = [index for index in usable if recognised[index].certain]  # type: ignore[union-attr]
    values = certain + [
        index for index in usable if index not in certain and _is_symbol_among(work, certain, index)
    ]
    if not values:
        work.problem(
            "no column is recognised as an oxide, element or isotope.",
            remedy="Is header_row right? Otherwise list the headers in analytes.",
        )
    return sorted(values)


def _is_symbol_among(work: Assigning, certain: Sequence[int], index: int) -> bool:
    """A bare P, Y or K is an element in a table of bare elements, but not where it can be pressure or place."""
    folded = {fold(header) for header in work.headers}
    header = work.headers[index].strip()
    other_sense = {"P": {"t"}, "Y": {"x"}}.get(header, set())
    bare = [i for i in certain if work.headers[i].strip().isalpha() and len(work.headers[i].strip()) <= 2]
    accepted = len(bare) * 2 >= max(len(certain), 1) and not (other_sense & folded)
    what = "is read as an element" if accepted else "may be an element; it is not read"
    work.remark(f'"{header}" {what}. List the analytes, or name it in columns.ignore, to decide.')
    return accepted


def _listed_columns(work: Assigning, recognised: Sequence[Analyte | None], taken: set[int]) -> list[int]:
    found = []
    for wanted in work.table.analytes or ():
        matches = find_header(wanted, work.headers)[:1] or [
            index
            for index, analyte in enumerate(recognised)
            if analyte is not None
            and analyte.role == "value"
            and analyte.label == wanted
            and index not in taken
        ]
        if not matches:
            work.problem("there is no such analyte column.", wanted, nearest(wanted, work.headers))
        elif (analyte := recognised[matches[0]]) is None or not analyte.usable or analyte.role != "value":
            work.problem("is not the name of an oxide, element or isotope.", wanted, did_you_mean(wanted))
        else:
            found.append(matches[0])
    return sorted(dict.fromkeys(found))


def _check_stated_sigmas(work: Assigning, recognised: Sequence[Analyte | None], used: set[int]) -> None:
    """A column that looks like an uncertainty must be stated: nobody can tell from outside what it is."""
    left = [
        index
        for index, header in enumerate(work.full)
        if index not in used and header.strip() and role_words(header, recognised[index]) == "sigma"
    ]
    if not left:
        return
    shown = listed([work.headers[index] for index in left])
    if work.table.sigma is None:
        work.problem(
            f"{len(left)} columns look like uncertainties ({shown}), but what they are is not stated.",
            work.headers[left[0]],
            'State sigma = { pattern = "{analyte} ...", level, relative }, or list them in columns.ignore.',
        )
    else:
        work.remark(f"columns that look like uncertainties are not read: {shown}.")


def _check_duplicates(
    work: Assigning,
    recognised: Sequence[Analyte | None],
    values: Sequence[int],
    partners: set[int],
    ignored: set[int],
) -> None:
    by_header: dict[str, list[int]] = {}
    for index, header in enumerate(work.headers):
        if header.strip() and index not in partners and index not in ignored:
            by_header.setdefault(header, []).append(index)
    for header, where in by_header.items():
        if len(where) > 1:
            letters = " and ".join(column_letter(index) for index in where)
            work.problem(f"the header stands twice, in columns {letters}.", header, "Rename one of them.")
    by_name: dict[str, list[int]] = {}
    for index in values:
        by_name.setdefault(recognised[index].label, []).append(index)  # type: ignore[union-attr]
    for name, where in by_name.items():
        headers = list(dict.fromkeys(work.headers[index] for index in where))
        if len(headers) > 1:
            remedy = "Name one of them in columns.ignore."
            work.problem(f"{listed(headers)} report the same analyte, {name}.", headers[0], remedy)


def _analytes(
    work: Assigning,
    recognised: Sequence[Analyte | None],
    values: Sequence[int],
    sigmas: dict[int, int],
    limits: dict[int, int],
) -> tuple[AnalyteColumn, ...]:
    constants = _constant_limits(work, recognised, values)
    columns = []
    for index in values:
        analyte = recognised[index]
        assert analyte is not None
        unit = analyte.unit or work.table.unit
        if unit is None:
            remedy = 'State unit = "wt%", "ppm" or "ppb", or write it into the header.'
            work.problem("its unit is not stated.", work.headers[index], remedy)
            unit = "wt%"  # only so that the column's cells are checked all the same
        sigma_index, limit_index = sigmas.get(index), limits.get(index)
        if sigma_index is not None:
            _check_sigma_words(work, sigma_index, recognised[sigma_index])
        limit_unit = work.table.limit.unit if work.table.limit else None
        constant = constants.get(index)
        columns.append(
            AnalyteColumn(
                index=index,
                header=work.headers[index],
                name=analyte.label,
                unit=unit,
                sigma_index=sigma_index,
                sigma_factor=_to_unit(recognised, sigma_index, None, unit),
                sigma_header=None if sigma_index is None else work.headers[sigma_index],
                limit_index=limit_index,
                limit_header=None if limit_index is None else work.headers[limit_index],
                limit_factor=_to_unit(recognised, limit_index, limit_unit, unit),
                limit=None if constant is None else constant * _factor(limit_unit or unit, unit),
            )
        )
    return tuple(columns)


def _factor(unit: str, target: str) -> float:
    return 1.0 if unit == target else PPM_PER_UNIT[unit] / PPM_PER_UNIT[target]


def _to_unit(
    recognised: Sequence[Analyte | None], index: int | None, stated: str | None, target: str
) -> float:
    """Factor from a sigma or limit column's unit, which its own header may state, to the analyte's unit."""
    analyte = recognised[index] if index is not None else None
    unit = (analyte.unit if analyte is not None else None) or stated or target
    return _factor(unit, target) if unit in PPM_PER_UNIT else 1.0


def _check_sigma_words(work: Assigning, index: int, analyte: Analyte | None) -> None:
    """What a header says about its uncertainty must not contradict the configuration."""
    sigma = work.table.sigma
    assert sigma is not None
    header = work.headers[index]
    words = analyte or read_words(normalise_header(work.full[index]))
    if words.level is not None and words.level != sigma.level:
        work.problem(f"the header says {words.level} sigma, the configuration {sigma.level:g}.", header)
    if words.relative is True and not sigma.relative:
        work.problem(
            "the header says relative, the configuration absolute.", header, "State relative = true."
        )
    if sigma.relative and words.unit in ("ppm", "ppb"):
        work.problem(f"the header says {words.unit}, the configuration relative.", header)


def _constant_limits(
    work: Assigning, recognised: Sequence[Analyte | None], values: Sequence[int]
) -> dict[int, float]:
    given = work.table.limit.values if work.table.limit else {}
    found = {}
    for key, value in given.items():
        matches = [
            index
            for index in values
            if fold(key) in (fold(work.headers[index]), fold(recognised[index].label))  # type: ignore[union-attr]
        ]
        if not matches:
            names = [recognised[index].label for index in values]  # type: ignore[union-attr]
            work.problem("limit.values names no analyte of this table.", key, nearest(key, names))
        found.update(dict.fromkeys(matches, value))
    return found


def _total_column(work: Assigning, recognised: Sequence[Analyte | None], used: set[int]) -> int | None:
    totals = [
        index
        for index, analyte in enumerate(recognised)
        if analyte is not None and analyte.role == "total" and index not in used
    ]
    return totals[0] if totals else None
