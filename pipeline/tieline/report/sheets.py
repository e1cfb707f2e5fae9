"""Plain rows with named columns: what the CSV files, the workbook and the LaTeX table are all made from."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import pyarrow as pa

from tieline.columns import CLASSIFY, PAIR
from tieline.notation import written
from tieline.report.conventions import conventions, short_convention
from tieline.report.source import Source
from tieline.report.spots import SpotUse
from tieline.settings import SessionSettings
from tieline.settings.ingest import IngestSettings
from tieline.tables import TableSpec

Cell = str | float | int | bool | None


@dataclass(frozen=True)
class Heading:
    """One column: `name`, its `unit` ("" for texts, "1" for pure numbers) and what it means."""

    name: str
    unit: str = ""
    meaning: str = ""


@dataclass(frozen=True)
class Sheet:
    """Columns of equal length. `shaded`: (row, column) of cells that were not used."""

    name: str
    headings: tuple[Heading, ...]
    columns: tuple[Sequence[Cell], ...]
    shaded: frozenset[tuple[int, int]] = field(default=frozenset())

    @property
    def n_rows(self) -> int:
        return len(self.columns[0]) if self.columns else 0


def declared_sheet(name: str, table: pa.Table, spec: TableSpec) -> Sheet:
    """A stage table as it is, every declared column."""
    headings = tuple(Heading(column.name, column.unit, column.meaning) for column in spec.columns)
    return Sheet(name, headings, tuple(table.column(heading.name).to_pylist() for heading in headings))


def partition_sheet(source: Source) -> Sheet:
    """Every D with its class; `written` is the rounded notation, `convention` says what the columns mean."""
    table = source.table("classify")
    sheet = declared_sheet("D", table, CLASSIFY)
    places = {heading.name: position for position, heading in enumerate(sheet.headings)}
    first = ["experiment", "alpha", "beta", "element", "D", "D_sd", "D_lo", "D_hi"]
    order = [*first, *(name for name in places if name not in first)]
    texts = [written(row) for row in table.select(["D", "D_sd", "D_lo", "D_hi", "kind"]).to_pylist()]
    convention = short_convention(source.confidence)
    headings = [sheet.headings[places[name]] for name in order]
    columns = [sheet.columns[places[name]] for name in order]
    headings.insert(
        4, Heading("written", "", "D(uncertainty in the last digits), < upper limit, > lower limit")
    )
    columns.insert(4, texts)
    headings.append(Heading("convention", "", "what the uncertainties and n mean"))
    columns.append([convention] * table.num_rows)
    return Sheet("D", tuple(headings), tuple(columns))


def means_sheet(source: Source) -> Sheet:
    """Phase means with every part of their uncertainty."""
    return declared_sheet("phase means", source.table("pair"), PAIR)


def runs_sheet(source: Source, spots: SpotUse) -> Sheet:
    """One row per experiment: its conditions, and the number of spots of every phase, used and all."""
    conditions = source.table("ingest.experiments").to_pylist()
    unknown = [spot for spot in range(spots.count) if spots.keys["material"][spot] is None]
    of_spot, phase_of_spot = spots.keys["experiment"], spots.keys["phase"]
    experiments = sorted(
        {row["experiment"] for row in conditions} | {of_spot[spot] or "" for spot in unknown}
    )
    given = {(row["experiment"], row["condition"]): row for row in conditions}
    headings: list[Heading] = [Heading("experiment")]
    columns: list[Sequence[Cell]] = [experiments]
    for name in dict.fromkeys(row["condition"] for row in conditions):
        headings.append(Heading(name, "as named"))
        columns.append([_number_or_text(given.get((experiment, name))) for experiment in experiments])
    everything = Counter((of_spot[spot] or "", phase_of_spot[spot]) for spot in unknown)
    used = Counter((of_spot[spot] or "", phase_of_spot[spot]) for spot in unknown if spots.n_used[spot])
    for phase in sorted({phase_of_spot[spot] for spot in unknown}):
        for title, number in (("spots", everything), ("spots used", used)):
            headings.append(Heading(f"{phase} {title}", "1", "used: at least one value enters a phase mean"))
            columns.append([number[experiment, phase] for experiment in experiments])
    return Sheet("runs", tuple(headings), tuple(columns))


def _number_or_text(row: Mapping[str, Any] | None) -> Cell:
    if row is None:
        return None
    cell: Cell = row["text"] if row["value"] is None else row["value"]
    return cell


def settings_sheet(source: Source) -> Sheet:
    """Every setting in effect, and whether it is the default."""
    rows = settings_rows(source)
    headings = (Heading("setting"), Heading("value"), Heading("default"), Heading("differs"))
    return Sheet("settings", headings, tuple([row[position] for row in rows] for position in range(4)))


def settings_rows(source: Source) -> list[tuple[str, str, str, str]]:
    """Setting, value, default, and `yes` where they differ. What only the tables say has no default."""
    defaults = SessionSettings.model_construct(
        session=source.settings.session, ingest=IngestSettings.model_construct(tables=())
    )
    default = _flat(defaults.model_dump(mode="json"))
    changed = _flat(source.settings.model_dump(mode="json", exclude_defaults=True))
    effective = _flat(source.settings.model_dump(mode="json"))
    return [
        (key, value, default.get(key, ""), "yes" if key in changed else "")
        for key, value in effective.items()
        if key != "session"
    ]


def _flat(value: Any, key: str = "") -> dict[str, str]:
    if isinstance(value, dict) and value:
        parts = {f"{key}.{name}" if key else name: item for name, item in value.items()}
    elif isinstance(value, list) and any(isinstance(item, dict) for item in value):
        parts = {f"{key}[{number}]": item for number, item in enumerate(value, start=1)}
    else:
        return {} if value in (None, {}, []) else {key: _plain(value)}
    return {name: text for part, item in parts.items() for name, text in _flat(item, part).items()}


def _plain(value: Any) -> str:
    if isinstance(value, list):
        return ", ".join(_plain(item) for item in value)
    return {True: "true", False: "false"}[value] if isinstance(value, bool) else str(value)


def readme_sheet(source: Source, sheets: Sequence[Sheet]) -> Sheet:
    """What the workbook holds, what every ± means, and where it comes from."""
    rows: list[tuple[str, str, str]] = [
        ("session", "", source.title),
        ("made by", "", f"tieline {source.version}"),
        ("fingerprint of the D's", "", source.fingerprint),
        *(("convention", term, meaning) for term, meaning in conventions(source.confidence)),
    ]
    for sheet in sheets:
        rows.append(("sheet", sheet.name, f"{sheet.n_rows} rows"))
        rows += [
            (f"column of {sheet.name}", heading.name, f"{heading.meaning}{_in_unit(heading.unit)}")
            for heading in sheet.headings
            if heading.meaning
        ]
    headings = (Heading("about"), Heading("name"), Heading("meaning"))
    return Sheet("readme", headings, tuple([row[position] for row in rows] for position in range(3)))


def _in_unit(unit: str) -> str:
    return f" [{unit}]" if unit not in ("", "1") else ""
