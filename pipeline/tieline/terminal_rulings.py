"""What the rulings of a session do to its results, after a run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from tieline import runner
from tieline.configuration import Session
from tieline.notation import written
from tieline.rulings_effect import KEYS, RulingEffect, has_rulings, leaning_remarks, ruling_effects
from tieline.runner import StageReport
from tieline.stages import STAGES

MOST_ROWS = 20


def show(console: Console, session: Session, reports: Sequence[StageReport]) -> None:
    """D's with and without the rulings where they matter, and remarks where exclusions lean one way."""
    found = _effects(session, reports)
    if found is None:
        return
    effects, remarks = found
    if effects:
        console.print(effects_table(effects))
        if len(effects) > MOST_ROWS:
            console.print(Text(f"  and {len(effects) - MOST_ROWS} more; see --json"))
    else:
        console.print(Text("Rulings: none changes a D by more than its standard uncertainty"))
    for remark in remarks:
        console.print(Text(f"  {remark}"))


def effects_table(effects: Sequence[RulingEffect]) -> Table:
    """One row per D that the rulings change."""
    table = Table(
        title="Rulings that change D by more than its standard uncertainty",
        title_justify="left", title_style="bold", box=None, pad_edge=False, padding=(0, 2, 0, 0),
    )  # fmt: skip
    table.add_column("experiment", no_wrap=True)
    table.add_column("D")
    table.add_column("element")
    for name in ("with rulings", "without", "change"):
        table.add_column(name, justify="right", no_wrap=True)
    for effect in effects[:MOST_ROWS]:
        experiment, alpha, beta, element = effect.key
        change = "" if effect.change is None else f"{effect.change:+.1f} σ"
        table.add_row(
            experiment, f"{alpha}/{beta}", element, _text(effect.with_rulings), _text(effect.without), change
        )
    return table


def _text(row: Mapping[str, Any] | None) -> str:
    return "none" if row is None else written(row)


def as_json(session: Session, reports: Sequence[StageReport]) -> dict[str, Any]:
    """The same as plain data."""
    found = _effects(session, reports)
    effects, remarks = found if found is not None else ([], [])
    return {"rulings": {"effects": [effect_as_json(effect) for effect in effects], "remarks": remarks}}


def effect_as_json(effect: RulingEffect) -> dict[str, Any]:
    names = ("D", "D_sd", "D_lo", "D_hi", "kind", "n_alpha", "n_beta")
    return dict(zip(KEYS, effect.key, strict=True)) | {
        "with_rulings": effect.with_rulings and {name: effect.with_rulings[name] for name in names},
        "without_rulings": effect.without and {name: effect.without[name] for name in names},
        "change_in_sigma": effect.change,
    }


def _effects(session: Session, reports: Sequence[StageReport]) -> tuple[list[RulingEffect], list[str]] | None:
    """None where there is no ruling, or the run stopped before there was a D."""
    done = {report.verdict.stage for report in reports}
    if "partition" not in done or session.settings.screen.rulings is None:
        return None
    tables = runner.tables_of(session, (name for stage in STAGES for name in stage.outputs))
    if not has_rulings(tables["screen.findings"]):
        return None
    accepted = runner.accepted_values(session)
    return ruling_effects(tables, session.settings, accepted=accepted), leaning_remarks(tables)
