"""What commands print: results to standard output, problems and progress to standard error."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from tieline.configuration import Session
from tieline.errors import Problem
from tieline.help_pages import page_for
from tieline.lock import SEAL_NAME
from tieline.manifest import read_manifest
from tieline.plan import Verdict, table_path
from tieline.runner import StageReport, tables_of
from tieline.stages import STAGES
from tieline.storage import read_table
from tieline.terminal_console import console as new_console
from tieline.terminal_console import printable
from tieline.terminal_results import partition_tables

STATE_STYLES = {"current": "green", "stale": "yellow", "missing": "yellow", "waiting": "cyan"}
MOST_REMARKS = 12


Progress = tuple[Callable[[str, str], None], Callable[[Sequence[Verdict]], None]]


@contextmanager
def progress(quiet: bool) -> Iterator[Progress]:
    """Callbacks for the running stage, shown on a terminal only, and for the plan before any work."""
    console = new_console(stderr=True, soft_wrap=True)
    if quiet:
        yield lambda stage, state: None, lambda verdicts: None
    elif not console.is_terminal:
        yield lambda stage, state: None, lambda verdicts: _show_plan(console, verdicts)
    else:
        with console.status("starting") as shown:
            yield (
                lambda stage, state: shown.update(f"{stage} {state}"),
                lambda verdicts: _show_plan(console, verdicts),
            )


def _show_plan(console: Console, verdicts: Sequence[Verdict]) -> None:
    """Which stages are recomputed and because of what; nothing on a first run, where all of them are."""
    stale = [verdict for verdict in verdicts if verdict.state == "stale"]
    for verdict in stale:
        console.print(
            Text(f"recomputing {verdict.stage}: {printable('; '.join(verdict.reasons))}", style="dim")
        )


def show_problems(problems: Sequence[Problem]) -> None:
    """Every problem on standard error, grouped by file in the order found."""
    console = new_console(stderr=True, soft_wrap=True)
    count = len(problems)
    console.print(Text(f"{count} problem{'s' if count > 1 else ''}; nothing was written.", style="bold red"))
    for problem in sorted(problems, key=lambda one: (one.file or "", one.row or 0)):
        console.print(Text(f"  {printable(problem)}"))
    page = page_for(problems)
    if page is not None:
        console.print(Text(f"More on this: tieline help {page}", style="dim"))


def show_machine_failure(error: Exception) -> None:
    """What stopped the program that is no fault of the input: a full disk, a folder that vanished, no memory."""
    what = error.strerror if isinstance(error, OSError) else "out of memory"
    place = f": {error.filename}" if isinstance(error, OSError) and error.filename is not None else ""
    out = new_console(stderr=True, soft_wrap=True)
    out.print(Text(f"stopped: {printable(what or error)}{printable(place)}", style="bold red"))
    out.print(
        Text(
            "Every result file is whole; `tieline status` tells what is current, and the next run completes it."
        )
    )


def show_pages(titles: Mapping[str, str]) -> None:
    """Names and headings of the documentation's pages."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for name in ("page", "about"):
        table.add_column(name)
    for name, title in titles.items():
        table.add_row(name, title)
    console = new_console()
    console.print(table)
    console.print("tieline help PAGE shows one of them.")


def show_page(markdown: str) -> None:
    """A page for the terminal; its plain Markdown where the output is not one."""
    console = new_console()
    if console.is_terminal:
        from rich.markdown import Markdown

        console.print(Markdown(markdown))
    else:
        print(markdown)


def show_run(
    session: Session, reports: Sequence[StageReport], *, files: Sequence[str] = (), everything: bool = False
) -> None:
    """One screen: spots, the table of D in brief, what needs attention, where the files are.

    `everything`, or a run that stopped early: stages, remarks and every D. `files`: what the report wrote.
    """
    console = new_console()
    complete = reports[-1].verdict.stage == STAGES[-1].name
    if complete and not everything:
        from tieline import terminal_summary

        terminal_summary.show_summary(console, session, tables_of(session, terminal_summary.NEEDED), files)
    else:
        _show_everything(console, session, reports)
        console.print(Text(f"Results: {session.run_folder}", style="bold"))
    for text in session.overrides:
        console.print(Text(f"With --set {printable(text)}", style="bold"))


def _show_everything(console: Console, session: Session, reports: Sequence[StageReport]) -> None:
    console.print(_stage_table(reports))
    _show_remarks(console, reports)
    path = table_path(session.run_folder, "classify")
    if reports[-1].verdict.stage in ("classify", "assess") and path.exists():
        for table in partition_tables(read_table(path, "classify"), console.width):
            console.print(table)
    from tieline import terminal_rulings

    terminal_rulings.show(console, session, reports)


