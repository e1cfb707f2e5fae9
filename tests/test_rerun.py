"""After every scripted edit exactly those stages are recomputed that the edit touches, and the plan says why.

Expected are the stages named beside the edit, and those that read a table which came out different: known from
the contents of the stage files before and after, not from the program's own plan.
"""

from __future__ import annotations

import os
import re
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from test_audit import short_session
from tieline import plan, runner
from tieline.configuration import load
from tieline.errors import InputError
from tieline.manifest import read_manifest
from tieline.plan import settings_differences, table_path
from tieline.provenance import content_digest
from tieline.reading.input_file import InputFile
from tieline.rulings_effect import leaning_remarks, ruling_effects, without_rulings
from tieline.stages import NAMES, STAGES
from tieline.storage import read_table

Edit = Callable[[Path], object]


def swap(old: str, new: str) -> Edit:
    """Replaces one text of the configuration, which must be there."""

    def edit(config: Path) -> None:
        text = config.read_text(encoding="utf-8")
        assert old in text, old
        config.write_text(text.replace(old, new, 1), encoding="utf-8")

    return edit


def in_file(name: str, pattern: str, new: str) -> Edit:
    """Replaces the first match of a pattern in an input file."""

    def edit(config: Path) -> None:
        path = config.parent / "ember" / name
        text, count = re.subn(pattern, new, path.read_text(encoding="utf-8"), count=1)
        assert count == 1, pattern
        path.write_text(text, encoding="utf-8")

    return edit


def section_first(name: str) -> Edit:
    """Moves a section, with what belongs to it, before all other sections."""

    def edit(config: Path) -> None:
        text = config.read_text(encoding="utf-8")
        start = text.index(f"[{name}]")
        end = text.find("\n[", start + 1) + 1 or len(text)
        first = text.index("[[ingest.tables]]")
        moved = text[start:end]
        config.write_text(text[:first] + moved + "\n" + text[first:start] + text[end:], encoding="utf-8")

    return edit


def touch(name: str) -> Edit:
    return lambda config: os.utime(config.parent / "ember" / name, (1e9, 1e9))


def run_file(config: Path, name: str) -> Path:
    return load(config).run_folder / name


