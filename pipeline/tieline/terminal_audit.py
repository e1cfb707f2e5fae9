"""The page that `audit` prints."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from tieline.auditing.audit import Audit
from tieline.report.sentences import count
from tieline.terminal_console import console as new_console
from tieline.terminal_console import printable

MOST_LINES = 30
SHOWN_OF_DIGEST = 16


def show_audit(audit: Audit) -> None:
    """Differences first; then what was left out, settings, reference materials and labels."""
    console = new_console()
    console.print(Text(f"Audit of {audit.run_folder}, session {audit.session or 'unknown'}", style="bold"))
    _show_differences(console, audit)
    for note in audit.notes:
        console.print(Text(f"note: {printable(note)}"))
    if audit.sealed:
        console.print(Text("sealed: later runs refuse to write here"))
    _show_left_out(console, audit)
    _section(console, f"Settings that differ from {audit.deviations_from}", audit.deviations)
    _section(console, "Tried on the command line (--set)", audit.overrides, none=None)
    _show_reference_materials(console, audit.reference_materials)
    _section(console, "Unmatched labels", audit.unmatched_labels)
    _section(console, "Remarks of the run", audit.remarks)
    inputs = [f"{digest[:SHOWN_OF_DIGEST]}  {path}" for path, digest in sorted(audit.inputs.items())]
    _section(console, f"Inputs, first {SHOWN_OF_DIGEST} digits of their SHA-256", inputs)


def _show_differences(console: Console, audit: Audit) -> None:
    checked = audit.checked
    if not audit.differences:
        text = (
            f"No difference: {checked['stage_files']} stage files, {checked['inputs']} inputs, the settings in effect "
            f"and the manifest fit their digests, the accounts add up, and {checked['recomputed_alike']} stage files "
            f"came out the same when recomputed; {_report(checked['report_files'])}."
        )
        console.print(Text(text, style="green"))
        return
    count = len(audit.differences)
    console.print(Text(f"{count} difference{'s' if count > 1 else ''}", style="bold red"))
    table = _table("what", "file", "difference")
    for difference in audit.differences:
        table.add_row(difference.kind, printable(difference.file), printable(difference.detail))
    console.print(table)


def _report(n_files: int) -> str:
    return f"so did the {n_files} files of the report" if n_files else "no report was compared"


def _show_left_out(console: Console, audit: Audit) -> None:
    console.print()
    used = audit.used_values
    heading = "Left out" if used is None else (
        f"Left out: of {used['of_unknowns']} values of unknowns {used['used']} are used"
    )  # fmt: skip
    console.print(Text(heading, style="bold"))
    if audit.left_out["tests"]:
        table = _table("by", "spots found", "only by this", "spots left out", "values left out", right=4)
        for row in audit.left_out["tests"]:
            names = ("spots_found", "spots_only_by_this", "spots_left_out", "values_left_out")
            table.add_row(row["test"], *(str(row[name]) for name in names))
        console.print(table)
    for row in audit.left_out["set_aside"]:
        where = f"{row['table']}, first in row {row['first_row']}"
        console.print(
            Text(f"  set aside by ingest: {row['lines']} lines, {printable(row['reason'])} ({where})")
        )
    _section(console, "Rulings", (_ruling(row) for row in audit.left_out["rulings"]), gap=False)
    _section(console, "Hand exclusions that lean one way", audit.leaning, none=None, gap=False)


def _ruling(row: dict[str, Any]) -> str:
    what = "whole spot" if row["analyte"] is None else row["analyte"]
    who = f"{row['analyst']}, {row['date']}" if row["analyst"] else "unnamed"
    of = f"reference material {row['material']}" if row["material"] else f"{row['experiment']} {row['phase']}"
    return f"{row['verdict']} {row['spot']} ({of}, {what}) by {who}: {row['reason']}"


def _show_reference_materials(console: Console, materials: Sequence[dict[str, Any]]) -> None:
    console.print()
    console.print(Text("Reference materials", style="bold"))
    if not materials:
        console.print(Text("  none measured"))
        return
    ruled = any(row["values_ruled_out"] for row in materials)
    names = ("batch", "material", "spots", *(["values ruled out"] if ruled else []), "pass", "fail")
    table = _table(*names, "measured/accepted of those that fail", right=0)
    for row in materials:
        failed = ", ".join(
            f"{one['element']} {one['ratio']:.3f}±{one['ratio_se']:.3f}" for one in row["failed"]
        )
        table.add_row(
            row["batch"],
            row["material"],
            str(row["n_spots"]),
            *([_values_ruled_out(row)] if ruled else []),
            str(row["passed"]),
            str(len(row["failed"])),
            failed,
        )
    console.print(table)


def _values_ruled_out(row: dict[str, Any]) -> str:
    number = row["values_ruled_out"]
    return f"{number} of {count(row['spots_ruled_out'], 'spot')}" if number else ""


def _section(
    console: Console, title: str, lines: Iterable[str], *, none: str | None = "  none", gap: bool = True
) -> None:
    lines = list(lines)
    if not lines and none is None:
        return
    if gap:
        console.print()
    console.print(Text(title, style="bold"))
    for line in lines[:MOST_LINES]:
        console.print(Text(f"  {printable(line)}"))
    if len(lines) > MOST_LINES:
        console.print(Text(f"  and {len(lines) - MOST_LINES} more; see --json"))
    if not lines and none is not None:
        console.print(Text(none))


def _table(*names: str, right: int = 0) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for position, name in enumerate(names):
        table.add_column(name, justify="right" if 0 < position <= right else "left")
    return table