def _stage_table(reports: Sequence[StageReport]) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for name in ("stage", "", "entered", "what became of it"):
        table.add_column(name)
    for report in reports:
        done = "recomputed" if report.recomputed else "current"
        ledger = report.ledger
        parts = ", ".join(f"{count} {name}" for name, count in ledger.outcomes.items() if count)
        table.add_row(report.verdict.stage, done, f"{ledger.entered} {ledger.unit}", printable(parts))
    return table


def _show_remarks(console: Console, reports: Sequence[StageReport]) -> None:
    remarks = [(report.verdict.stage, remark) for report in reports for remark in report.remarks]
    if not remarks:
        return
    console.print()
    console.print(Text("Remarks", style="bold"))
    for stage, remark in remarks[:MOST_REMARKS]:
        console.print(Text(f"  {stage}: {printable(remark)}"))
    if len(remarks) > MOST_REMARKS:
        console.print(Text(f"  and {len(remarks) - MOST_REMARKS} more in run.json"))


def show_status(session: Session, verdicts: Sequence[Verdict]) -> None:
    """One line per stage: its state and the reasons; and what `--set` changed."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for name in ("stage", "state", "because"):
        table.add_column(name)
    for verdict in verdicts:
        state = Text(verdict.state, style=STATE_STYLES[verdict.state])
        table.add_row(verdict.stage, state, printable("; ".join(verdict.reasons)))
    console = new_console()
    console.print(table)
    for text in _recorded_overrides(session):
        console.print(Text(f"the results were made with --set {printable(text)}"))
    if (session.run_folder / SEAL_NAME).exists():
        console.print(Text(f"sealed by {SEAL_NAME}: nothing is written to {session.run_folder}"))


def status_as_json(session: Session, verdicts: Sequence[Verdict], report: Verdict) -> dict[str, Any]:
    return {
        "session": session.settings.session,
        "run_folder": str(session.run_folder),
        "overrides": list(session.overrides),
        "overrides_of_the_results": _recorded_overrides(session),
        "sealed": (session.run_folder / SEAL_NAME).exists(),
        "stages": [vars(verdict) for verdict in verdicts],
        "report": {"state": report.state, "reasons": list(report.reasons)},
    }


def _recorded_overrides(session: Session) -> list[str]:
    return [str(text) for text in read_manifest(session.run_folder).get("overrides", [])]


def show_check(session: Session, reports: Sequence[StageReport]) -> None:
    """That nothing stands in the way, with the remarks a run would make."""
    console = new_console()
    console.print(Text(f"{session.path}: no problem found; nothing was written.", style="green"))
    _show_remarks(console, reports)


def show_start(path: Path, questions: Sequence[str]) -> None:
    """Where the configuration is and what is left to answer."""
    console = new_console(soft_wrap=True)
    console.print(Text(f"Wrote {printable(path)}", style="bold"))
    if questions:
        left = (
            "1 question is left; it" if len(questions) == 1 else f"{len(questions)} questions are left; each"
        )
        console.print(f"{left} is a line `# decide:` there:")
    for question in questions:
        console.print(Text(f"  {printable(question)}"))
    console.print(Text(f"Then: tieline check {printable(path)}"))


def check_as_json(reports: Sequence[StageReport]) -> dict[str, Any]:
    return {"problems": [], "stages": [_report_as_json(report) for report in reports]}


def run_as_json(session: Session, reports: Sequence[StageReport]) -> dict[str, Any]:
    """The run's account and, where it got that far, the rows of `classify`."""
    path = table_path(session.run_folder, "classify")
    rows = (
        read_table(path, "classify").to_pylist()
        if reports[-1].verdict.stage in ("classify", "assess")
        else []
    )
    return {
        "session": session.settings.session,
        "run_folder": str(session.run_folder),
        "overrides": list(session.overrides),
        "stages": [_report_as_json(report) for report in reports],
        "partition_coefficients": rows,
    }


def _report_as_json(report: StageReport) -> dict[str, Any]:
    ledger = report.ledger
    return {
        "stage": report.verdict.stage,
        "recomputed": report.recomputed,
        "state_before": report.verdict.state,
        "reasons": list(report.verdict.reasons),
        "ledger": {"unit": ledger.unit, "entered": ledger.entered, "outcomes": dict(ledger.outcomes)},
        "remarks": [str(remark) for remark in report.remarks],
    }
