"""Writes the reference pages from the code, so that they cannot say something else than the program does.

    python docs/generate_reference.py            writes docs/reference/*.md and docs/methods/measured.md

A test compares the pages with what this would write.
"""

from __future__ import annotations

import csv
import inspect
import re
import sys
import typing
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, get_args

DOCS = Path(__file__).resolve().parent
sys.path.insert(0, str(DOCS.parent / "pipeline"))

MADE = "<!-- Made by docs/generate_reference.py; change the code, not this page. -->\n"


def pages() -> dict[str, str]:
    """Path below docs/ to text of every generated page."""
    return {
        "reference/commands.md": commands(),
        "reference/settings.md": settings(),
        "reference/columns.md": columns(),
        "reference/findings.md": findings(),
        "reference/stages.md": stages(),
        "reference/python.md": interface(),
        "methods/measured.md": measured(),
    }


def page(title: str, *parts: str) -> str:
    return f"# {title}\n\n{MADE}\n" + "\n\n".join(part.strip("\n") for part in parts) + "\n"


def table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    lines = [f"| {' | '.join(headings)} |", f"|{' --- |' * len(headings)}"]
    return "\n".join([*lines, *(f"| {' | '.join(_cell(cell) for cell in row)} |" for row in rows)])


def _cell(text: str) -> str:
    """Text of one table cell; a `<` outside code would be taken for HTML."""
    parts = re.split(r"(`[^`]*`)", " ".join(text.split()).replace("|", "\\|"))
    return "".join(part if part.startswith("`") else part.replace("<", "\\<") for part in parts) or " "


# --- commands ---


def commands() -> str:
    from typer.main import get_command

    from tieline.cli import app

    root: Any = get_command(app)
    intro = (
        "Every command that prints a table takes `--json` and then prints JSON only, on standard output; messages and\n"
        "progress go to standard error. `tieline --version` prints the versions that results depend on.\n"
        "`tieline --install-completion` installs completion of commands and options in the shell in use\n"
        "(bash, zsh, fish or PowerShell).\n\n"
        + table(
            ["exit status", "meaning"],
            [
                ["0", "done"],
                [
                    "2",
                    "the command line, the configuration or an input is wrong; every problem is listed, nothing was written",
                ],
                ["3", "`audit` found a difference"],
                ["130", "interrupted; the results are as they were before"],
            ],
        )
    )
    return page("Commands", intro, *(_command(name, command) for name, command in root.commands.items()))


def _command(name: str, command: Any) -> str:
    arguments = [one for one in command.params if one.param_type_name == "argument"]
    options = [one for one in command.params if one.param_type_name == "option"]
    usage = " ".join(
        ["tieline", name, *(_metavar(one) for one in arguments), *(["[OPTIONS]"] if options else [])]
    )
    text, _, example = (command.help or "").partition("Example: ")
    rows = [[f"`{_metavar(one)}`", one.help or ""] for one in arguments]
    rows += [[f"`{', '.join(one.opts)}{_value(one)}`", one.help or ""] for one in options]
    parts = [
        f"## tieline {name}",
        text.strip(),
        f"```text\n{usage}\n```",
        table(["argument", "meaning"], rows),
    ]
    return "\n\n".join([*parts, *([f"Example: `{example.strip()}`"] if example else [])])


def _metavar(parameter: Any) -> str:
    name = parameter.metavar or parameter.name.upper()
    return name if parameter.required or name.startswith("[") else f"[{name}]"


def _value(option: Any) -> str:
    return "" if option.is_flag else f" {option.metavar or option.name.upper()}"


# --- settings ---


def settings() -> str:
    from tieline.settings import SessionSettings

    intro = (
        "A configuration is a TOML file with one section per stage. Paths are relative to the file that names them. An\n"
        "unknown key is an error that names the nearest known one. A run stores the complete settings in effect as\n"
        "`effective.toml`, which can be run again. Limits marked *common practice* have no single source, those marked\n"
        "*own choice* are ours; both are meant to be edited. A default of — means: not set."
    )
    return page("Settings", intro, *_sections(SessionSettings, "", "The file itself"))