RULED = {"calibrate", "screen"}
EDITS: list[tuple[str, Edit, set[str]]] = [
    ("comment", swap("[partition]", "# a comment\n[partition]  # and another"), set()),
    ("blank lines and blanks", swap("confidence = 0.95", "\n\nconfidence   =    0.95"), set()),
    ("other number format", swap("rim_um = 20.0", "rim_um = 2e1"), set()),
    ("sections in another order", section_first("classify"), set()),
    ("keys in another order", swap("olivine = 41.0, clinopyroxene = 53.0", "clinopyroxene = 53.0, olivine = 41.0"), set()),
    ("a default written out", swap("[calibrate]", "[calibrate]\ndrift_p = 0.01"), set()),
    ("a key that said the default removed", swap("correct = false", ""), set()),
    ("windows line ends", lambda c: c.write_bytes(c.read_bytes().replace(b"\n", b"\r\n")), set()),
    ("unix line ends", lambda c: c.write_bytes(c.read_bytes().replace(b"\r\n", b"\n")), set()),
    ("input touched", touch("probe.csv"), set()),
    ("input written again", in_file("laser.csv", r"\A", ""), set()),
    ("report title", swap("[classify]", '[report]\ntitle = "Ember"\n\n[classify]'), set()),
    ("file that no stage reads", lambda c: (c.parent / "ember" / "notes.txt").write_text("x"), set()),
    ("starting composition", in_file("starting_composition.csv", "48.595", "48.6"), {"assess"}),
    ("elements that can be lost", swap('losable = ["Fe", "Na", "K"]', 'losable = ["Fe", "Na"]'), {"assess"}),
    ("other working directory", lambda c: os.chdir(c.parent), set()),
    ("class boundary", swap("highly_incompatible_below = 0.01", "highly_incompatible_below = 0.1"), {"classify"}),
    ("class confidence, no effect", swap("[classify]", "[classify]\nconfidence = 0.9500001"), {"classify"}),
    ("confidence", swap("confidence   =    0.95", "confidence = 0.9"), {"partition"}),
    ("preferred technique", swap('prefer = ["laser", "EPMA"]', 'prefer = ["EPMA"]'), {"partition"}),
    ("mean", swap("[pair]", '[pair]\nmean = "arithmetic"'), {"pair"}),
    ("a pair less", swap(', ["plagioclase", "glass"]]', "]"), {"pair"}),
    ("rim", swap("rim_um = 2e1", "rim_um = 30.0"), {"screen"}),
    ("total", swap("glass = [97.5, 101.5]", "glass = [99.5, 101.5]"), {"screen"}),
    ("total removed", swap("limits = { glass = [99.5, 101.5] }", ""), {"screen"}),
    ("reason of a ruling", in_file("rulings.csv", "by far", "by much"), RULED),
    ("ruling removed", in_file("rulings.csv", "EM02-ol-L2.*\n", ""), RULED),
    ("a reference ruled out", in_file("rulings.csv", r"\Z", "TWG-1-L01,*,drop,A.N.,2026-03-14,bubble\n"), RULED),
    ("accepted value", in_file("accepted.csv", "51.23", "51.24"), {"calibrate"}),
    ("calibration where no reference tells", swap("EPMA = 0.01", "EPMA = 0.02"), {"calibrate"}),
    ("internal standard", swap("olivine = 41.0", "olivine = 40.0"), {"convert"}),
    ("a spelling that no table uses", swap('olivine = ["ol"]', 'olivine = ["ol", "olv"]'), {"ingest"}),
    ("input with one more line end", in_file("probe.csv", r"\Z", "\n"), {"ingest"}),
    ("a condition", in_file("experiments.csv", ",1275,", ",1276,"), {"ingest"}),
    ("a value", in_file("laser.csv", "2417,", "2418,"), {"ingest"}),
    ("stage file removed", lambda c: run_file(c, "pair.limits.parquet").unlink(), {"pair"}),
    ("record of origin lost", lambda c: run_file(c, "screen.parquet").write_bytes(b"PAR1"), {"screen"}),
]  # fmt: skip


def contents(config: Path) -> dict[str, str | None]:
    folder = load(config).run_folder
    digests: dict[str, str | None] = {}
    for stage in STAGES:
        for table in stage.outputs:
            try:
                digests[table] = content_digest(read_table(table_path(folder, table), table))
            except (InputError, FileNotFoundError):
                digests[table] = None
    return digests


def recomputed(config: Path, **options: object) -> set[str]:
    return {report.verdict.stage for report in runner.run(load(config), **options) if report.recomputed}  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def reduced(tmp_path_factory: pytest.TempPathFactory) -> Path:
    root = tmp_path_factory.mktemp("rerun")
    runner.run(load(short_session(root)))
    return root


@pytest.fixture
def own(reduced: Path, tmp_path: Path) -> Path:
    shutil.copytree(reduced, tmp_path / "copy")
    return tmp_path / "copy" / "configs" / "ember.toml"


