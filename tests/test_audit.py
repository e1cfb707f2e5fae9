"""An untouched run passes; whatever is changed in a run folder or its inputs is found and named for what it is."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

from sessions import demo_copy
from tieline import runner
from tieline.auditing.audit import Audit, audit, verify
from tieline.auditing.contents import compare_tables
from tieline.auditing.folder import Difference, read_run_folder
from tieline.auditing.recompute import ledger_differences
from tieline.cli import app
from tieline.configuration import load
from tieline.errors import InputError
from tieline.manifest import manifest_text
from tieline.provenance import bytes_digest, content_digest
from tieline.report.write import refresh_report, write_report
from tieline.storage import METADATA_KEY

EXPERIMENTS = ("EM-02", "EM-05")
TRIED = "screen.total.limits.glass=[99.9, 101.5]"


def short_session(folder: Path) -> Path:
    """The demo with two of its experiments, so that the chain runs in a moment; the path of its configuration."""
    config = demo_copy(folder)
    for name in ("probe.csv", "laser.csv", "experiments.csv"):
        path = config.parent / "ember" / name
        header, *rows = path.read_text(encoding="utf-8").splitlines()
        column = header.split(",").index("Run")
        kept = [row for row in rows if row.split(",")[column] in ("", *EXPERIMENTS)]
        path.write_text("\n".join([header, *kept]) + "\n", encoding="utf-8")
    rulings = config.parent / "ember" / "rulings.csv"
    header = rulings.read_text(encoding="utf-8").splitlines()[0]
    rulings.write_text(
        f'{header}\nEM02-ol-L2,Ni60,drop,K.V.,2026-03-12,"too high, by far (see notes)"\n', encoding="utf-8"
    )
    return config


@pytest.fixture(scope="module")
def reduced(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A reduced session that no test changes; its root."""
    root = tmp_path_factory.mktemp("audit")
    runner.run(load(short_session(root)))
    return root


@pytest.fixture
def own(reduced: Path, tmp_path: Path) -> Path:
    """A copy of the session that a test may change; its run folder."""
    shutil.copytree(reduced, tmp_path / "copy")
    return tmp_path / "copy" / "example_runs" / "ember"


def configs(run_folder: Path) -> Path:
    return run_folder.parents[1] / "configs"


def told(found: Audit | list[Difference]) -> dict[str, str]:
    differences = found if isinstance(found, list) else found.differences
    return {difference.file: difference.kind for difference in reversed(differences)}


def rewrite(path: Path, change: Callable[[pa.Table], pa.Table], **record: Any) -> None:
    """A stage file with other contents but valid Parquet and its record of origin, as a careful person would."""
    table = pq.read_table(path)
    metadata = json.loads(table.schema.metadata[METADATA_KEY])
    changed = change(table)
    pq.write_table(
        changed.replace_schema_metadata({METADATA_KEY: json.dumps({**metadata, **record}).encode()}), path
    )


def doubled(name: str, row: int) -> Callable[[pa.Table], pa.Table]:
    def change(table: pa.Table) -> pa.Table:
        values = table.column(name).to_pylist()
        values[row] *= 2
        place = table.column_names.index(name)
        return table.set_column(place, table.schema.field(name), pa.array(values))

    return change


def test_untouched_run_passes(reduced: Path):
    result = CliRunner().invoke(app, ["audit", str(reduced / "example_runs" / "ember"), "--json"])
    assert result.exit_code == 0
    found = json.loads(result.stdout)
    assert found["differences"] == []
    assert found["checked"]["recomputed_alike"] == found["checked"]["stage_files"] > 15
    assert found["left_out"]["rulings"][0] | {"row": 0} == {
        "spot": "EM02-ol-L2",
        "table": "ember/laser.csv",
        "row": 0,
        "experiment": "EM-02",
        "phase": "olivine",
        "analyte": "Ni60",
        "verdict": "drop",
        "reason": "too high, by far (see notes)",
        "analyst": "K.V.",
        "date": "2026-03-12",
        "material": None,
    }
    assert "screen.total.limits.glass not set → [97.5, 101.5]" in found["deviations"]
    assert [row["failed"] for row in found["reference_materials"]] == [[]] * len(found["reference_materials"])


