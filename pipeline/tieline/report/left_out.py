"""What was left out, by test and by person: the rows of `left_out.csv` and their counts."""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from tieline.report.conventions import short_convention
from tieline.report.sheets import Cell, Heading, Sheet
from tieline.report.source import Source
from tieline.report.spots import LeftOut, SpotUse
from tieline.rulings import Ruling
from tieline.screen.findings import RULING

SET_ASIDE = "set-aside"
KEYS = ("spot", "table", "row", "technique", "batch", "experiment", "phase", "grain")
HEADINGS = (
    Heading("spot", "", "label of the analysis; empty for cells set aside on reading"),
    Heading("table", "", "path of the spot table"),
    Heading("row", "1", "row in the table, as a spreadsheet counts it"),
    Heading("technique"),
    Heading("batch"),
    Heading("experiment"),
    Heading("phase"),
    Heading("grain"),
    Heading("analyte", "", "* : all the spot has; otherwise the analytes, or the column's header"),
    Heading("n_values", "1", "values left out"),
    Heading("why", "", "the tests, `ruling`, or `set-aside` for rows and cells set aside on reading"),
    Heading("decided_by", "", "`test`, `reading` for what was set aside, or who ruled"),
    Heading("date", "", "date of the ruling"),
    Heading("statistic", "1", "the first test's statistic"),
    Heading("threshold", "1", "what it was held against"),
    Heading("detail", "", "the findings in words"),
    Heading("convention", "", "what uncertainties and n mean in the files of this folder"),
)


@dataclass(frozen=True)
class Reason:
    """One test or person with what it alone or with others keeps out."""

    name: str
    n_spots: int
    n_values: int


def left_out_sheet(source: Source, spots: SpotUse) -> Sheet:
    """One row per spot and reason, then one per cell or row that was set aside on reading."""
    findings = _findings_by_spot(source)
    convention = short_convention(source.confidence)
    rows = [_row(source, spots, one, findings, convention) for one in spots.left_out]
    rows += [_set_aside(cell, convention) for cell in source.table("ingest.set_aside").to_pylist()]
    return Sheet("left out", HEADINGS, tuple([row[place] for row in rows] for place in range(len(HEADINGS))))


def by_test(spots: SpotUse) -> list[Reason]:
    """Tests in order of the values they keep out. A value that two tests keep out counts for both."""
    return _reasons(spots, lambda one: [code for code in one.why.split(", ") if code != RULING])


def by_reason(spots: SpotUse) -> list[Reason]:
    """Tests and, as one, all rulings on unknowns."""
    return _reasons(spots, lambda one: [] if one.of_reference else one.why.split(", "))


def by_person(source: Source, spots: SpotUse) -> list[Reason]:
    """Analysts in order of the values their rulings keep out of the phase means."""

    def analysts(one: LeftOut) -> list[str]:
        if one.of_reference or RULING not in one.why.split(", "):
            return []
        ruling = _ruling(source, _key(spots, one.spot), one.analytes)
        return [ruling.analyst] if ruling else []

    return _reasons(spots, analysts)


def ruled_references(source: Source, spots: SpotUse) -> list[Reason]:
    """Analysts in order of the values of reference materials that their rulings keep out of the calibration."""

    def analysts(one: LeftOut) -> list[str]:
        ruling = _ruling(source, _key(spots, one.spot), one.analytes) if one.of_reference else None
        return [ruling.analyst] if ruling else []

    return _reasons(spots, analysts)


def _reasons(spots: SpotUse, names: Callable[[LeftOut], list[str]]) -> list[Reason]:
    n_spots, n_values = Counter[str](), Counter[str]()
    seen: set[tuple[str, int]] = set()
    for one in spots.left_out:
        for name in names(one):
            n_values[name] += one.n_values
            n_spots[name] += (name, one.spot) not in seen
            seen.add((name, one.spot))
    return [Reason(name, n_spots[name], number) for name, number in n_values.most_common()]


def _findings_by_spot(source: Source) -> dict[tuple[str, int], list[dict[str, Any]]]:
    found: dict[tuple[str, int], list[dict[str, Any]]] = defaultdict(list)
    for finding in source.table("screen.findings").to_pylist():
        found[finding["table"], finding["row"]].append(finding)
    return found


def _key(spots: SpotUse, spot: int) -> tuple[str, str, int]:
    return spots.keys["spot"][spot], spots.keys["table"][spot], spots.keys["row"][spot]


def _ruling(source: Source, key: tuple[str, str, int], analytes: Sequence[str]) -> Ruling | None:
    """The ruling that drops these analytes of a spot, or the whole spot."""
    label, table, _row_number = key
    own = [
        ruling
        for ruling in source.rulings
        if ruling.spot == label and ruling.table in (None, table) and ruling.verdict == "drop"
    ]
    exact = [ruling for ruling in own if ruling.analyte in analytes]
    return next(iter(exact + [ruling for ruling in own if ruling.analyte == "*"]), None)


def _row(
    source: Source,
    spots: SpotUse,
    one: LeftOut,
    findings: dict[tuple[str, int], list[dict[str, Any]]],
    convention: str,
) -> list[Cell]:
    codes = one.why.split(", ")
    key = _key(spots, one.spot)
    own = [
        finding
        for finding in findings.get(key[1:], [])
        if finding["action"] == "drop"
        and finding["code"] in codes
        and (not one.analytes or finding["analyte"] is None or finding["analyte"] in one.analytes)
    ]
    tested = [finding for finding in own if finding["statistic"] is not None]
    ruling = _ruling(source, key, one.analytes) if RULING in codes else None
    return [
        *(spots.keys[name][one.spot] for name in KEYS),
        ", ".join(one.analytes) or "*",
        one.n_values,
        one.why,
        ruling.analyst if ruling else "test",
        ruling.date if ruling else None,
        tested[0]["statistic"] if tested else None,
        tested[0]["threshold"] if tested else None,
        "; ".join(dict.fromkeys(finding["detail"] for finding in own)),
        convention,
    ]


def _set_aside(cell: dict[str, Any], convention: str) -> list[Cell]:
    empty: list[Cell] = [None] * 5
    detail = f"{cell['reason']}: {cell['raw']}" if cell["raw"] else cell["reason"]
    return [
        None, cell["table"], cell["row"], *empty, cell["column"] or "*", cell["cells"], SET_ASIDE, "reading",
        None, None, None, detail, convention,
    ]  # fmt: skip
