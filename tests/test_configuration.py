"""Loading a configuration: strict types, unknown keys with the nearest known one, overrides, short forms."""

from __future__ import annotations

from pathlib import Path

import pytest

from tieline.configuration import load, read
from tieline.errors import InputError

MINIMAL = 'session = "s"\n[[ingest.tables]]\npath = "a.csv"\n'


def problems(tmp_path: Path, text: str, **options: object) -> list[str]:
    path = tmp_path / "c.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError) as caught:
        load(path, **options)
    return [str(problem) for problem in caught.value.problems]


def loaded(tmp_path: Path, text: str, **options: object):
    path = tmp_path / "c.toml"
    path.write_text(text, encoding="utf-8")
    return load(path, **options)


def test_the_contract_form_of_per_phase_limits(tmp_path: Path):
    text = MINIMAL + "[screen.total]\nolivine = [98.0, 102.0]\nsigmas = 3\n"
    text += "[screen.cations]\nmelilite = { oxygens = 7, sum = 5, tolerance = 0.05 }\n"
    screen = loaded(tmp_path, text).settings.screen
    assert screen.total.limits == {"olivine": (98.0, 102.0)}
    assert screen.total.sigmas == 3
    assert screen.cations.rules["melilite"].oxygens == 7


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        ("[screen.total]\nsigmaz = 3", 'Did you mean "sigmas"'),
        ("[screen.outler]\np = 0.1", 'Did you mean "outlier"'),
        ("[[convert.internal_standard]]\nelement = 'CaO'\nassumd = { glass = 3 }", 'Did you mean "assumed"'),
        ("[ingest.tables.sigma]\nlevle = 1", "c.toml"),
    ],
)
def test_unknown_keys_name_the_nearest(tmp_path: Path, line: str, expected: str):
    assert expected in " ".join(problems(tmp_path, MINIMAL + line + "\n"))


@pytest.mark.parametrize(
    "line",
    [
        '[partition]\nconfidence = "0.95"',
        "[partition]\nconfidence = 1.5",
        "[partition]\nconfidence = nan",
        "[partition]\nconfidence = true",
        "[pair]\npairs = [['a', 'b', 'c']]",
        "[screen.total]\nenabled = 1",
        "[classify]\nhighly_incompatible_below = 3.0",
        "[calibrate]\ncorrect = true",
    ],
)
def test_wrong_types_and_values_are_refused(tmp_path: Path, line: str):
    told = problems(tmp_path, MINIMAL + line + "\n")
    assert len(told) == 1
    assert line.split("]")[0].strip("[") in told[0]


@pytest.mark.parametrize("name", ["../up", "a/b", "", ".hidden", "x" * 100, "CON", "nul.txt", "a\\b", "end."])
def test_session_names_that_are_no_folder_names(tmp_path: Path, name: str):
    text = MINIMAL.replace('"s"', repr(name))
    assert any("session" in told for told in problems(tmp_path, text))


def test_all_problems_at_once(tmp_path: Path):
    text = MINIMAL + "[partition]\nconfidence = 2\n[classify]\nfoo = 1\n[screen.overlap]\nz = -1\n"
    assert len(problems(tmp_path, text)) == 3


def test_not_toml_duplicate_key_and_no_file(tmp_path: Path):
    assert "not valid TOML" in problems(tmp_path, "session = = 1")[0]
    assert "not valid TOML" in problems(tmp_path, 'session = "a"\nsession = "b"')[0]
    (tmp_path / "ember.toml").write_text(MINIMAL)
    with pytest.raises(InputError, match=r'Did you mean "ember\.toml"'):
        load(tmp_path / "embre.toml")


def test_overrides_are_toml_values_or_plain_texts(tmp_path: Path):
    overrides = ["partition.confidence=0.9", "screen.overlap.use=mark", 'pair.pairs=[["ol","gl"]]']
    session = loaded(tmp_path, MINIMAL, overrides=overrides)
    assert session.settings.partition.confidence == 0.9
    assert session.settings.screen.overlap.use == "mark"
    assert session.settings.pair.pairs == (("ol", "gl"),)
    assert session.overrides == tuple(overrides)
    assert "not of the form" in problems(tmp_path, MINIMAL, overrides=["confidence"])[0]
    assert "is not a section" in problems(tmp_path, MINIMAL, overrides=["session.x=1"])[0]
    assert "unknown key" in problems(tmp_path, MINIMAL, overrides=["pair.mena=median"])[0]


def test_unknown_keys_leave_the_rest_readable(tmp_path: Path):
    path = tmp_path / "c.toml"
    path.write_text(MINIMAL + "[pair]\nmena = 'median'\naverage = 'grains'\n")
    session, told = read(path)
    assert session.settings.pair.average == "grains"
    assert len(told) == 1