def test_rulings_on_reference_spots_are_told_with_their_material_and_counted(own: Path):
    lines = "TWG-1-L01,*,drop,A.N.,2026-03-14,bubble\nTWG-1-L01,Ni60,keep,M.T.,2026-03-15,not here\n"
    rulings = configs(own) / "ember" / "rulings.csv"
    rulings.write_text(rulings.read_text(encoding="utf-8") + lines, encoding="utf-8")
    runner.run(load(configs(own) / "ember.toml"))
    found = audit(own)
    assert found.differences == []
    told = [row for row in found.left_out["rulings"] if row["material"]]
    assert [(row["spot"], row["material"], row["analyst"]) for row in told] == [
        ("TWG-1-L01", "TWG-1", "A.N."),
        ("TWG-1-L01", "TWG-1", "M.T."),
    ]
    laser, *_ = [row for row in found.reference_materials if row["batch"] == "laser-1"]
    names = read_run_folder(own).files["convert"].table
    assert names is not None
    measured = [
        row["analyte"]
        for row in names.to_pylist()
        if row["spot"] == "TWG-1-L01" and row["value_ppm"] is not None
    ]
    assert "Ni60" in measured
    assert (laser["values_ruled_out"], laser["spots_ruled_out"]) == (len(measured) - 1, 1)
    shown = " ".join(CliRunner().invoke(app, ["audit", str(own)]).stdout.split())
    assert "drop TWG-1-L01 (reference material TWG-1, whole spot) by A.N., 2026-03-14: bubble" in shown
    assert f"{len(measured) - 1} of 1 spot" in shown


def test_a_changed_account_of_the_calibration_is_found_from_its_rows(own: Path):
    """Values moved in the recorded ledger from one outcome to another, its sum as before."""
    folder = read_run_folder(own)
    assert ledger_differences(folder) == []
    record = folder.files["calibrate"].record
    assert record is not None
    outcomes = record["ledger"]["outcomes"]
    outcomes["reference values with an accepted value"] -= 3
    outcomes["reference values ruled out"] = 3
    details = " ".join(difference.detail for difference in ledger_differences(folder))
    assert re.search(r"reference values: (\d+) recorded, (\d+) counted", details)
    assert "reference values ruled out: 3 recorded, 0 counted" in details


def mutated(data: bytes, random: np.random.Generator) -> bytes:
    changed = bytearray(data)
    changed[int(random.integers(len(data)))] ^= int(random.integers(1, 256))
    return bytes(changed)


def test_every_single_byte_change_is_found_and_its_file_named(own: Path):
    """130 changes of stage files and inputs, one in each of them per round, and 20 of manifest and settings."""
    random = np.random.default_rng(7)
    names = {path: path.name for path in sorted(own.glob("*.parquet"))}
    names |= {configs(own) / path: path for path in read_run_folder(own).manifest["inputs"]}
    assert len(names) > 24
    good = {path: path.read_bytes() for path in names}
    for _ in range(5):
        for path, data in good.items():
            path.write_bytes(mutated(data, random))
        assert set(names.values()) <= set(told(verify(read_run_folder(own))))
    for path, data in good.items():
        path.write_bytes(data)
    for name in ["run.json", "effective.toml"] * 10:
        path = own / name
        data = path.read_bytes()
        path.write_bytes(mutated(data, random))
        assert name in told(verify(read_run_folder(own)))
        path.write_bytes(data)
    assert verify(read_run_folder(own)) == []


@pytest.mark.parametrize("name", ["pair.parquet", "run.json", "effective.toml", "laser.csv"])
def test_exit_status_of_a_changed_byte(own: Path, name: str):
    path = own / name if (own / name).exists() else configs(own) / "ember" / name
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(bytes(data))
    result = CliRunner().invoke(app, ["audit", str(own), "--json"])
    assert result.exit_code == 3
    assert any(name in one["file"] for one in json.loads(result.stdout)["differences"])


