"""The arrows run downward only: who may import whom, checked on the source."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

from tieline.stages import NAMES

PACKAGE = Path(__file__).resolve().parents[1] / "pipeline" / "tieline"
MODULES = sorted(PACKAGE.rglob("*.py"))
STAGE_MODULES = {*NAMES}
METHODS = ("open", "write_text", "read_text", "write_bytes", "read_bytes", "unlink")


def layer(module: str) -> str:
    """`tieline.statistics.means` -> `statistics`; the package itself is ``."""
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else ""


def imports(path: Path) -> set[str]:
    """Our own modules that a source file imports, absolute and relative, wherever in the file."""
    package = ("tieline", *path.relative_to(PACKAGE).parts[:-1])
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names if alias.name.split(".")[0] == "tieline"}
        elif isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) - node.level + 1]) if node.level else ""
            name = ".".join(part for part in (base, node.module or "") if part)
            if name.split(".")[0] == "tieline":
                found.add(name)
    return found


def own_layer(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0] if len(parts) > 1 else path.stem


def of_layer(name: str) -> list[Path]:
    return [path for path in MODULES if own_layer(path) == name]


@pytest.mark.parametrize("name", ["statistics", "chemistry"])
def test_facts_and_methods_import_nothing_else_of_ours(name: str):
    assert of_layer(name)
    for path in of_layer(name):
        foreign = {module for module in imports(path) if layer(module) not in (name, "")}
        assert not foreign, f"{path.name} imports {foreign}"


def test_a_stage_never_imports_another_stage():
    for path in MODULES:
        if own_layer(path) in STAGE_MODULES:
            others = STAGE_MODULES - {own_layer(path)}
            wrong = {module for module in imports(path) if layer(module) in others}
            assert not wrong, f"{path.relative_to(PACKAGE)} imports {wrong}"


def test_stages_and_methods_do_not_know_runner_storage_or_command_line():
    above = {
        "cli",
        "comparing",
        "api",
        "runner",
        "storage",
        "manifest",
        "plan",
        "lock",
        "terminal",
        "terminal_results",
        "configuration",
    }
    for path in MODULES:
        if own_layer(path) in STAGE_MODULES | {"statistics", "chemistry", "reading"}:
            wrong = {module for module in imports(path) if layer(module) in above}
            assert not wrong, f"{path.relative_to(PACKAGE)} imports {wrong}"


def test_the_command_line_knows_no_science():
    science = {"statistics", "chemistry", "arrays", "tables", "columns"} | STAGE_MODULES
    wrong = {module for module in imports(PACKAGE / "cli.py") if layer(module) in science}
    assert not wrong


def test_modules_stay_readable():
    for path in MODULES:
        n_lines = len(path.read_text(encoding="utf-8").splitlines())
        assert n_lines <= 500, (
            f"{path.relative_to(PACKAGE)} has {n_lines} lines: there is a second idea in it"
        )


def test_only_the_runner_side_touches_files():
    """Stages get bytes and tables; opening files is for the modules named here."""
    allowed = {
        "comparing", "api", "runner", "storage", "manifest", "plan", "lock", "configuration",
        "cli", "demo", "archive", "auditing",
        "report", "starting", "crate", "tracing", "help_pages",
    }  # fmt: skip
    for path in MODULES:
        if own_layer(path) in allowed or path.parts[-2:] == (
            "reading",
            "packed.py",
        ):  # unpacks bytes in memory
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            function = node.func if isinstance(node, ast.Call) else None
            opens = isinstance(function, ast.Name) and function.id == "open"
            writes = isinstance(function, ast.Attribute) and function.attr in METHODS
            touches = opens or writes
            assert not touches, f"{path.relative_to(PACKAGE)}:{node.lineno} touches a file"