def test_scripted_edits_one_after_the_other(own: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(tmp_path)
    config, before = own, contents(own)
    assert len(EDITS) >= 30
    for name, edit, direct in EDITS:
        edit(config)
        if name == "other working directory":
            config = Path("ember.toml")
        planned = {verdict.stage: verdict.state for verdict in runner.status(load(config))}
        done = recomputed(config)
        after = contents(config)
        different = {table for table, digest in after.items() if digest != before[table]}
        expected = direct | {stage.name for stage in STAGES if different & set(stage.inputs)}
        if name in ("stage file removed", "record of origin lost"):  # it came out as it was before the damage
            expected = direct
        assert done == expected, name
        assert {stage for stage, state in planned.items() if state != "current"} >= done, name
        assert direct <= {stage for stage, state in planned.items() if state == "stale"}, name
        assert not runner_has_work(config), name
        before = after
    fresh = load(config, out=tmp_path / "fresh")
    runner.run(fresh)
    digests = {
        table: content_digest(read_table(table_path(fresh.run_folder, table), table)) for table in before
    }
    assert digests == before


def runner_has_work(config: Path) -> bool:
    return any(verdict.state != "current" for verdict in runner.status(load(config)))


def reasons(config: Path, **options: object) -> dict[str, str]:
    return {verdict.stage: "; ".join(verdict.reasons) for verdict in runner.status(load(config, **options))}  # type: ignore[arg-type]


def test_reasons_name_the_setting_the_file_and_the_revision(own: Path, monkeypatch: pytest.MonkeyPatch):
    swap("glass = [97.5, 101.5]", "glass = [97.5, 101.0]")(own)
    swap("prefer = [", "sigma_from_limit = 2\nprefer = [")(own)
    in_file("accepted.csv", "51.23", "51.24")(own)
    found = reasons(own)
    assert found["calibrate"] == "ember/accepted.csv changed"
    assert found["screen"] == "total.limits.glass[2] 101.5 → 101.0"
    assert found["pair"] == "recomputed only if calibrate or screen comes out different"
    assert found["partition"] == "sigma_from_limit 3.0 → 2.0"
    swap("limits = { glass = [97.5, 101.0] }", "")(own)
    assert reasons(own)["screen"] == "total.limits.glass [97.5, 101.5] → not set"
    revised = tuple(
        replace(stage, revision=stage.revision + 1) if stage.name == "convert" else stage for stage in STAGES
    )
    monkeypatch.setattr(runner, "STAGES", revised)
    assert re.fullmatch(r"written by revision \d+, now \d+", reasons(own)["convert"])


def test_settings_differences_of_every_kind():
    old = {"a": 1, "b": {"x": [1, 2], "y": None}, "tables": [{"path": "p"}], "names": ["u"]}
    new = {"a": 1, "b": {"x": [1, 3]}, "tables": [{"path": "p"}, {"path": "q"}], "names": ["u", "v"]}
    assert settings_differences(old, new) == [
        "b.x[2] 2 → 3",
        "b.y none → not set",
        "names ['u'] → ['u', 'v']",
        "tables[2] not set → {'path': 'q'}",
    ]
    assert settings_differences(old, old) == []


def test_a_tried_setting_is_stored_and_told(own: Path):
    overrides = ["classify.compatible_above=2.0", "screen.total.sigmas=3"]
    session = load(own, overrides=overrides)
    runner.run(session)
    assert read_manifest(session.run_folder)["overrides"] == overrides
    assert "compatible_above = 2.0" in (session.run_folder / "effective.toml").read_text(encoding="utf-8")
    assert reasons(own, overrides=overrides) == dict.fromkeys((stage.name for stage in STAGES), "")
    assert reasons(own)["classify"] == "compatible_above 2.0 → 1.0"


def test_only_one_stage_leaves_the_later_ones_alone_and_fresh_recomputes_all(own: Path):
    swap("confidence = 0.95", "confidence = 0.9")(own)
    with pytest.raises(InputError, match=r"--only classify needs current files.*partition is stale"):
        runner.run(load(own), only="classify")
    assert recomputed(own, only="partition") == {"partition"}
    assert runner_has_work(own)
    assert recomputed(own, fresh=True) == {stage.name for stage in STAGES}


def test_altered_stage_file_is_not_built_upon(own: Path):
    path = run_file(own, "pair.parquet")
    data = bytearray(path.read_bytes())
    table = plan.read_record(path)
    assert table is not None
    data[200] ^= 1
    path.write_bytes(bytes(data))
    swap("confidence = 0.95", "confidence = 0.9")(own)
    before = contents(own)
    with pytest.raises(InputError, match="is damaged"):
        runner.run(load(own))
    assert contents(own) == before
    path.unlink()
    assert "partition" in recomputed(own)


def test_effect_of_rulings_is_that_of_a_run_without_them(own: Path, tmp_path: Path):
    rulings = own.parent / "ember" / "rulings.csv"
    text = rulings.read_text(encoding="utf-8")
    rulings.write_text(
        text
        + "EM05-gl-L1,*,drop,M.T.,2026-03-13,devitrified\nEM05-cpx-L3,*,keep,M.T.,2026-03-13,looks fine\n",
        encoding="utf-8",
    )
    session = load(own)
    runner.run(session)
    names = [table for stage in STAGES for table in stage.outputs]
    tables = runner.tables_of(session, names)
    rulings.write_text(text.splitlines()[0] + "\n", encoding="utf-8")
    without = load(own, out=tmp_path / "without")
    runner.run(without)
    other = runner.tables_of(without, names)
    alone = without_rulings(tables["screen"], tables["screen.findings"])
    assert alone.column("use").to_pylist() == other["screen"].column("use").to_pylist()
    assert alone.column("why").to_pylist() == other["screen"].column("why").to_pylist()
    keys = ("experiment", "alpha", "beta", "element")
    expected = {tuple(row[name] for name in keys): row for row in other["partition"].to_pylist()}
    accepted = runner.accepted_values(session)
    effects = ruling_effects(tables, session.settings, accepted=accepted, least_change=0.0)
    assert len(effects) > 20
    for effect in effects:
        assert effect.without is not None
        assert effect.without["kind"] == expected[effect.key]["kind"]
        for name in ("D", "D_sd", "D_lo", "D_hi"):
            assert effect.without[name] == pytest.approx(expected[effect.key][name], rel=1e-12)
    changes = [abs(effect.change) for effect in effects if effect.change is not None]
    assert changes == sorted(changes, reverse=True)
    strong = ruling_effects(tables, session.settings, accepted=accepted)
    assert 0 < len(strong) < len(effects)


@pytest.mark.parametrize("spots", [["TWG-1-L01"], ["TWG-1-L01", "EM05-gl-L1"]])
def test_effect_of_a_ruling_on_a_reference_is_that_of_a_run_without_it(
    own: Path, tmp_path: Path, spots: list[str]
):
    """With every value of its batch divided by another factor, some of them pass or fail a test."""
    rulings = own.parent / "ember" / "rulings.csv"
    header = rulings.read_text(encoding="utf-8").splitlines()[0] + "\n"
    rulings.write_text(
        header + "".join(f"{spot},*,drop,M.T.,2026-03-13,bubble\n" for spot in spots), encoding="utf-8"
    )
    session = load(own, overrides=["calibrate.correct=bias"])
    runner.run(session)
    names = [table for stage in STAGES for table in stage.outputs]
    tables = runner.tables_of(session, names)
    rulings.write_text(header, encoding="utf-8")
    without = load(own, overrides=["calibrate.correct=bias"], out=tmp_path / "without")
    runner.run(without)
    keys = ("experiment", "alpha", "beta", "element")
    rows = runner.tables_of(without, ["partition"])["partition"].to_pylist()
    expected = {tuple(row[name] for name in keys): row for row in rows}
    accepted = runner.accepted_values(session)
    effects = ruling_effects(tables, session.settings, accepted=accepted, least_change=0.0)
    assert {effect.key[0] for effect in effects} == {"EM-02", "EM-05"}
    for effect in effects:
        assert effect.without == expected[effect.key]


@pytest.mark.parametrize("broken", ["", "accepted.csv", "probe.csv"])
def test_what_is_wrong_with_rulings_is_told_once(own: Path, broken: str):
    """Two stages read them; whichever stage the run comes to, `--until` included."""
    rulings = own.parent / "ember" / "rulings.csv"
    with rulings.open("a", encoding="utf-8") as file:
        file.write("TWG-1-L01,*,maybe,A.N.,2026-03-14,bubble\nTWG-1-L0,*,drop,A.N.,2026-03-14,bubble\n")
    if broken:
        path = own.parent / "ember" / broken
        path.write_bytes(
            path.read_bytes().replace(b"TWG-1,SiO2,51.23", b"TWG-1,SiO2,-1") if "acc" in broken else b""
        )
    for until in (None, "calibrate"):
        with pytest.raises(InputError) as error:
            runner.run(load(own), until=until)
        problems = error.value.problems
        assert len(set(problems)) == len(problems)
        told = [(problem.row, problem.column) for problem in problems if "rulings" in str(problem.file)]
        # Which spots there are is only known where the spot tables can be read.
        assert sorted(told) == ([(3, "verdict")] if broken == "probe.csv" else [(3, "verdict"), (4, "spot")])
        assert any(broken in str(problem.file) for problem in problems)


def test_one_file_for_accepted_values_and_rulings_is_given_as_both(own: Path):
    settings = load(own, overrides=['screen.rulings="ember/accepted.csv"']).settings
    stage = STAGES[NAMES.index("calibrate")]
    file = InputFile.from_bytes("ember/accepted.csv", b"")
    given = {"ember/accepted.csv": file}
    assert stage.file_arguments(settings, given) == {"files": given, "rulings": given}


def test_hand_exclusions_that_lean_one_way_are_remarked(own: Path):
    """The highest and the lowest Ni of olivine dropped by hand, where no test would leave them out."""
    session = load(
        own, overrides=[f"screen.{test}.enabled=false" for test in ("overlap", "zoning", "outlier")]
    )
    tables = runner.tables_of(session, ["convert"])
    rows = [
        (row["value_ppm"], row["spot"])
        for row in tables["convert"].to_pylist()
        if row["phase"] == "olivine" and row["analyte"] == "Ni60" and row["experiment"] == "EM-05"
    ]
    ordered = [spot for _, spot in sorted(rows)]
    assert len(ordered) >= 6

    def remarks(spots: list[str]) -> list[str]:
        lines = [f"{spot},Ni60,drop,K.V.,2026-03-12,no reason" for spot in spots]
        rulings = own.parent / "ember" / "rulings.csv"
        header = rulings.read_text(encoding="utf-8").splitlines()[0]
        rulings.write_text("\n".join([header, *lines]) + "\n", encoding="utf-8")
        runner.run(session)
        names = [table for stage in STAGES for table in stage.outputs]
        return [line for line in leaning_remarks(runner.tables_of(session, names)) if "mean" in line]

    assert remarks([]) == []
    assert remarks(ordered[-2:]) == []
    assert remarks(ordered[-3:]) == ["hand exclusions of olivine all lie above the mean: Ni60 (3)"]
    assert remarks(ordered[:3]) == ["hand exclusions of olivine all lie below the mean: Ni60 (3)"]
    assert remarks([ordered[0], *ordered[-2:]]) == []


def test_exclusions_of_reference_spots_that_lean_one_way_are_remarked(own: Path):
    convert = runner.tables_of(load(own), ["convert"])["convert"].to_pylist()
    rows = [row for row in convert if row["material"] == "TWG-1" and row["analyte"] == "Ni60"]
    ordered = [row["spot"] for row in sorted(rows, key=lambda row: row["value_ppm"])]
    assert len(ordered) >= 5

    def remarks(spots: list[str]) -> list[str]:
        lines = [f"{spot},Ni60,drop,K.V.,2026-03-12,no reason" for spot in spots]
        rulings = own.parent / "ember" / "rulings.csv"
        header = rulings.read_text(encoding="utf-8").splitlines()[0]
        rulings.write_text("\n".join([header, *lines]) + "\n", encoding="utf-8")
        runner.run(load(own))
        names = [table for stage in STAGES for table in stage.outputs]
        return leaning_remarks(runner.tables_of(load(own), names))

    assert "hand exclusions of TWG-1 all lie above the mean: Ni60 (3)" in remarks(ordered[-3:])
    assert not any("all lie" in line for line in remarks([ordered[0], *ordered[-2:]]))
