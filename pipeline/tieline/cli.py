"""The command line: parse, call, print. No science, no files, and nothing imported before it is needed."""

from __future__ import annotations

import io
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from tieline.configuration import Session

app = typer.Typer(
    name="tieline",
    help="Partition coefficients with honest intervals, from raw microprobe and laser spot tables.\n\n"
    "First steps: tieline demo, then tieline start YOUR-TABLES. All pages of the documentation: tieline help.",
    no_args_is_help=True,
    add_completion=True,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)

WRONG_INPUT, DIFFERENT, INTERRUPTED = 2, 3, 130
# How Python, Arrow and the system's loader tell that there is no memory for a thread or a library.
LACK_OF_MEMORY = ("can't start new thread", "Failed to launch worker thread", "failed to map segment")
MACHINE = 1  # a full disk, too little memory, a folder that vanished: nothing is wrong with the input

ConfigArgument = Annotated[
    Path, typer.Argument(metavar="CONFIG", help="Configuration of the session, a TOML file.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON only, on standard output.")]
OutOption = Annotated[
    Path | None,
    typer.Option("--out", metavar="DIR", help="Folder of run folders, instead of the configured one."),
]
SetOption = Annotated[
    list[str] | None,
    typer.Option(
        "--set",
        metavar="KEY=VALUE",
        help="Try a setting without editing the file, such as screen.total.sigmas=3; with --out the session's own "
        "results stay. Repeatable.",
    ),
]


def _print_versions(wanted: bool) -> None:
    if wanted:
        from tieline.versions import versions

        typer.echo(versions())
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool,
        typer.Option(
            "--version",
            is_eager=True,
            callback=_print_versions,
            help="Print the versions that results depend on, and stop.",
        ),
    ] = False,
) -> None:
    pass


@app.command()
def run(
    config: ConfigArgument,
    only: Annotated[
        str | None, typer.Option("--only", metavar="STAGE", help="Recompute this one stage.")
    ] = None,
    until: Annotated[
        str | None, typer.Option("--until", metavar="STAGE", help="Stop after this stage.")
    ] = None,
    fresh: Annotated[bool, typer.Option("--fresh", help="Recompute every stage.")] = False,
    out: OutOption = None,
    overrides: SetOption = None,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="Print nothing but problems.")] = False,
    everything: Annotated[
        bool, typer.Option("--all", help="Show every stage, remark and D instead of one screen.")
    ] = False,
    with_report: Annotated[
        bool, typer.Option("--report", help="Write the report too, where it is not current.")
    ] = False,
    json: JsonOption = False,
) -> None:
    """Reduce a session: recompute what is not current, show the results on one screen.

    Example: tieline run configs/ember.toml
    """
    from tieline import runner, terminal

    if only is not None and until is not None:
        _fail_usage("--only and --until exclude each other.")
    session = _load(config, overrides, out)
    files: list[str] = []
    with terminal.progress(quiet or json) as (progress, planned):
        reports = runner.run(
            session,
            only=only,
            until=until,
            fresh=fresh,
            progress=progress,
            planned=planned,
            after=lambda n_stages: files.extend(_report_after(session, n_stages, with_report)),
        )
    if json:
        from tieline import terminal_rulings

        _print_json(terminal.run_as_json(session, reports) | terminal_rulings.as_json(session, reports))
    elif not quiet:
        terminal.show_run(session, reports, files=files, everything=everything)


def _report_after(session: Session, n_stages: int, wanted: bool) -> tuple[str, ...]:
    """Renews the report after a run through all stages where it is wanted, and the description of the folder."""
    from tieline.crate import write_crate
    from tieline.stages import STAGES

    if n_stages < len(STAGES) or not (wanted or session.settings.report.after_run):
        write_crate(session)
        return ()
    from tieline.report.currency import FILES
    from tieline.report.write import refresh_report

    refresh_report(session)
    return (*FILES, *write_crate(session))


@app.command()
def check(config: ConfigArgument, overrides: SetOption = None, json: JsonOption = False) -> None:
    """Find every problem of a configuration and its tables at once; writes nothing.

    Example: tieline check configs/ember.toml
    """
    from tieline import runner, terminal

    session = _load(config, overrides, None)
    reports = runner.check(session)
    if json:
        _print_json(terminal.check_as_json(reports))
    else:
        terminal.show_check(session, reports)


@app.command()
def status(
    config: ConfigArgument, out: OutOption = None, overrides: SetOption = None, json: JsonOption = False
) -> None:
    """Show which stages, and whether the report, are current, which are stale and because of what.

    Example: tieline status configs/ember.toml
    """
    from tieline import runner, terminal
    from tieline.report.currency import report_verdict

    session = _load(config, overrides, out)
    verdicts, report = runner.status(session), report_verdict(session)
    if json:
        _print_json(terminal.status_as_json(session, verdicts, report))
    else:
        terminal.show_status(session, [*verdicts, report])