def _sections(model: Any, path: str, text: str) -> Iterator[str]:
    """One heading per settings model that is not merely a value, in document order."""
    rows, below = [], []
    for name, field in model.model_fields.items():
        key = f"{path}.{name}" if path else name
        inner = _model(field.annotation)
        if inner is not None:
            many = "tuple" in str(field.annotation) or "dict" in str(field.annotation)
            title = (
                f"[{key}]"
                if not many
                else f"[[{key}]]"
                if "tuple" in str(field.annotation)
                else f"[{key}.NAME]"
            )
            below.append((inner, key, title))
            if not many:
                continue
        rows.append([f"`{name}`", _type(field.annotation), _default(field), field.description or ""])
    heading = f"## {text}" if not path else f"## `{text}`"
    body = table(["key", "type", "default", "meaning"], rows) if rows else ""
    yield "\n\n".join(part for part in (heading, _words(model) if path else "", body) if part)
    for inner, key, title in below:
        yield from _sections(inner, key, title)


def _words(model: Any) -> str:
    text = (model.__doc__ or "").strip()
    return "" if text.startswith("Section [") else text


def _model(annotation: Any) -> Any:
    from pydantic import BaseModel

    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((found for one in get_args(annotation) if (found := _model(one)) is not None), None)


def _type(annotation: Any) -> str:
    origin, arguments = typing.get_origin(annotation), get_args(annotation)
    if origin is typing.Literal:
        return " or ".join(f"`{_toml(one)}`" for one in arguments)
    if annotation is type(None):
        return ""
    if origin is typing.Annotated:
        return _type(arguments[0])
    if origin is tuple:
        inner = dict.fromkeys(_type(one) for one in arguments if one is not Ellipsis)
        return (
            f"list of {' and '.join(inner)}"
            if Ellipsis in arguments
            else f"[{', '.join(_type(one) for one in arguments)}]"
        )
    if origin is dict:
        inner_text = _type(arguments[1])
        return f"name = ({inner_text})" if "=" in inner_text else f"name = {inner_text}"
    if arguments:
        return " or ".join(text for one in arguments if (text := _type(one)))
    names = {str: "text", float: "number", int: "whole number", bool: "true or false"}
    return names.get(annotation) or "section"


def _default(field: Any) -> str:
    from pydantic import BaseModel

    if field.is_required():
        return "**required**"
    value = field.get_default(call_default_factory=True)
    if value is None or isinstance(value, BaseModel) or value in ((), {}):
        return "—"
    return f"`{_toml(value)}`"


def _toml(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, tuple | list):
        return f"[{', '.join(_toml(one) for one in value)}]"
    if isinstance(value, dict):
        return f"{{ {', '.join(f'{key} = {_toml(one)}' for key, one in value.items())} }}"
    return f"{value:g}" if isinstance(value, float) else str(value)


# --- columns, findings, stages ---


def columns() -> str:
    from tieline.columns import TABLES

    intro = (
        "Every stage writes Parquet files into the run folder. Each column carries its unit and meaning in the field\n"
        "metadata of the file. A missing number is null. `label` is a dictionary-encoded text; unit `1` is a pure number."
    )
    return page("Columns of the stage files", intro, *(_table_of_columns(spec) for spec in TABLES.values()))


def _table_of_columns(spec: Any) -> str:
    rows = [
        [f"`{one.name}`", one.kind, one.unit, "yes" if one.nullable else "", one.meaning]
        for one in spec.columns
    ]
    return f"## `{spec.name}.parquet`\n\nOne row per {spec.row}.\n\n" + table(
        ["column", "type", "unit", "may be null", "meaning"], rows
    )


SECTION_OF_CODE = {
    "glass-overlap": "overlap", "crystal-overlap": "overlap", "zoned": "zoning",
}  # fmt: skip


def findings() -> str:
    from tieline.screen.findings import RULING, TESTS
    from tieline.settings.screen import ScreenSettings

    said = _what_modules_say()
    defaults = ScreenSettings()
    rows = []
    for code in TESTS:
        section = SECTION_OF_CODE.get(code, code)
        test = getattr(defaults, section)
        rows.append([f"`{code}`", said[code], f"`[screen.{section}]`", test.action])
    rows.append(
        [
            f"`{RULING}`",
            "a person's recorded decision to keep or drop a spot or an analyte",
            "`screen.rulings`",
            "as decided",
        ]
    )
    intro = (
        "A finding is one test's remark on one spot, or on one analyte of one spot, in `screen.findings.parquet`, with its\n"
        "statistic, what it was held against and a sentence. Nothing is deleted: `screen.parquet` says of every value\n"
        "whether it is used (`use`) and what keeps it out (`why`: these codes). *drop* leaves a value out of the phase\n"
        "mean, *mark* only remarks it; a ruling beats every test."
    )
    return page("Finding codes", intro, table(["code", "what it says", "settings", "default action"], rows))