def test_flipped_bit_in_the_values_is_called_damaged(own: Path):
    path = own / "pair.parquet"
    column = pq.read_metadata(path).row_group(0).column(10)
    data = bytearray(path.read_bytes())
    data[column.data_page_offset + column.total_compressed_size - 3] ^= 4
    path.write_bytes(bytes(data))
    assert told(audit(own))["pair.parquet"] == "damaged"


def test_edited_number_is_found_and_the_right_one_told(own: Path):
    rewrite(own / "pair.parquet", doubled("mean_ppm", 0))
    found = audit(own)
    kinds = [one.kind for one in found.differences if one.file == "pair.parquet"]
    assert kinds == ["edited", "recomputed"]
    right = pq.read_table(own / "pair.parquet")["mean_ppm"][0].as_py() / 2
    assert f"recomputed {right:.10g}" in found.differences[-1].detail


def test_edited_number_with_forged_digests_is_found_by_recomputing(own: Path):
    """Somebody who also renews every digest that the program records still cannot make the chain agree."""
    path = own / "partition.parquet"
    changed = doubled("D", 0)
    content = content_digest(changed(pq.read_table(path)))
    rewrite(path, changed, content=content)
    manifest = json.loads((own / "run.json").read_bytes())
    manifest["stages"]["partition"]["files"]["partition.parquet"] = {
        "sha256": bytes_digest(path.read_bytes()),
        "content": content,
    }
    (own / "run.json").write_text(manifest_text(manifest), encoding="utf-8", newline="")
    kinds = {one.kind for one in audit(own).differences}
    assert "recomputed" in kinds
    assert "stale" in kinds  # classify was made from the honest table


def test_swapped_files_are_named(own: Path):
    one, two = (own / f"{name}.parquet" for name in ("pair.pairs", "pair.limits"))
    first, second = one.read_bytes(), two.read_bytes()
    one.write_bytes(second)
    two.write_bytes(first)
    found = {difference.file: difference for difference in verify(read_run_folder(own))}
    assert found["pair.pairs.parquet"].kind == found["pair.limits.parquet"].kind == "swapped"
    assert "pair.limits.parquet" in found["pair.pairs.parquet"].detail


def test_file_of_another_run_is_named(own: Path, tmp_path: Path):
    other = load(configs(own) / "ember.toml", out=tmp_path, overrides=["partition.confidence=0.9"])
    runner.run(other)
    shutil.copy(other.run_folder / "partition.parquet", own / "partition.parquet")
    found = {difference.file: difference for difference in verify(read_run_folder(own))}
    assert found["partition.parquet"].kind == "swapped"
    assert "another run" in found["partition.parquet"].detail


def test_rewritten_file_with_the_same_values_is_named(own: Path):
    rewrite(own / "pair.parquet", lambda table: table)
    assert told(verify(read_run_folder(own))) == {"pair.parquet": "rewritten"}


def test_foreign_parquet_file_is_named(own: Path):
    pq.write_table(pa.table({"x": [1]}), own / "pair.parquet")
    assert told(audit(own))["pair.parquet"] == "swapped"


def test_edited_manifest_and_a_manifest_in_other_words(own: Path):
    path = own / "run.json"
    manifest = json.loads(path.read_bytes())
    path.write_text(json.dumps(manifest), encoding="utf-8")
    assert told(verify(read_run_folder(own))) == {"run.json": "rewritten"}
    manifest["stages"]["screen"]["ledger"]["entered"] += 1
    path.write_text(json.dumps(manifest), encoding="utf-8")
    assert told(verify(read_run_folder(own))) == {"run.json": "edited"}
    path.write_text("{", encoding="utf-8")
    assert told(verify(read_run_folder(own))) == {"run.json": "damaged"}
    path.unlink()
    assert told(verify(read_run_folder(own))) == {"run.json": "missing"}


def test_edited_settings_in_effect_name_the_setting(own: Path):
    path = own / "effective.toml"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("rim_um = 20.0", "rim_um = 25.0"), encoding="utf-8")
    (difference,) = [one for one in verify(read_run_folder(own)) if one.file == "effective.toml"]
    assert difference.kind == "edited"
    assert "screen.zoning.rim_um 20.0 → 25.0" in difference.detail


