"""The page: one HTML file that holds its data, its style and its scripts, and asks for nothing else."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import replace
from importlib.resources import files
from typing import Any

import pyarrow as pa

from tieline.columns import ASSESS
from tieline.notation import written
from tieline.report.attention import attention
from tieline.report.compact import script_json
from tieline.report.conventions import conventions, percent, short_convention
from tieline.report.currency import stamp
from tieline.report.left_out import Reason, by_person, by_test, ruled_references
from tieline.report.page_data import Curve, page_data
from tieline.report.sheets import Cell, Heading, Sheet, declared_sheet, runs_sheet, settings_rows
from tieline.report.source import Source
from tieline.report.spots import SpotUse
from tieline.rulings_effect import leaning_remarks, ruling_effects

SCRIPTS = ("base.js", "plot.js", "pictures.js", "table.js", "spot.js", "main.js")
SECTIONS = (
    ("summary", "Summary"), ("table", "Table of D"), ("radius", "Ionic radius"), ("elements", "Elements"),
    ("strips", "Spots"), ("overlap", "Overlap"), ("distance", "Distance"), ("sums", "Totals"),
    ("reference", "Reference materials"), ("budget", "Budget"), ("evidence", "Evidence"), ("left-out", "Left out"),
    ("settings", "Settings"), ("methods", "Methods"),
)  # fmt: skip


def page(source: Source, spots: SpotUse, left_out: Sheet, methods: str, curves: Sequence[Curve] = ()) -> str:
    """The whole file as text. `left_out` and `methods` are those of the hand-over files."""
    import jinja2
    from markupsafe import Markup

    folder = files("tieline.report") / "page"
    script = "\n".join((folder / name).read_text(encoding="utf-8") for name in SCRIPTS)
    environment = jinja2.Environment(autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True)
    environment.globals["grid"] = lambda sheet: Markup(_grid(environment, sheet))
    template = environment.from_string((folder / "report.html.jinja").read_text(encoding="utf-8"))
    remarks = [
        (stage, _remark(remark))
        for stage, record in source.records.items()
        for remark in record.get("remarks", ())
    ]
    checks = declared_sheet("checks", _most_telling_first(source.table("assess")), ASSESS)
    data = page_data(source, spots, curves)
    rulings = source.settings.screen.rulings
    return template.render(
        # Markup: our own style and scripts, and JSON whose every < is escaped.
        style=Markup((folder / "page.css").read_text(encoding="utf-8")),
        script=Markup(script),
        script_digest=base64.b64encode(hashlib.sha256(script.encode()).digest()).decode(),
        data=Markup(script_json(data)),
        title=source.title,
        stamp=stamp(source.records, source.settings),
        version=source.version,
        fingerprint=source.fingerprint,
        level=percent(source.confidence),
        n_experiments=len(set(source.table("classify").column("experiment").to_pylist())),
        sections=SECTIONS,
        counts=_counts(source, spots),
        attention=attention(source.tables),
        runs=_short(runs_sheet(source, spots)),
        stages=_stages(source),
        remarks=remarks,
        conventions=conventions(source.confidence),
        convention=short_convention(source.confidence),
        checks=checks,
        ranges=any(
            one["expected_lo"] is not None and one["expected_hi"] is not None for one in data["checks"]
        ),
        drawn={name: bool(data[name]) for name in ("trends", "exchange", "balance")},
        effects=_effects(source),
        leaning=leaning_remarks(source.tables) if source.rulings else [],
        by_test=_reasons("test", by_test(spots)),
        by_person=_reasons("analyst", [*by_person(source, spots), *_of_references(source, spots)]),
        left_out=_left_out_rows(left_out, spots),
        rulings_file=f" ({rulings})" if rulings else ", which is not set yet",
        settings=_changed(source, reading=False),
        reading=_changed(source, reading=True),
        methods=methods,
    )


_GRID = """<div class="scroll"><table><thead><tr>
{% for one in sheet.headings %}<th scope="col"{{ right if numeric[loop.index0] }}>{{ one.name }}</th>{% endfor %}
</tr></thead><tbody>
{% for row in rows %}<tr>{% for text, is_number in row %}<td{{ right if is_number }}>{{ text }}</td>{% endfor %}</tr>
{% endfor %}</tbody></table></div>"""


def _grid(environment: Any, sheet: Sheet) -> str:
    from markupsafe import Markup

    rows = [[_shown(cell) for cell in row] for row in zip(*sheet.columns, strict=True)]
    numeric = [any(row[place][1] for row in rows) for place in range(len(sheet.headings))]
    return str(
        environment.from_string(_GRID).render(
            sheet=sheet, rows=rows, numeric=numeric, right=Markup(' class="num"')
        )
    )


def _shown(cell: Cell) -> tuple[str, bool]:
    """The text of a cell, and whether it is a number."""
    if cell is None:
        return "", False
    if isinstance(cell, bool):
        return ("yes" if cell else "no"), False
    return (cell, False) if isinstance(cell, str) else (f"{cell:.6g}", True)


def _most_telling_first(checks: pa.Table) -> pa.Table:
    """What differs on top, then what is consistent, and what cannot be told."""
    order = ("differs", "consistent", "cannot tell")
    verdicts = checks.column("verdict").to_pylist()
    return checks.take(
        pa.array(sorted(range(len(verdicts)), key=lambda row: order.index(verdicts[row])), pa.int64())
    )


def _remark(remark: Any) -> str:
    return f"{remark['place']}: {remark['message']}" if remark.get("place") else str(remark["message"])


def _counts(source: Source, spots: SpotUse) -> list[tuple[int, str]]:
    unknown = [place for place in range(spots.count) if spots.keys["material"][place] is None]
    used = sum(1 for place in unknown if spots.n_used[place])
    classes = source.table("classify").column("class").to_pylist()
    usual = ("compatible", "incompatible", "highly incompatible")
    names = (*usual, *source.settings.classify.extra, "unresolved")
    return [
        (len(unknown), "spots on unknowns"),
        (used, "of them used"),
        (len(unknown) - used, "left out whole"),
        (spots.count - len(unknown), "spots on reference materials"),
        (len(classes), "partition coefficients"),
        *((classes.count(name), name) for name in names),
    ]


def _short(runs: Sheet) -> Sheet:
    """`used of all` in one column per phase instead of two."""
    headings: list[Heading] = []
    columns: list[Sequence[Cell]] = []
    for place, heading in enumerate(runs.headings):
        if heading.name.endswith(" spots"):
            headings.append(Heading(heading.name.removesuffix(" spots") + ", used of all spots"))
            pairs = zip(runs.columns[place + 1], runs.columns[place], strict=True)
            columns.append([f"{used} of {every}" if every else None for used, every in pairs])
        elif not heading.name.endswith(" spots used"):
            headings.append(heading)
            columns.append(runs.columns[place])
    return Sheet("runs", tuple(headings), tuple(columns))


def _stages(source: Source) -> Sheet:
    rows = [
        (name, f"{record['ledger']['entered']} {record['ledger']['unit']}",
         ", ".join(f"{number} {what}" for what, number in record["ledger"]["outcomes"].items() if number))
        for name, record in source.records.items()
    ]  # fmt: skip
    headings = (Heading("stage"), Heading("entered"), Heading("what became of it"))
    return Sheet("stages", headings, tuple([row[place] for row in rows] for place in range(3)))


def _of_references(source: Source, spots: SpotUse) -> Iterable[Reason]:
    for reason in ruled_references(source, spots):
        yield replace(reason, name=f"{reason.name}, reference materials")


def _reasons(title: str, reasons: Sequence[Reason]) -> Sheet:
    headings = (Heading(title), Heading("spots"), Heading("values"))
    columns = (
        [one.name for one in reasons],
        [one.n_spots for one in reasons],
        [one.n_values for one in reasons],
    )
    return Sheet(title, headings, columns)


def _left_out_rows(sheet: Sheet, spots: SpotUse) -> list[dict[str, Any]]:
    column = {heading.name: sheet.columns[place] for place, heading in enumerate(sheet.headings)}
    place_of = {
        key: spot for spot, key in enumerate(zip(spots.keys["table"], spots.keys["row"], strict=True))
    }
    return [
        {
            "place": place_of.get((column["table"][row], column["row"][row]))
            if column["spot"][row]
            else None,
            "spot": column["spot"][row] or f"{column['table'][row]}, row {column['row'][row]}",
            "phase": column["phase"][row] or "",
            "analytes": "all" if column["analyte"][row] == "*" else column["analyte"][row],
            "why": column["why"][row],
            "by": f"{column['decided_by'][row]} {column['date'][row] or ''}".rstrip(),
            "detail": column["detail"][row],
        }
        for row in range(sheet.n_rows)
    ]


def _effects(source: Source) -> Sheet:
    """D's that the rulings change by more than a standard uncertainty."""
    found = ruling_effects(source.tables, source.settings, accepted=source.accepted) if source.rulings else []
    names = ("experiment", "pair", "element", "with rulings", "without", "change, standard uncertainties")
    rows = [
        (
            one.key[0],
            f"{one.key[1]}/{one.key[2]}",
            one.key[3],
            written(one.with_rulings) if one.with_rulings else "none",
            written(one.without) if one.without else "none",
            one.change,
        )
        for one in found
    ]
    columns = tuple([row[place] for row in rows] for place in range(len(names)))
    return Sheet("effects", tuple(Heading(name) for name in names), columns)


def _changed(source: Source, reading: bool) -> Sheet:
    """Settings that differ from their defaults: those that say how tables are read, or all others."""
    rows = [row for row in settings_rows(source) if row[3] and row[0].startswith("ingest.") == reading]
    headings = (Heading("setting"), Heading("value"), Heading("default"))
    return Sheet("settings", headings, tuple([row[place] for row in rows] for place in range(3)))