@app.command()
def report(
    config: ConfigArgument,
    figures: Annotated[
        Path | None,
        typer.Option("--figures", metavar="DIR", help="Also write the pictures there, as SVG and PDF."),
    ] = None,
    out: OutOption = None,
    overrides: SetOption = None,
    json: JsonOption = False,
) -> None:
    """Write the report from the results of the last run: page, tables, methods paragraph.

    Example: tieline report configs/ember.toml --figures figures
    """
    from tieline.crate import write_crate
    from tieline.report.write import write_report

    session = _load(config, overrides, out)
    paths = write_report(session, figures)
    written = [str(path) for path in (*paths, *(session.run_folder / name for name in write_crate(session)))]
    if json:
        _print_json({"written": written})
    else:
        from tieline.terminal_console import printable

        for path in written:
            typer.echo(printable(path))


@app.command()
def start(
    tables: Annotated[
        list[Path], typer.Argument(metavar="TABLE...", help="Spot tables, in any accepted format.")
    ],
    to: Annotated[
        Path | None,
        typer.Option(
            "--to", metavar="FILE", help="Configuration to write; session.toml beside the first table."
        ),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Write a first configuration for tables never seen before, with questions where they do not tell.

    Example: tieline start probe.csv laser.csv
    """
    from tieline import terminal
    from tieline.starting.write import write_first_configuration

    path, questions = write_first_configuration(tables, to)
    if json:
        _print_json({"configuration": str(path), "questions": questions})
    else:
        terminal.show_start(path, questions)


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="Where the demo session is copied.")] = Path(
        "tieline-demo"
    ),
    json: JsonOption = False,
) -> None:
    """Copy the demo session, invented for the purpose, into a folder and reduce it there.

    Example: tieline demo my-first-session
    """
    from tieline.demo import copy_demo

    config = copy_demo(folder)
    run(
        config,
        only=None,
        until=None,
        fresh=False,
        out=None,
        overrides=None,
        quiet=False,
        everything=False,
        with_report=True,
        json=json,
    )


@app.command()
def trace(
    config: ConfigArgument,
    experiment: Annotated[str, typer.Argument(metavar="EXPERIMENT", help="Experiment as in the table of D.")],
    pair: Annotated[str, typer.Argument(metavar="ALPHA/BETA", help="The two phases, such as olivine/glass.")],
    element: Annotated[str, typer.Argument(metavar="ELEMENT", help="Element symbol.")],
    out: OutOption = None,
    overrides: SetOption = None,
    json: JsonOption = False,
) -> None:
    """Follow one D back to its spots, findings, rulings, uncertainty budget and the cells of the tables.

    Example: tieline trace configs/ember.toml EM-02 olivine/glass Ni
    """
    from tieline import runner
    from tieline.tracing.page import Source
    from tieline.tracing.page import trace as trace_page

    alpha, separator, beta = pair.partition("/")
    if not (alpha and separator and beta):
        _fail_usage(f'"{pair}" is not of the form ALPHA/BETA, such as olivine/glass.')
    session, tables, files = runner.finished(_load(config, overrides, out), "classify")
    page = trace_page(Source(tables, session.settings, files), experiment, alpha, beta, element)
    if json:
        _print_json(page)
    else:
        from tieline.terminal_trace import show_trace

        show_trace(page)


@app.command()
def audit(
    run_folder: Annotated[Path, typer.Argument(metavar="RUN_FOLDER", help="Folder that a run wrote.")],
    against: Annotated[
        Path | None,
        typer.Option("--against", metavar="LABFILE", help="Settings of the laboratory, a TOML file."),
    ] = None,
    seal: Annotated[
        bool,
        typer.Option(
            "--seal",
            help="Seal the folder if nothing differs, its report is current and nothing was decided since the run; later "
            "runs refuse to write there.",
        ),
    ] = False,
    json: JsonOption = False,
) -> None:
    """Verify every file against its recorded digests and run the chain again; list what was left out and why.

    Exit status 3 where anything differs, 2 where nothing does but the folder was to be sealed and is not ready.

    Example: tieline audit example_runs/ember
    """
    from tieline.auditing.audit import audit as audit_folder

    result = audit_folder(run_folder, against=against, with_seal=seal)
    if json:
        _print_json(result.as_json())
    else:
        from tieline.terminal_audit import show_audit

        show_audit(result)
    if result.differences:
        raise typer.Exit(DIFFERENT)
    if seal and not result.sealed:
        raise typer.Exit(WRONG_INPUT)


@app.command()
def compare(
    run_a: Annotated[Path, typer.Argument(metavar="RUN_A", help="Run folder that changes are counted from.")],
    run_b: Annotated[Path, typer.Argument(metavar="RUN_B", help="Run folder that is compared with it.")],
    json: JsonOption = False,
) -> None:
    """Show what differs between two reductions: settings, spots used and by which rule, D, class.

    Example: tieline compare example_runs/ember other_runs/ember
    """
    from tieline import comparing

    found = comparing.compare(*comparing.read_reductions(run_a, run_b))
    if json:
        _print_json(found)
    else:
        from tieline.terminal_compare import show_comparison

        show_comparison(found)


@app.command()
def archive(
    root: Annotated[Path, typer.Argument(metavar="ROOT", help="Folder above the sessions.")],
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="DATASET", help="Folder of the dataset; ROOT/archive where not given."),
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option(
            "--scheduler", metavar="ADDRESS", help="A running Dask scheduler, instead of own workers."
        ),
    ] = None,
    workers: Annotated[
        int | None,
        typer.Option(
            "--workers", metavar="N", min=1, help="Worker processes; one per processor if not given."
        ),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Reduce every session below a folder that is not current, and gather all D in one dataset.

    Each session is reduced on its own; one that fails is reported and does not stop the others.

    Example: tieline archive sessions --workers 4
    """
    from tieline import terminal_archive
    from tieline.archive.command import reduce_archive

    with terminal_archive.progress(json) as (started, finished):
        summary = reduce_archive(
            root, out=out, scheduler=scheduler, workers=workers, started=started, finished=finished
        )
    if json:
        _print_json(summary.as_json())
    else:
        terminal_archive.show(summary)
    if summary.failures:
        raise typer.Exit(WRONG_INPUT)


@app.command(name="help")
def help_(
    page: Annotated[
        str | None, typer.Argument(metavar="[PAGE]", help="Name of a page; all names without it.")
    ] = None,
    json: JsonOption = False,
) -> None:
    """Show a page of the documentation, or list the pages.

    Example: tieline help own-tables
    """
    from tieline import help_pages, terminal

    if page is not None:
        text = help_pages.read_page(page)
        _print_json({"page": page, "markdown": text}) if json else terminal.show_page(text)
        return
    titles = {name: help_pages.title(path) for name, path in help_pages.pages().items()}
    _print_json(titles) if json else terminal.show_pages(titles)


def main() -> None:
    """Entry point: turns what a user can get wrong into messages and exit status 2."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # what its encoding lacks must not stop the program
            stream.reconfigure(errors="replace")
    try:
        status = app(standalone_mode=False)
        if sys.stdout is not None:
            sys.stdout.flush()
        sys.exit(status if isinstance(status, int) else 0)
    except (KeyboardInterrupt, typer.Abort):
        sys.stderr.write("interrupted; every result file is whole, and the next run completes them\n")
        sys.exit(INTERRUPTED)
    except BrokenPipeError:
        # Whoever read the output has left; nothing more can be said there, not even by the interpreter as it ends.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(MACHINE)
    except Exception as error:
        sys.exit(_exit_status(error))


def _exit_status(error: Exception) -> int:
    # What the parser finds wrong with the command line knows how to show itself.
    show = getattr(error, "show", None)
    if callable(show):
        from tieline.terminal_console import printable

        error.message = printable(getattr(error, "message", ""))  # type: ignore[attr-defined]
        show()
        return WRONG_INPUT
    if isinstance(error, OSError | MemoryError) or any(text in str(error) for text in LACK_OF_MEMORY):
        try:
            from tieline.terminal import show_machine_failure

            show_machine_failure(error)
        except (ImportError, MemoryError, RuntimeError):  # not even memory to say so
            sys.stderr.write("stopped: out of memory\n")
        return MACHINE
    from tieline.errors import InputError

    if isinstance(error, InputError):
        from tieline import terminal

        terminal.show_problems(error.problems)
        return WRONG_INPUT
    raise error


def _load(config: Path, overrides: list[str] | None, out: Path | None) -> Session:
    from tieline import configuration

    session, problems = configuration.read(config, overrides=overrides or (), out=out)
    if problems:
        from tieline.errors import InputError
        from tieline.runner import problems_of

        raise InputError([*problems, *problems_of(session)])
    return session


def _print_json(value: Any) -> None:
    from tieline.terminal_console import json_for_output

    sys.stdout.write(json_for_output(value) + "\n")


def _fail_usage(text: str) -> None:
    raise typer.BadParameter(text)


if __name__ == "__main__":
    main()