def test_changed_input_names_the_values_that_come_out_otherwise(own: Path):
    path = configs(own) / "ember" / "accepted.csv"
    path.write_text(path.read_text(encoding="utf-8").replace("51.23", "51.53"), encoding="utf-8")
    found = audit(own)
    assert told(found)["ember/accepted.csv"] == "edited"
    assert told(found)["calibrate.materials.parquet"] == "recomputed"


def test_missing_input_and_missing_stage_file(own: Path):
    (configs(own) / "ember" / "rulings.csv").unlink()
    (own / "screen.groups.parquet").unlink()
    found = audit(own)
    assert told(found) == {"ember/rulings.csv": "missing", "screen.groups.parquet": "missing"}
    assert any("not run again" in note for note in found.notes)


def test_stage_recomputed_alone_leaves_the_later_ones_stale(own: Path):
    session = load(configs(own) / "ember.toml", overrides=[TRIED])
    runner.run(session, only="screen")
    found = verify(read_run_folder(own))
    assert {one.kind for one in found} == {"stale"}
    assert "pair.parquet" in told(found)
    runner.run(session)
    assert audit(own).differences == []
    assert audit(own).overrides == [TRIED]


def test_edited_report_and_report_of_other_results(own: Path):
    session = load(configs(own) / "ember.toml")
    refresh_report(session)
    assert audit(own).differences == []
    path = own / "partition_coefficients.csv"
    path.write_bytes(path.read_bytes().replace(b"1", b"2", 1))
    assert told(audit(own)) == {"partition_coefficients.csv": "edited"}
    runner.run(load(session.path, overrides=["partition.confidence=0.9"]))
    assert told(audit(own)) == {"report.html": "stale"}


def test_later_edit_of_the_configuration_is_a_note_and_no_difference(own: Path):
    path = configs(own) / "ember.toml"
    path.write_text(
        path.read_text(encoding="utf-8").replace("rim_um = 20.0", "rim_um = 21.0"), encoding="utf-8"
    )
    found = audit(own)
    assert found.differences == []
    assert any("screen.zoning.rim_um 20.0 → 21.0" in note for note in found.notes)


def test_settings_against_those_of_the_laboratory(own: Path, tmp_path: Path):
    lab = tmp_path / "lab.toml"
    lab.write_text("[screen.total]\nsigmas = 3.0\nlimits = { glass = [97.5, 101.5] }\n", encoding="utf-8")
    lines = audit(own, against=lab).deviations
    assert "screen.total.sigmas 3.0 → 2.0" in lines
    assert not any("limits.glass" in line for line in lines)
    lab.write_text("[screen.total]\nsigma = 3.0\n", encoding="utf-8")
    with pytest.raises(InputError, match="sigmas"):
        audit(own, against=lab)


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="needs sha256sum")
def test_seal_is_a_checksum_file_and_keeps_later_runs_out(own: Path):
    session = load(configs(own) / "ember.toml")
    refresh_report(session)
    arguments = ["audit", str(own), "--seal"]
    assert CliRunner().invoke(app, arguments).exit_code == 0
    checked = subprocess.run(
        ["sha256sum", "-c", "--strict", "SHA256SUMS"], cwd=own, capture_output=True, check=False
    )
    assert checked.returncode == 0
    before = {path.name: path.read_bytes() for path in own.iterdir()}
    stale = load(session.path, overrides=["classify.compatible_above=2"])
    for write in (runner.run, write_report):
        with pytest.raises(InputError, match="is sealed"):
            write(stale)
    with pytest.raises(InputError, match="The folder is sealed: bring back"):
        runner.finished(stale, "classify")
    assert {path.name: path.read_bytes() for path in own.iterdir()} == before
    assert audit(own).differences == []
    (own / "note.txt").write_text("later", encoding="utf-8")
    (own / "SHA256SUMS").write_bytes((own / "SHA256SUMS").read_bytes().replace(b"  run.json", b"  ran.json"))
    assert told(verify(read_run_folder(own))) == {"note.txt": "seal", "run.json": "seal", "ran.json": "seal"}


