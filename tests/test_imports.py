"""What a command imports, checked in a process of its own: a command must not wait for what it does not need."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from sessions import ROOT, demo_copy
from tieline import runner
from tieline.configuration import load

NUMERICS = {"numpy", "pandas", "pyarrow", "scipy"}
PICTURES_AND_WORKBOOKS = {"matplotlib", "xlsxwriter", "jinja2", "python_calamine"}
REPORT = """
import json, sys
from tieline.cli import main
sys.argv = ["tieline", *sys.argv[1:]]
try:
    main()
finally:
    print("\\nMODULES", json.dumps(sorted(sys.modules)))
"""


def imported(*arguments: str) -> set[str]:
    """The names of all modules that a command has imported when it ends."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT / "pipeline")}
    command = [sys.executable, "-W", "ignore", "-c", REPORT, *arguments]
    done = subprocess.run(command, capture_output=True, text=True, env=environment, check=False)
    assert done.returncode == 0, done.stderr
    return set(json.loads(done.stdout.rpartition("MODULES")[2]))


@pytest.fixture(scope="module")
def reduced(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The configuration of a reduced copy of the demo session."""
    config = demo_copy(tmp_path_factory.mktemp("demo"))
    runner.run(load(config))
    return config


def packages(modules: set[str]) -> set[str]:
    return {name.partition(".")[0] for name in modules}


def test_help_imports_the_parser_alone():
    modules = imported("--help")
    heavy = NUMERICS | PICTURES_AND_WORKBOOKS | {"pydantic", "uncertainties", "distributed"}
    assert not packages(modules) & heavy
    assert not modules & {"rich.progress", "rich.live"}  # the parser itself brings other parts of rich
    assert {name for name in modules if name.startswith("tieline")} == {"tieline", "tieline.cli"}


def test_status_imports_no_statistics(reduced: Path):
    modules = packages(imported("status", str(reduced), "--json"))
    assert "pyarrow" in modules  # it reads the footers of stage files
    assert not modules & ({"pandas", "scipy", "uncertainties", "distributed"} | PICTURES_AND_WORKBOOKS)


def test_a_run_with_nothing_to_do_imports_no_more_than_status(reduced: Path):
    modules = packages(imported("run", str(reduced), "--quiet"))
    assert not modules & ({"pandas", "scipy", "uncertainties", "distributed"} | PICTURES_AND_WORKBOOKS)


def test_a_run_imports_neither_pictures_nor_the_cluster(reduced: Path, tmp_path: Path):
    modules = packages(imported("run", str(reduced), "--out", str(tmp_path), "--quiet"))
    assert not modules & {"matplotlib", "distributed", "openpyxl"}
    assert not any(name in modules for name in ("xlsxwriter", "jinja2"))


def test_a_changed_boundary_needs_no_propagation(reduced: Path):
    """Only `classify` and what follows it run: nothing of uncertainty objects, readers of workbooks or pictures."""
    modules = packages(
        imported("run", str(reduced), "--quiet", "--set", "classify.highly_incompatible_below=0.02")
    )
    assert not modules & ({"uncertainties", "distributed"} | PICTURES_AND_WORKBOOKS)
