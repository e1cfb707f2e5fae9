"""The reference pages say what the code says, and the documentation builds without a warning."""

import json
import re
import runpy
import subprocess
import sys

import pytest

from docs.notebook import NOTEBOOK, text_of
from docs.notebook import executed as executed_notebook
from docs.transcripts import ROOT
from sessions import demo_copy
from tieline import __version__
from tieline.columns import TABLES
from tieline.stages import STAGES
from tieline.storage import SCHEMA_VERSION

GENERATED = runpy.run_path(str(ROOT / "docs" / "generate_reference.py"))["pages"]()


@pytest.mark.parametrize("name", GENERATED)
def test_generated_page_does_not_drift(name):
    assert (ROOT / "docs" / name).read_text(encoding="utf-8") == GENERATED[name], "renew it with `make pages`"


def test_every_column_and_command_has_its_line():
    for spec in TABLES.values():
        section = GENERATED["reference/columns.md"].split(f"## `{spec.name}.parquet`")[1].split("\n## ")[0]
        assert all(f"| `{column.name}` |" in section for column in spec.columns)
    for command in ("run", "check", "status", "trace", "audit", "compare", "report", "start", "demo"):
        section = GENERATED["reference/commands.md"].split(f"## tieline {command}\n")[1].split("\n## ")[0]
        assert "Example: `tieline " in section


def test_every_setting_has_a_description():
    rows = re.findall(r"^\| `(\w+)` \|.*\| (.*) \|$", GENERATED["reference/settings.md"], re.MULTILINE)
    assert len(rows) > 100
    assert [name for name, meaning in rows if not meaning.strip()] == []


def test_the_changelog_knows_every_version_of_the_stage_files():
    text = (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")
    assert re.search(rf"^\| {SCHEMA_VERSION} \|", text, re.MULTILINE)
    for stage in STAGES:
        assert re.search(rf"^\| {stage.name} \| {stage.revision} \|", text, re.MULTILINE), stage.name
    assert f"## {__version__}" in text


def test_citation_and_package_have_one_version():
    citation = (ROOT / "CITATION.cff").read_text(encoding="utf-8")
    project = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    assert f"\nversion: {__version__}\n" in citation
    assert f'\nversion = "{__version__}"\n' in project


def test_the_documentation_builds_without_a_warning(tmp_path):
    command = [sys.executable, "-m", "sphinx", "-q", "-W", "--keep-going", "-b", "html"]
    command += ["-d", str(tmp_path / "trees"), str(ROOT / "docs"), str(tmp_path / "site")]
    built = subprocess.run(command, check=False, capture_output=True, text=True)
    assert built.returncode == 0, built.stderr
    page = (tmp_path / "site" / "methods" / "partition.html").read_text(encoding="utf-8")
    assert "<math" in page
    # Formulas and search work without a network.
    assert not re.findall(r'<(?:script|link)[^>]+(?:src|href)="(?:https?:)?//[^"]+"', page)


def test_the_notebook_prints_what_it_shows(tmp_path):
    demo_copy(tmp_path)
    (tmp_path / "examples").mkdir()
    notebook = executed_notebook(NOTEBOOK, tmp_path / "examples")
    assert text_of(notebook) == NOTEBOOK.read_text(encoding="utf-8"), "renew it with `make pages`"
    assert json.loads(text_of(notebook))["nbformat"] == 4
