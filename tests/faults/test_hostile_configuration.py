"""Configurations that are wrong in every way: each is refused in words, with the place, and writes nothing."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from faults.commands import tieline
from faults.small import write_session
from tieline.configuration import LARGEST_CONFIGURATION_BYTES, load
from tieline.errors import InputError

BASE = 'session = "x"\n[[ingest.tables]]\npath = "a.csv"\n'


def named(session: str) -> str:
    return BASE.replace('"x"', session)


def partition(value: str) -> str:
    return f"{BASE}[partition]\nconfidence = {value}\n"


REFUSED: dict[str, tuple[str | bytes, str]] = {
    "a key twice": ('session = "y"\n' + BASE, "not valid TOML"),
    "a section twice": (BASE + "[pair]\n[pair]\n", "not valid TOML"),
    "no TOML": ("session: x\n", "not valid TOML"),
    "an unknown key": (BASE + "[partition]\nconfidnce = 0.9\n", 'Did you mean "confidence"'),
    "a number for a text": (named("5"), "valid string"),
    "a list for a text": (named("[1]"), "valid string"),
    "a date for a text": (named("1979-05-27"), "valid string"),
    "a text for a number": (partition('"0.9"'), "valid number"),
    "a time for a number": (partition("07:32:00"), "valid number"),
    "true for a number": (partition("true"), "valid number"),
    "infinite": (partition("inf"), "finite number"),
    "infinite by overflow": (partition("1e999"), "finite number"),
    "not a number": (partition("nan"), "finite number"),
    "out of range": (partition("1.5"), "less than 1"),
    "five thousand digits": (partition("1" * 5000), "not valid TOML"),
    "nine thousand hexadecimal digits": (partition("0x" + "f" * 9000), "too large"),
    "negative where none can be": (BASE + "[ingest.limits]\ncolumns = -1\n", "greater than or equal to 1"),
    "sections without end": (BASE + "[classify]\n" + ".".join(["a"] * 5000) + " = 1\n", "more than 50 deep"),
    "lists without end": (BASE + "[pair]\npairs = " + "[" * 450 + "]" * 450 + "\n", "more than 50 deep"),
    "lists beyond recursion": (BASE + "x = " + "[" * 100_000 + "\n", "not valid TOML"),
    "too long": (BASE + "#" * LARGEST_CONFIGURATION_BYTES, "too large for a configuration"),
    "not UTF-8": (BASE.encode() + b'x = "\xff"', "not a UTF-8 text"),
    "UTF-16": (BASE.encode("utf-16"), "not a UTF-8 text"),
    "NUL bytes": (BASE + "\0", "not valid TOML"),
    "nothing": ("", "required"),
    "a NUL in the folder": ('out = "a\\u0000b"\n' + BASE, "NUL"),
    **{
        f"a session that is {name!r}": (named(f"'{name}'"), "session")
        for name in (
            "../x", "..", ".", "/x", "a/b", "a\\b", "C:x", "x ", "x.", "CON", "con.txt", "lpt1", "NUL", "-x", "~", "",
            "a" * 81, "x:stream", "$HOME", "%TEMP%", "ол", "a\u202eb",
        )
    },
    "a session with a line end": (named('"x\\n"'), "session"),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED)
def test_refused_in_words(name: str, tmp_path: Path):
    text, expected = REFUSED[name]
    path = tmp_path / "c.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(InputError) as caught:
        load(path)
    assert expected in str(caught.value)
    assert "c.toml" in str(caught.value)
    done = tieline("run", str(path))
    assert done.status == 2
    assert "Traceback" not in done.stderr
    assert [one.name for one in tmp_path.iterdir()] == ["c.toml"]


@pytest.mark.parametrize(
    "override",
    [
        "session=../x", "session=CON", "out=\0", "partition.confidence=1e999", "partition.confidence", "=1", "", "a=b=c",
        "partition.confidence=" + "1" * 5000, "pair.pairs=" + "[" * 5000, ".".join("a" * 5000) + "=1", "session.x=1",
        "ingest.tables=1", "partition.confidence=2020-01-01",
    ],
)  # fmt: skip
def test_overrides_are_checked_as_the_file_is(override: str, tmp_path: Path):
    session = write_session(tmp_path)
    before = sorted(path.name for path in tmp_path.iterdir())
    done = tieline("run", str(session.path), "--set", override)
    assert done.status == 2, done.stdout
    assert "Traceback" not in done.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == before


HUGE = (
    "skip_rows = 1000000000000000000",
    "header_row = 1000000000000000000",
    "sheet = 1000000000000000000",
    'delimiter = "\\u0000"',
    'delimiter = "§"',
    "delimiter = '\"'",
    'encoding = "../../x"',
    'encoding = "hex"',
    'unit = "ppb"\nanalytes = ["MgO"]',
    'labels = { column = "Point", pattern = "(?P<grain>.*)" }',
    'below_limit = ["' + "x" * 10_000 + '"]',
)


@pytest.mark.parametrize("line", HUGE)
def test_values_that_are_allowed_but_absurd(line: str, tmp_path: Path):
    """Whatever the value, the command ends with results or with a problem in words."""
    session = write_session(tmp_path)
    text = session.path.read_text(encoding="utf-8")
    session.path.write_text(text.replace('batch = "p1"', f'batch = "p1"\n{line}'), encoding="utf-8")
    done = tieline("check", str(session.path))
    assert done.status in (0, 2)
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize(
    "path", ["", ".", "/", "x\0y.csv", "a" * 5000, "\\\\server\\share\\t.csv", "nul", "~/t.csv", "t.csv/.."]
)
def test_table_paths_that_lead_nowhere(path: str, tmp_path: Path):
    session = write_session(tmp_path)
    text = session.path.read_text(encoding="utf-8")
    escaped = path.replace("\\", "\\\\").replace("\0", "\\u0000")
    session.path.write_text(text.replace('path = "probe.csv"', f'path = "{escaped}"'), encoding="utf-8")
    done = tieline("run", str(session.path))
    assert done.status == 2
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "runs").exists()


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="named pipes")
def test_a_configuration_that_is_no_file(tmp_path: Path):
    os.mkfifo(tmp_path / "pipe.toml")
    (tmp_path / "loop.toml").symlink_to(tmp_path / "loop.toml")
    for path in (
        tmp_path / "pipe.toml",
        tmp_path / "loop.toml",
        tmp_path,
        Path("/dev/zero"),
        tmp_path / ("a" * 5000),
    ):
        done = tieline("check", str(path))
        assert done.status == 2, path
        assert "Traceback" not in done.stderr
