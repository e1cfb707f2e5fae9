"""The documentation on the terminal, versions, and which page a problem names."""

import json

import pytest

from tieline import __version__, help_pages
from tieline.cli import main
from tieline.errors import InputError, Problem
from tieline.versions import LIBRARIES, versions


def call(monkeypatch: pytest.MonkeyPatch, *arguments: str) -> int:
    monkeypatch.setattr("sys.argv", ["tieline", *arguments])
    with pytest.raises(SystemExit) as end:
        main()
    return int(end.value.code or 0)


def test_pages_are_listed_and_shown(monkeypatch, capsys):
    assert call(monkeypatch, "help", "--json") == 0
    listed = json.loads(capsys.readouterr().out)
    assert listed["own-tables"] == "My own tables"
    assert call(monkeypatch, "help", "own-tables") == 0
    shown = capsys.readouterr().out
    assert shown.startswith("# My own tables")
    assert "<!--" not in shown


def test_an_unknown_page_names_the_nearest(monkeypatch, capsys):
    assert call(monkeypatch, "help", "own-table") == 2
    assert 'Did you mean "own-tables"?' in capsys.readouterr().err


@pytest.mark.parametrize(
    ("problem", "page"),
    [
        (Problem("unknown key.", "session.toml", column="screen.totl"), "settings"),
        (Problem("not decided: which unit?", "session.toml", 4), "own-tables"),
        (Problem("is no number.", "probe.csv", 12, "MgO"), "own-tables"),
        (Problem('no spot is called "x".', "ember/rulings.csv", 3, "spot"), "rulings"),
        (Problem("is sealed by SHA256SUMS.", "runs/x"), "audit"),
        (Problem("is a file, not a run folder.", "session.toml"), None),
        (Problem("no stage is called so."), None),
    ],
)
def test_problems_name_a_page_that_exists(problem, page):
    assert help_pages.page_for([problem]) == page
    assert page is None or page in help_pages.pages()


def test_page_names_are_unique():
    names = [path.stem for path in help_pages.pages_folder().rglob("*.md") if path.stem != "index"]
    shown = [name for name in names if name in help_pages.pages()]
    assert len(shown) == len(set(shown))
    with pytest.raises(InputError):
        help_pages.read_page("nothing of that name")


def test_version_names_what_numbers_depend_on(monkeypatch, capsys):
    assert call(monkeypatch, "--version") == 0
    shown = capsys.readouterr().out
    assert shown.startswith(f"tieline {__version__}\n")
    assert all(name in shown for name in LIBRARIES)
    assert shown.strip() == versions()


def test_every_command_has_help_with_an_example(monkeypatch, capsys):
    from typer.main import get_command

    from tieline.cli import app

    for name in get_command(app).commands:
        monkeypatch.setenv("COLUMNS", "200")
        assert call(monkeypatch, name, "--help") == 0
        assert f"Example: tieline {name}" in capsys.readouterr().out
