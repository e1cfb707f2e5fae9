"""Labels full of escape sequences: no command sends them to the terminal as they are, and none stumbles over them."""

from __future__ import annotations

import json
import re
import tomllib
from pathlib import Path

import pytest

from faults.commands import Done
from faults.commands import tieline as command
from faults.small import change_settings, write_session
from tieline.configuration import load
from tieline.terminal_console import json_for_output, printable

# Sets the title, rings, colours, clears by an 8-bit code, turns the reading direction, is markup, deletes.
EVIL = "\x1b]0;x\x07\x1b[31m\x9b2J\u202e[red][\\nope]\x08\x7f"
COLOURS_AND_PROGRESS = re.compile(r"\x1b\[[0-9;]*m|\x1b\[2K|\x1b\[\?25[lh]|\x1b\[1A|\r")


@pytest.fixture(scope="module")
def evil(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The configuration of a session with hostile labels in every place, reduced twice with different settings."""
    folder = tmp_path_factory.mktemp("evil")
    session = write_session(folder)
    for name, changes in {
        "probe.csv": {"X-1": f"X{EVIL}1", "olivine": f"oli{EVIL}vine", "GLS-1-gl-1": f"g{EVIL}l1"},
        "experiments.csv": {"X-1": f"X{EVIL}1"},
        "rulings.csv": {"X-1": f"X{EVIL}1", "A. Analyst": f"A{EVIL}", "on a crack": f"on{EVIL}crack"},
        "accepted.csv": {"invented": f"in{EVIL}vented"},
    }.items():
        text = (folder / name).read_text(encoding="utf-8")
        for old, new in changes.items():
            assert old in text
            text = text.replace(old, new)
        (folder / name).write_text(text, encoding="utf-8")
    tieline("run", str(session.path), "--out", str(folder / "before"))
    change_settings(session)
    tieline("run", str(session.path), "--quiet")
    wrong = session.path.read_text(encoding="utf-8").replace("batch", '"ba\\u001b[31mtch"')
    (folder / "wrong.toml").write_text(wrong, encoding="utf-8")
    return session.path


def tieline(*arguments: str) -> Done:
    return command(*arguments, environment={"FORCE_COLOR": "1", "TTY_COMPATIBLE": "1"})


COMMANDS = {
    "check": ("check", "{config}"),
    "run": ("run", "{config}", "--fresh"),
    "run, everything": ("run", "{config}", "--all"),
    "run, JSON": ("run", "{config}", "--json"),
    "status": ("status", "{config}", "--set", "partition.confidence=0.8"),
    "report": ("report", "{config}"),
    "trace": ("trace", "{config}", "X{evil}1", "oli{evil}vine/glass", "Mg"),
    "trace, JSON": ("trace", "{config}", "X{evil}1", "oli{evil}vine/glass", "Mg", "--json"),
    "trace of nothing": ("trace", "{config}", "Y{evil}", "oli{evil}vine/glass", "Mg"),
    "audit": ("audit", "{folder}/runs/small"),
    "audit, JSON": ("audit", "{folder}/runs/small", "--json"),
    "compare": ("compare", "{folder}/before/small", "{folder}/runs/small"),
    "compare, JSON": ("compare", "{folder}/before/small", "{folder}/runs/small", "--json"),
    "start": ("start", "{folder}/probe.csv", "--to", "{folder}/new{evil}.toml"),
    "a hostile key": ("check", "{folder}/wrong.toml"),
    "a hostile file name": ("check", "{evil}.toml"),
    "a hostile option": ("run", "--{evil}"),
    "a hostile argument": ("run", "{config}", "{evil}"),
    "a hostile setting": ("check", "{config}", "--set", "{evil}"),
}


@pytest.mark.parametrize("name", COMMANDS)
def test_nothing_raw_reaches_the_terminal(name: str, evil: Path):
    places = {"config": str(evil), "folder": str(evil.parent), "evil": EVIL}
    done = tieline(*(argument.format(**places) for argument in COMMANDS[name]))
    shown = done.stdout + done.stderr
    assert shown
    assert "Traceback" not in shown
    raw = {c for c in COLOURS_AND_PROGRESS.sub("", shown) if not c.isprintable() and c != "\n"}
    assert not raw
    assert "\x1b[31mnope" not in shown
    assert done.status == (2 if "hostile" in name or "nothing" in name else 0), shown
    if "JSON" in name:
        json.loads(done.stdout)


def test_a_first_configuration_from_hostile_labels_is_valid_and_holds_no_more_than_it_should(evil: Path):
    target = evil.parent / "first.toml"
    table = evil.parent / "lines.csv"
    text = (evil.parent / "probe.csv").read_text(encoding="utf-8")
    table.write_text(text.replace(",glass,", ',"gl\nout = ""/elsewhere""",'), encoding="utf-8")
    assert tieline("start", str(table), "--to", str(target)).status == 0
    settings = tomllib.loads(target.read_text(encoding="utf-8"))
    assert "out" not in settings
    assert "out" not in settings["ingest"].get("phases", {})


def test_labels_come_back_from_json_as_they_were():
    value = {"label": EVIL, "µ": "5 µm 🜁", "odd": "\U000e0001"}
    text = json_for_output(value)
    assert json.loads(text) == value
    assert all(c.isprintable() or c == "\n" for c in text)


def test_printable_keeps_letters_of_every_alphabet():
    assert printable("Хи µ 橄榄石 ±") == "Хи µ 橄榄石 ±"


def test_the_labels_are_in_the_results_as_they_were(evil: Path):
    from sessions import result

    assert f"X{EVIL}1" in set(result(load(evil), "classify")["experiment"])
