"""A run folder as RO-Crate with table schemas: valid by the standards' own validators, complete, and always the same.

The validators have an environment of their own, for one of them needs an older version of a library the program
uses: `make standards` sets it up.
"""

import json
import os
import subprocess
import sys
from pathlib import Path
from urllib.parse import unquote

import pytest

import tieline
from sessions import ROOT, demo_copy
from tieline.crate import METADATA, NOT_PUBLISHED
from tieline.provenance import bytes_digest
from tieline.stages import STAGES
from tieline.table_schema import DATA_PACKAGE

VALIDATORS = ROOT / ".venv-standards" / ("Scripts/python.exe" if sys.platform == "win32" else "bin/python")
ABOUT = {
    "about.description": "An invented session.",
    "about.people": [
        {"name": "A. N. Example", "orcid": "0000-0000-0000-0000", "affiliation": "Invented university"},
        {"name": "B. Example", "affiliation": "Invented university"},
    ],
    "about.licence": "CC-BY-4.0",
    "about.publisher": "Invented university",
    "about.date": "2026-03-20",
}


@pytest.fixture(scope="module")
def described(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tieline.reduce(
        demo_copy(tmp_path_factory.mktemp("described")), overrides=ABOUT, report=True
    ).folder


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tieline.reduce(demo_copy(tmp_path_factory.mktemp("plain")), report=True).folder


def graph(folder: Path) -> dict[str, dict]:
    document = json.loads((folder / METADATA).read_text(encoding="utf-8"))
    entities = {entity["@id"]: entity for entity in document["@graph"]}
    assert len(entities) == len(document["@graph"])
    return entities


def validated(folder: Path) -> dict:
    if not VALIDATORS.exists():
        assert "CI" not in os.environ, "the validators are not set up"
        pytest.skip("`make standards` sets up the validators")
    command = [VALIDATORS, ROOT / "tests" / "standards" / "validate.py", folder]
    answer = subprocess.run(command, capture_output=True, text=True, check=False)
    assert answer.returncode == 0, answer.stderr
    return json.loads(answer.stdout.splitlines()[-1])


def test_valid_with_nothing_configured(plain: Path):
    found = validated(plain)
    assert found["crate"]["checks"] > 30
    assert [issue for issue in found["crate"]["issues"] if issue.startswith("REQUIRED")] == []
    assert found["tables"]["issues"] == []


def test_valid_with_everything_configured_and_as_recommended(described: Path):
    found = validated(described)
    # The program knows no address of the institution; everything else recommended is there.
    assert [
        issue for issue in found["crate"]["issues"] if "organization SHOULD have a URL" not in issue
    ] == []
    rows = found["tables"]["rows"]
    assert rows["partition_coefficients.csv"] == len(tieline.open_run(described).table("classify"))
    assert "ug/g" in found["tables"]["units"]


def test_the_validators_can_fail(described: Path, tmp_path: Path):
    for name in ("partition_coefficients.csv", "left_out.csv", DATA_PACKAGE, METADATA):
        (tmp_path / name).write_bytes((described / name).read_bytes())
    document = json.loads((tmp_path / METADATA).read_text(encoding="utf-8"))
    next(entity for entity in document["@graph"] if entity["@id"] == "./").pop("datePublished")
    (tmp_path / METADATA).write_text(json.dumps(document), encoding="utf-8")
    table = (tmp_path / "partition_coefficients.csv").read_text(encoding="utf-8").splitlines()
    table[1] = table[1].replace(",7,6,", ",seven,6,", 1)
    (tmp_path / "partition_coefficients.csv").write_text("\n".join(table) + "\n", encoding="utf-8")
    found = validated(tmp_path)
    assert any("datePublished" in issue for issue in found["crate"]["issues"])
    assert found["tables"]["issues"]


def test_every_file_is_there_with_its_digest(described: Path):
    entities = graph(described)
    files = {unquote(name): one for name, one in entities.items() if "File" in one["@type"]}
    there = {path.name for path in described.iterdir() if path.is_file() and path.name != METADATA}
    assert set(files) == there
    for name, entity in files.items():
        data = (described / name).read_bytes()
        assert entity["sha256"] == bytes_digest(data)
        assert entity["contentSize"] == str(len(data))
    assert {part["@id"] for part in entities["./"]["hasPart"]} == {
        name for name in entities if unquote(name) in files
    }


def test_lineage_is_closed(described: Path):
    """Whatever an action used or made, and whatever made a file, is described; stages follow from one another."""
    entities = graph(described)
    for stage in STAGES:
        action = entities[f"#stage-{stage.name}"]
        assert "prov:Activity" in action["@type"]
        made = as_list(action["prov:generated"])
        assert {one["@id"] for one in made} == {f"{name}.parquet" for name in stage.outputs}
        for one in (*made, *as_list(action.get("prov:used", []))):
            assert one["@id"] in entities
        for one in made:
            assert entities[one["@id"]]["prov:wasGeneratedBy"]["@id"] == action["@id"]
    used = {one["@id"] for one in as_list(entities["#stage-screen"]["prov:used"])}
    inputs = next(stage.inputs for stage in STAGES if stage.name == "screen")
    assert used == {*(f"{name}.parquet" for name in inputs), "#input-ember/rulings.csv"}
    assert entities["#input-ember/rulings.csv"]["sha256"]


def as_list(value: object) -> list:
    return value if isinstance(value, list) else [value]


def test_people_licence_and_date(described: Path, plain: Path):
    entities = graph(described)
    assert entities["./"]["datePublished"] == "2026-03-20"
    assert entities["./"]["license"] == {"@id": "https://spdx.org/licenses/CC-BY-4.0"}
    authors = [entities[one["@id"]]["name"] for one in entities["./"]["author"]]
    assert authors == ["A. N. Example", "B. Example"]
    bare = graph(plain)
    assert bare["./"]["datePublished"] == NOT_PUBLISHED
    assert NOT_PUBLISHED in bare["./"]["description"]
    assert bare[bare["./"]["license"]["@id"]]["name"] == "No licence stated"


def test_what_describes_a_session_makes_no_stage_stale(plain: Path, tmp_path: Path):
    config = demo_copy(tmp_path)
    folder = tieline.reduce(config).folder
    stamps = {path.name: path.stat().st_mtime_ns for path in folder.glob("*.parquet")}
    tieline.reduce(config, overrides=ABOUT)
    assert {path.name: path.stat().st_mtime_ns for path in folder.glob("*.parquet")} == stamps
    assert graph(folder)["./"]["datePublished"] == "2026-03-20"


def test_same_bytes_again(plain: Path, tmp_path: Path):
    other = tieline.reduce(demo_copy(tmp_path), report=True).folder
    for name in (METADATA, DATA_PACKAGE):
        assert (other / name).read_bytes() == (plain / name).read_bytes()


@pytest.mark.parametrize(
    ("key", "value"),
    [("date", "20 March 2026"), ("licence", "my own terms"), ("people", [{"name": "X", "orcid": "0000"}])],
)
def test_wrong_descriptions_are_refused(tmp_path: Path, key: str, value: object):
    with pytest.raises(tieline.InputError, match=f"about.{key}"):
        tieline.reduce(demo_copy(tmp_path), overrides={f"about.{key}": value})