def test_folder_with_a_difference_is_not_sealed(own: Path):
    rewrite(own / "pair.parquet", doubled("mean_ppm", 0))
    found = audit(own, with_seal=True)
    assert found.differences
    assert not (own / "SHA256SUMS").exists()


def printed(run_folder: Path) -> str:
    return CliRunner().invoke(app, ["audit", str(run_folder)]).stdout


def not_sealed(run_folder: Path) -> list[str]:
    """What keeps a folder without differences from being sealed; the command says it with status 2."""
    result = CliRunner().invoke(app, ["audit", str(run_folder), "--seal", "--json"])
    found = json.loads(result.stdout)
    assert (result.exit_code, found["differences"], found["sealed"]) == (2, [], False)
    assert not (run_folder / "SHA256SUMS").exists()
    return [note.removeprefix("not sealed: ") for note in found["notes"] if note.startswith("not sealed: ")]


def test_a_folder_without_its_report_is_not_sealed(own: Path):
    config = configs(own) / "ember.toml"
    assert not_sealed(own) == [f"the report is missing; run `tieline report {config}`"]
    assert "no report was compared." in " ".join(printed(own).split())
    refresh_report(load(config))
    assert "so did the 8 files of the report." in " ".join(printed(own).split())
    (own / "methods.txt").unlink()
    found = audit(own, with_seal=True)
    assert [(one.kind, one.detail.rpartition(": ")[2]) for one in found.differences] == [
        ("stale", "methods.txt is missing")
    ]
    assert not found.sealed


def test_a_folder_of_some_stages_is_not_sealed(own: Path, tmp_path: Path):
    config = configs(own) / "ember.toml"
    session = load(config, out=tmp_path / "short")
    runner.run(session, until="classify")
    assert not_sealed(session.run_folder) == [f"not run: assess; run `tieline run {config} --report`"]


def test_a_folder_is_not_sealed_while_rulings_wait_to_be_run(own: Path):
    config = configs(own) / "ember.toml"
    refresh_report(load(config))
    text = config.read_text(encoding="utf-8")
    (config.parent / "later.csv").write_text(
        "spot,analyte,verdict,analyst,date,reason\nEM02-ol-1,*,drop,A.N.,2026-03-20,crack\n", encoding="utf-8"
    )
    config.write_text(
        text.replace('rulings = "ember/rulings.csv"', 'rulings = "later.csv"'), encoding="utf-8"
    )
    (reason,) = not_sealed(own)
    assert "screen.rulings ember/rulings.csv → later.csv" in reason
    assert f"run `tieline run {config} --report`" in reason
    config.write_text("out = 1\n", encoding="utf-8")
    (reason,) = not_sealed(own)
    assert "can no longer be read" in reason


def test_a_report_of_stale_results_says_what_to_run(own: Path):
    config = configs(own) / "ember.toml"
    rulings = configs(own) / "later.csv"
    rulings.write_text("spot,analyte,verdict,analyst,date,reason\n", encoding="utf-8")
    with pytest.raises(InputError) as error:
        write_report(load(config, overrides=['screen.rulings="later.csv"']))
    (problem,) = error.value.problems
    assert (
        "calibrate is stale (ember/rulings.csv is no longer an input; later.csv is a new input)"
        in problem.message
    )
    assert problem.remedy == f"Run `tieline run {config}` first."


def test_folder_that_is_no_run_folder_is_refused(tmp_path: Path):
    for path in (tmp_path, tmp_path / "nothing"):
        assert CliRunner().invoke(app, ["audit", str(path)]).exit_code != 0
        with pytest.raises(InputError):
            audit(path)


def test_last_digits_are_told_apart_from_other_numbers():
    one = pa.table({"element": ["Ni", "Co"], "D": [1.0, 2.0]})
    assert compare_tables(one, pa.table({"element": ["Ni", "Co"], "D": [1.0, 2.0 + 1e-13]})).last_digits
    other = compare_tables(one, pa.table({"element": ["Ni", "Co"], "D": [1.0, 2.0001]}))
    assert not other.same
    assert other.detail == "D of Co is 2, recomputed 2.0001"
    assert not compare_tables(one, pa.table({"element": ["Ni", "Co"], "D": [None, 2.0]})).same
