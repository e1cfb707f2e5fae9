"""What `archive` prints: a bar while it runs, on a terminal only, then a summary with every failure."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn
from rich.text import Text

from tieline.archive.command import Summary
from tieline.archive.unit import CURRENT, FAILED, REDUCED, Outcome
from tieline.terminal_console import console, printable

Callbacks = tuple[Callable[[int], None], Callable[[Outcome], None]]


@contextmanager
def progress(quiet: bool) -> Iterator[Callbacks]:
    """Callbacks for the number of sessions and for every outcome as it comes."""
    out = console(stderr=True, soft_wrap=True)
    if quiet or not out.is_terminal:
        yield lambda count: None, lambda outcome: None
        return
    columns = (
        TextColumn("sessions"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        TextColumn("{task.fields[last]}"),
    )
    with Progress(*columns, console=out, transient=True) as bar:
        task = bar.add_task("", total=None, last="")
        yield (
            lambda count: bar.update(task, total=count),
            lambda outcome: bar.update(task, advance=1, last=printable(outcome.unit.name)),
        )


def show(summary: Summary) -> None:
    """Counts and places on standard output, every failure with its message on standard error."""
    errors = console(stderr=True, soft_wrap=True)
    for outcome in summary.failures:
        errors.print(Text(f"{printable(outcome.unit.name)}: not reduced", style="bold red"))
        for line in outcome.message.splitlines():
            errors.print(Text(f"  {printable(line)}"))
    out = console(soft_wrap=True)
    counts = ", ".join(f"{summary.count(state)} {state}" for state in (REDUCED, CURRENT, FAILED))
    out.print(Text(f"{len(summary.outcomes)} sessions: {counts}"))
    values = sum(outcome.row.get("n_D") or 0 for outcome in summary.outcomes)
    out.print(Text(f"{values} partition coefficients: {summary.dataset}"))
    out.print(Text(f"Sessions, one per row: {summary.sessions}"))
    for part in summary.kept:
        out.print(Text(f"besides, earlier results of a session that was not reduced: {printable(part)}"))
    for part in summary.left_over:
        out.print(Text(f"of no session found any more: {printable(part)}; delete it if it is not wanted"))