def _what_modules_say() -> dict[str, str]:
    """Code to sentence, from the first line of the module of each test."""
    said: dict[str, str] = {}
    for path in sorted((DOCS.parent / "pipeline" / "tieline" / "screen").glob("*.py")):
        first = (
            path.read_text(encoding="utf-8").removeprefix('"""').splitlines()[0]
            if path.stat().st_size
            else ""
        )
        match = re.match(r'Tests? (`[^:]*`): (.*?)\.?"*$', first)
        if match:
            said |= dict.fromkeys(re.findall(r"`([^`]+)`", match.group(1)), match.group(2))
    return said


def stages() -> str:
    from tieline.stages import STAGES
    from tieline.storage import SCHEMA_VERSION

    rows = [
        [
            f"`{stage.name}`", str(stage.revision), ", ".join(f"`{name}`" for name in stage.inputs) or "spot tables",
            ", ".join(f"`{name}`" for name in stage.outputs),
        ]
        for stage in STAGES
    ]  # fmt: skip
    intro = (
        "A stage is a pure function of the tables before it and of its own section of the settings. Its files record its\n"
        "name and revision, its settings and the content digests of its inputs; when all of these are what they would be\n"
        "now, the stage is current. A stage's revision rises when the same input gives another result, the version of the\n"
        f"stage files (now {SCHEMA_VERSION}) when columns change their meaning; the changelog has the table of both."
    )
    return page("Stages", intro, table(["stage", "revision", "reads", "writes"], rows))


# --- Python interface ---


def interface() -> str:
    import tieline
    from tieline import api
    from tieline.stages import STAGES

    parts = [
        "Public is what stands here, and nothing else: `tieline.reduce`, `tieline.open_run`, `tieline.Run`,\n"
        "`tieline.InputError`, `tieline.__version__`, and the stage functions below. The package is typed (`py.typed`).\n"
        "`import tieline` imports nothing heavy.",
        *(_function(f"tieline.{name}", getattr(tieline, name)) for name in ("reduce", "open_run")),
        f"## tieline.Run\n\n{inspect.getdoc(api.Run)}",
    ]
    for name, member in vars(api.Run).items():
        if name.startswith("_"):
            continue
        if isinstance(member, property):
            parts.append(f"### Run.{name}\n\n{inspect.getdoc(member)}")
        elif callable(member):
            parts.append(_function(f"Run.{name}", member, "###"))
    parts.append(
        f"## tieline.InputError\n\n{inspect.getdoc(tieline.InputError)}\n\n`error.problems` holds them, each with `message`,\n"
        "`file`, `row`, `column` and `remedy`."
    )
    parts.append(
        "## Stage functions\n\nEach is a pure function: Arrow tables and frozen settings in, a result with `tables`,\n"
        "`ledger` and `remarks` out; no file is touched. `Run.recompute` calls them with the tables of a run folder."
    )
    parts += [_function(f"tieline.{stage.name}.{stage.name}", stage.function(), "###") for stage in STAGES]
    return page("Python interface", *parts)


def _function(name: str, function: Any, level: str = "##") -> str:
    signature = re.sub(
        r"\btieline\.\w+(\.\w+)*\.(\w+)", r"\2", str(inspect.signature(function)).replace("'", "")
    )
    return f"{level} {name}\n\n```python\n{name}{signature}\n```\n\n{inspect.getdoc(function) or ''}"


# --- measured ---

TITLES = {
    "detection": "Smallest overlap found in 95 % of cases, over that of an oracle which knows everything",
    "false_alarms": "False alarms: clean spots called contaminated, in %",
    "coefficients": "What screening does to the three lowest D",
    "zoning": "Groups called zoned, in %: three grains of four spots",
    "remarks": "Remarks on groups, in %",
}
NOTES = {
    "detection": "`inf`: never within the range tried. n is the number of spots, `spread` real scatter between clean spots.",
    "false_alarms": "`foreign`: called something else than a mixture; `joint`: the test of many analytes together, per group.",
    "coefficients": "`bias` is the mean estimate over the truth, `coverage` the percentage of 95 % intervals that hold the "
    "truth, `bound` the interval that allows for undetected overlap.",
    "zoning": "The first three columns are false alarms: nothing was zoned there.",
    "remarks": "`scatter`: remarked at p < 0.01, for clean spots and for spots that all hold a little glass; `sigma ×`: when the "
    "stated uncertainty is wrong by that factor.",
}


