"""What `compare` prints."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from tieline.notation import written
from tieline.terminal_console import console as new_console
from tieline.terminal_console import printable

MOST_ROWS = 30


def show_comparison(found: Mapping[str, Any]) -> None:
    """Settings, inputs, spots and the rule that left them out, D's by size of change, classes."""
    console = new_console()
    console.print(Text(f"A  {found['a']}\nB  {found['b']}", style="bold"))
    _lines(console, "Versions (A → B)", found["versions"])
    _lines(console, "Settings (A → B)", found["settings"])
    _lines(console, "Inputs", found["inputs"])
    _show(console, "Spots used in one and not in the other", _spots(found["spots"]), len(found["spots"]))
    title = f"D that changed: {len(found['D'])}, of {found['D_compared']} in both; in units of the smaller σ"
    _show(console, title, _coefficients(found["D"]), len(found["D"]))
    _show(console, "Classes that changed", _classes(found["classes"]), len(found["classes"]))
    if not any(found[name] for name in ("versions", "settings", "inputs", "spots", "D", "classes")):
        console.print(Text("No difference.", style="green"))


def _lines(console: Console, title: str, lines: Sequence[str]) -> None:
    if lines:
        console.print(Text(f"\n{title}", style="bold"))
    for line in lines:
        console.print(Text(f"  {printable(line)}"))


def _show(console: Console, title: str, table: Table, count: int) -> None:
    if not count:
        return
    console.print(Text(f"\n{title}", style="bold"))
    console.print(table)
    if count > MOST_ROWS:
        console.print(Text(f"  and {count - MOST_ROWS} more; see --json"))


def _spots(entries: Sequence[Mapping[str, Any]]) -> Table:
    table = _table("spot", "of", "used in", "left out in the other by", "values")
    for entry in entries[:MOST_ROWS]:
        of = entry["material"] or f"{entry['experiment']} {entry['phase']}"
        rule = f"{entry['rule']}: {entry['detail']}" if entry["detail"] else entry["rule"]
        names = entry["analytes"]
        values = ", ".join(names) if len(names) <= 2 else f"{len(names)}"
        table.add_row(printable(entry["spot"]), printable(of), entry["used_in"], printable(rule), values)
    return table


def _coefficients(entries: Sequence[Mapping[str, Any]]) -> Table:
    table = _table("experiment", "D", "element", "A", "B", "B − A", right=3)
    for entry in entries[:MOST_ROWS]:
        change = entry["change_in_sigma"]
        table.add_row(
            entry["experiment"],
            f"{entry['alpha']}/{entry['beta']}",
            entry["element"],
            _text(entry["a"]),
            _text(entry["b"]),
            "" if change is None else f"{change:+.2f} σ",
        )
    return table


def _classes(entries: Sequence[Mapping[str, Any]]) -> Table:
    table = _table("experiment", "D", "element", "A", "B")
    for entry in entries[:MOST_ROWS]:
        pair = f"{entry['alpha']}/{entry['beta']}"
        table.add_row(entry["experiment"], pair, entry["element"], entry["a"], entry["b"])
    return table


def _text(row: Mapping[str, Any] | None) -> str:
    return "none" if row is None else written(row)


def _table(*names: str, right: int = 0) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for position, name in enumerate(names):
        is_right = position >= len(names) - right
        table.add_column(name, justify="right" if is_right else "left", no_wrap=is_right)
    return table
