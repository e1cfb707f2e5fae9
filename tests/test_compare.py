"""Two reductions compared: settings, spots and the rule that left them out, D in units of its sigma, classes."""

from __future__ import annotations

import dataclasses
import json
import shutil
from pathlib import Path
from typing import Any

import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

from test_audit import short_session
from tieline import runner
from tieline.cli import app
from tieline.comparing import changed_classes, changed_coefficients, compare, read_reduction, read_reductions
from tieline.configuration import load
from tieline.errors import InputError


@pytest.fixture(scope="module")
def root(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Reductions of one session: as configured, with other settings, and twice with other rulings."""
    root = tmp_path_factory.mktemp("compare")
    config = short_session(root)
    for name, overrides in {"a": [], "b": OTHER}.items():
        runner.run(load(config, out=root / name, overrides=overrides))
    rulings = config.parent / "ember" / "rulings.csv"
    text = rulings.read_text(encoding="utf-8")
    line = "EM02-ol-L3,*,drop,M.T.,2026-03-13,epoxy in the pit\n"
    rulings.write_text(text + line, encoding="utf-8")
    runner.run(load(config, out=root / "c"))
    lines = "TWG-1-L01,*,drop,M.T.,2026-03-13,bubble\nTWG-1-L01,Ni60,keep,M.T.,2026-03-13,not here\n"
    rulings.write_text(text + lines, encoding="utf-8")
    runner.run(load(config, out=root / "d"))
    rulings.write_text(text, encoding="utf-8")
    return root


OTHER = ["screen.total.limits.glass=[99.9, 101.5]", "classify.highly_incompatible_below=0.1"]


def found(root: Path, a: str, b: str) -> dict[str, Any]:
    return compare(*(read_reduction(root / name / "ember") for name in (a, b)))


def test_a_run_does_not_differ_from_itself(root: Path, tmp_path: Path):
    shutil.copytree(root / "a", tmp_path / "copy")
    result = compare(read_reduction(root / "a" / "ember"), read_reduction(tmp_path / "copy" / "ember"))
    assert [result[name] for name in ("versions", "settings", "inputs", "spots", "D", "classes")] == [[]] * 6
    assert result["D_compared"] > 50


def test_settings_and_classes_that_differ(root: Path):
    result = found(root, "a", "b")
    assert result["settings"] == [
        "classify.highly_incompatible_below 0.01 → 0.1",
        "screen.total.limits.glass[1] 97.5 → 99.9",
    ]
    assert result["inputs"] == []
    classes = {(row["a"], row["b"]) for row in result["classes"]}
    assert ("incompatible", "highly incompatible") in classes


def test_who_made_a_run_is_no_difference_of_the_reduction(root: Path):
    one, other = (read_reduction(root / name / "ember") for name in ("a", "a"))
    named = dataclasses.replace(
        other, settings={**other.settings, "about": {"publisher": "A"}, "session": "x"}
    )
    assert compare(one, named)["settings"] == []


def test_spots_name_the_rule_that_left_them_out(root: Path):
    entries = found(root, "a", "b")["spots"]
    assert entries
    for entry in entries:
        assert entry["used_in"] == "A"
        assert entry["rule"].split(", ")[0] in ("total", "glass-overlap", "crystal-overlap")
        assert entry["detail"]
    assert any(entry["rule"].startswith("total") and "total 9" in entry["detail"] for entry in entries)
    (entry,) = found(root, "a", "c")["spots"]
    assert (entry["spot"], entry["used_in"], entry["rule"]) == ("EM02-ol-L3", "A", "ruling")
    assert entry["detail"] == "epoxy in the pit (M.T., 2026-03-13)"
    assert len(entry["analytes"]) > 20
    (back,) = found(root, "c", "a")["spots"]
    assert (back["used_in"], back["rule"]) == ("B", "ruling")
    assert found(root, "a", "c")["inputs"] == ["ember/rulings.csv has other contents"]


def test_changes_are_ordered_and_in_units_of_the_smaller_sigma(root: Path):
    entries = found(root, "a", "c")["D"]
    assert {(row["experiment"], row["alpha"]) for row in entries} == {("EM-02", "olivine")}
    changes = [row["change_in_sigma"] for row in entries if row["change_in_sigma"] is not None]
    assert [abs(one) for one in changes] == sorted((abs(one) for one in changes), reverse=True)
    first = entries[0]
    expected = (first["b"]["D"] - first["a"]["D"]) / min(first["a"]["D_sd"], first["b"]["D_sd"])
    assert first["change_in_sigma"] == pytest.approx(expected)
    opposite = {(row["experiment"], row["alpha"], row["element"]): row for row in found(root, "c", "a")["D"]}
    assert len(opposite) == len(entries)
    key = (first["experiment"], first["alpha"], first["element"])
    assert opposite[key]["change_in_sigma"] == pytest.approx(-expected)


def row(**values: Any) -> dict[str, Any]:
    base = {"experiment": "X", "alpha": "olivine", "beta": "glass", "element": "Ni", "D": 1.0, "D_sd": 0.1}
    return (
        base
        | {"D_lo": 0.8, "D_hi": 1.2, "kind": "value", "confidence": 0.95, "class": "incompatible"}
        | values
    )


def test_limits_missing_and_last_digits():
    limit = row(element="Ba", D=None, D_sd=None, D_lo=0.0, D_hi=0.1, kind="upper-limit")
    one = [row(), limit, row(element="Co"), row(element="Zn")]
    two = [row(D=1.0 + 1e-13), row(element="Ba"), row(element="Co", D_sd=0.2, **{"class": "unresolved"})]
    entries = changed_coefficients(one, two)
    assert [entry["element"] for entry in entries] == ["Co", "Ba", "Zn"]
    assert [entry["change_in_sigma"] for entry in entries] == [0.0, None, None]
    assert entries[2]["b"] is None
    (changed,) = changed_classes(one, two)
    assert (changed["element"], changed["a"], changed["b"]) == ("Co", "incompatible", "unresolved")


def test_run_of_another_version_is_compared_as_far_as_it_goes(root: Path, tmp_path: Path):
    shutil.copytree(root / "a" / "ember", tmp_path / "old")
    for name, gone in (
        ("classify", ["p_compatible", "overlap_bound", "confidence"]),
        ("screen.findings", ["action"]),
    ):
        path = tmp_path / "old" / f"{name}.parquet"
        table = pq.read_table(path)
        pq.write_table(table.drop_columns(gone), path)
    manifest = json.loads((tmp_path / "old" / "run.json").read_bytes())
    manifest["tieline"] = "0.0.1"
    manifest["stages"]["screen"]["revision"] = 0
    (tmp_path / "old" / "run.json").write_text(json.dumps(manifest), encoding="utf-8")
    text = (tmp_path / "old" / "effective.toml").read_text(encoding="utf-8")
    (tmp_path / "old" / "effective.toml").write_text(text + "\n[unknown]\nkey = 1\n", encoding="utf-8")
    result = compare(read_reduction(tmp_path / "old"), read_reduction(root / "a" / "ember"))
    assert result["D"] == []
    assert result["versions"][0].startswith("tieline 0.0.1 → ")
    assert result["versions"][1].startswith("revision of.screen 0 → ")
    assert result["settings"] == ["unknown {'key': 1} → not set"]


def test_tables_under_other_paths_are_matched_by_spot(root: Path, tmp_path: Path):
    config = short_session(tmp_path)
    (config.parent / "ember").rename(config.parent / "tables")
    config.write_text(config.read_text(encoding="utf-8").replace("ember/", "tables/"), encoding="utf-8")
    session = load(config)
    runner.run(session)
    result = compare(read_reduction(root / "a" / "ember"), read_reduction(session.run_folder))
    assert result["spots"] == []
    assert result["D"] == []


def test_command_prints_and_refuses(root: Path, tmp_path: Path):
    arguments = ["compare", str(root / "a" / "ember"), str(root / "b" / "ember")]
    result = CliRunner().invoke(app, arguments)
    assert result.exit_code == 0
    assert "classify.highly_incompatible_below 0.01 → 0.1" in result.stdout
    assert json.loads(CliRunner().invoke(app, [*arguments, "--json"]).stdout)["settings"]
    shutil.copytree(root / "a" / "ember", tmp_path / "lacking")
    (tmp_path / "lacking" / "classify.parquet").unlink()
    with pytest.raises(InputError, match=r"classify\.parquet: no such file"):
        read_reduction(tmp_path / "lacking")


def test_what_is_no_run_folder_is_told_once_and_for_both(root: Path, tmp_path: Path):
    table = tmp_path / "probe.csv"
    table.write_text("Point,MgO\n", encoding="utf-8")
    for path, message in (
        (table, "is a file, not a run folder."),
        (table / "x", "no such run folder."),
        (tmp_path / "nothing", "no such run folder."),
        (tmp_path, "is no run folder: it holds neither run.json nor a stage file."),
    ):
        with pytest.raises(InputError) as error:
            read_reductions(path, root / "a" / "ember")
        (problem,) = error.value.problems
        assert (problem.message, problem.file) == (message, str(path))
        assert "<out>/<session>" in problem.remedy
    with pytest.raises(InputError) as error:
        read_reductions(table, root / "a")
    assert [problem.file for problem in error.value.problems] == [str(table), str(root / "a")]
    assert error.value.problems[1].remedy == f"Run folders in it: {root / 'a' / 'ember'}."
    result = CliRunner().invoke(app, ["compare", str(table), str(tmp_path)])
    assert isinstance(result.exception, InputError)


def test_a_ruling_on_a_reference_spot_is_a_change_of_its_use(root: Path):
    (entry,) = found(root, "a", "d")["spots"]
    assert (entry["spot"], entry["material"], entry["used_in"]) == ("TWG-1-L01", "TWG-1", "A")
    assert (entry["rule"], entry["detail"]) == ("ruling", "bubble (M.T., 2026-03-13)")
    assert "Sc45" in entry["analytes"]
    assert "Ni60" not in entry["analytes"]
    (back,) = found(root, "d", "a")["spots"]
    assert (back["used_in"], back["analytes"]) == ("B", entry["analytes"])
    shown = CliRunner().invoke(app, ["compare", str(root / "a" / "ember"), str(root / "d" / "ember")])
    assert "TWG-1-L01  TWG-1 " in shown.stdout