def measured() -> str:
    """Tables of the studies, from their own output files in docs/measured/."""
    coverage = (DOCS / "measured" / "coverage.md").read_text(encoding="utf-8")
    intro = (
        "These tables are the output of two seeded studies that drive the program's own functions on simulated values of\n"
        "known truth. They hold for their noise models: normal counting errors (Poisson where named), normal spread between\n"
        "spots, uncertainties that are stated correctly unless said otherwise, invented compositions. Run them again with\n\n"
        "```text\npython tests/benchmarks/coverage.py --out docs/measured\n"
        "python tests/benchmarks/screening.py --out docs/measured/screening\n```"
    )
    parts = [
        "## Coverage of the intervals of D\n\n"
        "`coverage`: lowest and highest share of 95 % intervals that hold the true D, over the cells of the line; `n_min`:\n"
        "spots in the phase with fewer of them; `oracle`: the interval of somebody who knows spread and counting error;\n"
        "`mean ± 2 SE`: what spreadsheet practice covers on the same values. Cells with two spots have no target.\n\n"
        + coverage
    ]
    parts += [
        f"## {TITLES[name]}\n\n{NOTES[name]}\n\n{_csv(DOCS / 'measured' / 'screening' / f'{name}.csv')}"
        for name in TITLES
    ]
    parts.append(_lattice_strain((DOCS / "measured" / "lattice_strain.txt").read_text(encoding="utf-8")))
    return page("What was measured", intro, *parts)


def _lattice_strain(text: str) -> str:
    """The study's lines as tables: curves, overlap told by them, and each pooled over its cells."""
    tables: dict[str, list[dict[str, str]]] = {}
    for line in text.splitlines():
        name, figures = line[:66].strip(), dict(re.findall(r"(\w+) ([\d.]+|nan)", line[66:]))
        kind = "overlap" if "overlap" in name else "curve"
        tables.setdefault(f"pooled {kind}" if " of " in name else kind, []).append({"case": name} | figures)
    made = {
        kind: table(list(rows[-1]), [[row.get(name, "") for name in rows[-1]] for row in rows])
        for kind, rows in tables.items()
    }
    return (
        "## Coverage of the lattice-strain fit\n\n"
        "`told`: share of cases with a fit, which the other columns refer to; `D0`, `r0`, `E`, `predicted`: share of 95 % "
        "intervals\nthat hold the truth, the last for radii that were not measured. 2000 cases a line: 0.95 has a standard "
        "error of 0.005,\npooled over the 27 cells with known errors 0.001. Few spots: errors estimated with 4 degrees of "
        "freedom. By\n`python tests/benchmarks/lattice_strain.py --cases 2000 --seed 411`; the method was chosen on other "
        "seeds.\n\n"
        + made["pooled curve"] + "\n\n" + made["curve"]
        + "\n\n`f`: the interval of the overlap fraction holds it; `found`: overlap was called, without overlap the false "
        "alarms;\n`possible`: how often a test could call it that knows the errors, from the information at the true curve; "
        "`affected`:\nelements changed by more than 10 %, `corrected`: the intervals of their D with the overlap taken off "
        "hold the truth. 1000\ncases a line: 0.95 has a standard error of 0.007.\n\n"
        + made["pooled overlap"] + "\n\n" + made["overlap"]
    )  # fmt: skip


def _csv(path: Path) -> str:
    with path.open(encoding="utf-8", newline="") as stream:
        header, *rows = list(csv.reader(stream))
    return table(header, [[_number(cell) for cell in row] for row in rows])


def _number(text: str) -> str:
    try:
        value = float(text)
    except ValueError:
        return text
    return text if "." not in text else f"{value:.2f}"


def main() -> None:
    for name, text in pages().items():
        (DOCS / name).write_text(text, encoding="utf-8", newline="\n")
        print(f"docs/{name}")


if __name__ == "__main__":
    main()
