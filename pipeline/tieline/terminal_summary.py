"""What a run shows on one screen: spots, the table of D in brief, what needs attention, and where the files are."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import pyarrow as pa
from rich.console import Console
from rich.table import Table
from rich.text import Text

from tieline.configuration import Session, configured_run_folder
from tieline.report.attention import attention
from tieline.report.currency import FILES, report_verdict
from tieline.report.left_out import by_reason
from tieline.report.sentences import count
from tieline.report.spots import spot_use
from tieline.terminal_console import printable
from tieline.terminal_results import brief_lines

MOST_THINGS = 3
NEEDED = (
    "ingest.spots", "screen", "calibrate", "pair", "pair.pairs", "pair.techniques", "classify", "assess",
)  # fmt: skip


def show_summary(
    console: Console, session: Session, tables: Mapping[str, pa.Table], files: Sequence[str]
) -> None:
    """One screen for a session of usual size; tables: those of `NEEDED`."""
    console.print(_spots(tables))
    for line in brief_lines(tables["classify"], console.width):
        console.print(line)
    things = attention(tables)
    if things:
        console.print(Text("Look at these first", style="bold"))
        shown = Table.grid(padding=(0, 1, 0, 0))
        shown.add_column(justify="right", style="bold yellow")
        shown.add_column()
        for number, one in enumerate(things[:MOST_THINGS], start=1):
            shown.add_row(f"{number}", Text(printable(one.text)))
        console.print(shown)
    _show_files(console, session, files, len(things) - MOST_THINGS)


def _spots(tables: Mapping[str, pa.Table]) -> Text:
    """`403 spots: 352 used whole, ...; left out by test: total 2, ...`."""
    spots = spot_use(tables)
    unknown = [place for place in range(spots.count) if spots.keys["material"][place] is None]
    used = sum(bool(spots.n_used[place]) for place in unknown)
    text = Text(count(len(unknown), "spot"), style="bold")
    text.append(
        f": {used} used, {len(unknown) - used} left out; {spots.count - len(unknown)} on reference materials. ",
        style="none",
    )
    reasons = by_reason(spots)
    if reasons:
        parts = [f"{reason.name} {reason.n_spots}" for reason in reasons]
        text.append(f"Left out, whole or in part, by {', '.join(parts)}.", style="none")
    return text


def _show_files(console: Console, session: Session, files: Sequence[str], n_more: int) -> None:
    hints = [f"{count(n_more, 'more thing')} in the report"] if n_more > 0 else []
    hints.append("every D, stage and remark: --all")
    console.print(Text("; ".join(hints), style="dim"))
    console.print(Text(f"Results: {session.run_folder}", style="bold"))
    if files:
        console.print(Text(f"  {', '.join(files)}"))
        return
    verdict = report_verdict(session)
    if verdict.state == "current":
        console.print(Text(f"  {', '.join(FILES)}"))
    else:
        state = (
            "no report yet" if verdict.state == "missing" else "the report there is of an earlier reduction"
        )
        console.print(Text(f"  {state}: {_report_command(session)}", style="yellow"))


def _report_command(session: Session) -> str:
    """The command that writes the report of these very results."""
    words = ["tieline report", str(session.path)]
    if session.run_folder != configured_run_folder(session):
        words += ["--out", str(session.run_folder.parent)]
    words += [f"--set '{override}'" for override in session.overrides]
    return " ".join(words)
