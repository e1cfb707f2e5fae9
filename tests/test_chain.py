"""The whole chain on the demo session: truth recovered, invariants, what is recomputed, what an error leaves behind."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from sessions import ROOT, demo_copy, result
from tieline import runner
from tieline.configuration import Session, load
from tieline.errors import InputError
from tieline.plan import table_path
from tieline.stages import NAMES, STAGES

KEYS = ["experiment", "alpha", "beta", "element"]
TABLES = [table for stage in STAGES for table in stage.outputs]


@pytest.fixture(scope="module")
def reduced(tmp_path_factory: pytest.TempPathFactory) -> Session:
    """The demo session, reduced once; tests must not change it."""
    session = load(demo_copy(tmp_path_factory.mktemp("demo")))
    runner.run(session)
    return session


@pytest.fixture
def own(reduced: Session, tmp_path: Path) -> Path:
    """A copy of the reduced session that a test may change; the path of its configuration."""
    shutil.copytree(reduced.path.parents[1], tmp_path / "session")
    return tmp_path / "session" / "configs" / "ember.toml"


def recomputed(config: Path, **options: object) -> list[str]:
    return [report.verdict.stage for report in runner.run(load(config), **options) if report.recomputed]


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new), encoding="utf-8")


def contents(session: Session) -> dict[str, bytes]:
    return {table: table_path(session.run_folder, table).read_bytes() for table in TABLES}


def test_ledgers_add_up_over_the_chain(reduced: Session):
    reports = runner.run(reduced)
    assert not any(report.recomputed for report in reports)
    by_stage = {report.verdict.stage: report.ledger for report in reports}
    cells = by_stage["ingest"].outcomes
    rows = cells["values"] + cells["below limit only"] + cells["not measured"]
    assert rows == by_stage["convert"].entered == by_stage["screen"].entered == by_stage["pair"].entered
    # Counted here from the files: every cell below the header lines.
    expected = 0
    for name in ("probe.csv", "laser.csv"):
        table = pd.read_csv(ROOT / "configs" / "ember" / name, dtype=str)
        expected += table.shape[0] * table.shape[1]
    assert by_stage["ingest"].entered == expected


def test_same_bytes_in_another_folder(reduced: Session, tmp_path: Path):
    other = load(demo_copy(tmp_path / "elsewhere"))
    runner.run(other)
    assert contents(other) == contents(reduced)


def test_a_screen_threshold_recomputes_nothing_before_screen(own: Path):
    session = load(own)
    before = {table: table_path(session.run_folder, table).stat().st_mtime_ns for table in TABLES}
    old = contents(session)
    edit(own, "limits = { glass = [97.5, 101.5] }", "limits = { glass = [99.9, 101.5] }")
    stages = recomputed(own)
    assert stages[0] == "screen"
    untouched = [table for table in TABLES if table.split(".")[0] in ("ingest", "convert", "calibrate")]
    for table in untouched:
        assert table_path(session.run_folder, table).stat().st_mtime_ns == before[table]
        assert table_path(session.run_folder, table).read_bytes() == old[table]


def test_a_setting_without_effect_stops_the_recomputation(own: Path):
    edit(own, "[screen]", "[screen]\nimprecise = { relative_sigma = 1e6, enabled = false }")
    edit(own, "rim_um = 20.0", "rim_um = 20.000001")
    assert recomputed(own, until="screen") == ["screen"]
    assert recomputed(own) in ([], ["assess"])


@pytest.mark.parametrize(
    ("old", "new", "first"),
    [
        ("highly_incompatible_below = 0.01", "highly_incompatible_below = 0.1", "classify"),
        ("confidence = 0.95", "confidence = 0.9", "partition"),
        (
            "relative_sd = { EPMA = 0.01, laser = 0.03 }",
            "relative_sd = { EPMA = 0.02, laser = 0.03 }",
            "calibrate",
        ),
        ("olivine = 41.0", "olivine = 40.0", "convert"),
    ],
)
def test_first_stage_that_a_setting_makes_stale(own: Path, old: str, new: str, first: str):
    edit(own, old, new)
    verdicts = {verdict.stage: verdict for verdict in runner.status(load(own))}
    position = NAMES.index(first)
    assert all(verdicts[name].state == "current" for name in NAMES[:position])
    assert verdicts[first].state == "stale"
    assert verdicts[first].reasons
    assert recomputed(own)[0] == first


def test_comments_and_order_in_the_configuration_do_not_count(own: Path):
    text = own.read_text(encoding="utf-8")
    own.write_text("# a comment\n" + text.replace("[classify]", "\n\n# here\n[classify]"), encoding="utf-8")
    assert recomputed(own) == []


def test_revised_accepted_values_make_calibrate_stale_and_nothing_before(own: Path):
    accepted = own.parent / "ember" / "accepted.csv"
    edit(accepted, "51.23", "51.24")
    assert recomputed(own)[0] == "calibrate"


def test_only_refuses_when_an_earlier_stage_is_stale(own: Path):
    edit(own, "olivine = 41.0", "olivine = 40.0")
    with pytest.raises(InputError, match="convert is stale"):
        runner.run(load(own), only="classify")
    edit(own, "olivine = 40.0", "olivine = 41.0")
    assert recomputed(own, only="classify") == ["classify"]


def test_unknown_stage_names_the_nearest(own: Path):
    with pytest.raises(InputError, match='Did you mean "classify"'):
        runner.run(load(own), until="clasify")


def test_an_error_late_in_the_chain_changes_nothing(own: Path):
    session = load(own)
    before = contents(session)
    edit(own, "olivine = 41.0", "olivine = 40.0")
    edit(own, '["plagioclase", "glass"]]', '["plagioclase", "glas"]]')
    with pytest.raises(InputError, match='Did you mean "glass"'):
        runner.run(load(own))
    assert contents(session) == before
    assert not [path for path in session.run_folder.iterdir() if path.name.endswith(".tmp")]


def test_every_kind_of_problem_in_one_go(own: Path):
    from tieline.configuration import read

    edit(own, "rim_um = 20.0", "rim_umm = 20.0")
    edit(own, "ember/probe.csv", "ember/prob.csv")
    laser = own.parent / "ember" / "laser.csv"
    lines = laser.read_text(encoding="utf-8").splitlines()
    lines[1] = lines[1].replace("20.06", "twenty")
    laser.write_text("\n".join(lines) + "\n", encoding="utf-8")
    edit(own.parent / "ember" / "accepted.csv", "51.23", "much")
    session, problems = read(own)
    problems = [*problems, *runner.problems_of(session)]
    told = " ".join(str(problem) for problem in problems)
    for expected in ("rim_umm", "prob.csv", "twenty", "much"):
        assert expected in told
    assert len(problems) == 4


def test_shuffled_rows_change_no_result(reduced: Session, tmp_path: Path):
    config = demo_copy(tmp_path)
    random = np.random.default_rng(3)
    for name in ("probe.csv", "laser.csv", "accepted.csv", "experiments.csv"):
        path = config.parent / "ember" / name
        header, *rows = path.read_text(encoding="utf-8").splitlines()
        path.write_text("\n".join([header, *random.permutation(rows)]) + "\n", encoding="utf-8")
    # The run order is the row order, and shuffled with it: leave drift out of the comparison.
    session = load(config)
    runner.run(session)
    assert_same_results(result(session, "classify"), result(reduced, "classify"))


def test_a_table_split_in_two_of_one_batch_changes_no_result(reduced: Session, tmp_path: Path):
    config = demo_copy(tmp_path)
    path = config.parent / "ember" / "laser.csv"
    header, *rows = path.read_text(encoding="utf-8").splitlines()
    for name, part in (("laser.csv", rows[:100]), ("laser-b.csv", rows[100:])):
        (config.parent / "ember" / name).write_text("\n".join([header, *part]) + "\n", encoding="utf-8")
    text = config.read_text(encoding="utf-8")
    start = text.index("[[ingest.tables]]", text.index("ember/probe.csv"))
    block = text[start : text.index("[ingest.phases]")]
    second = block.replace("ember/laser.csv", "ember/laser-b.csv")
    config.write_text(text.replace(block, block + second), encoding="utf-8")
    session = load(config)
    runner.run(session)
    assert_same_results(result(session, "classify"), result(reduced, "classify"))


def test_scaling_both_phases_alike_changes_no_ratio(reduced: Session, tmp_path: Path):
    # Traces only: totals and cation sums of majors would rightly notice.
    config = demo_copy(tmp_path)
    path = config.parent / "ember" / "laser.csv"
    table = pd.read_csv(path, dtype=str, keep_default_na=False)
    factor = 1.25
    for name in table.columns[6:-1]:
        table[name] = [scaled(cell, factor) for cell in table[name]]
    table.to_csv(path, index=False)
    (config.parent / "ember" / "accepted.csv").unlink()
    edit(config, 'path = "ember/accepted.csv"', 'names = { TWG-1 = ["TWG-1"] }')
    other = load(demo_copy(tmp_path / "unscaled"))
    edit(other.path, 'path = "ember/accepted.csv"', 'names = { TWG-1 = ["TWG-1"] }')
    session, other = load(config), load(other.path)
    for one in (session, other):
        runner.run(one)
    ours, theirs = (frame(one) for one in (session, other))
    np.testing.assert_allclose(ours["D"].astype(float), theirs["D"].astype(float), rtol=1e-12)
    assert (ours["class"] == theirs["class"]).all()


def frame(session: Session) -> pd.DataFrame:
    table = result(session, "classify")
    return table[table["technique_alpha"] == "laser"].sort_values(KEYS).reset_index(drop=True)


def scaled(cell: str, factor: float) -> str:
    if cell in ("", "-"):
        return cell
    sign = "<" if cell.startswith("<") else ""
    return f"{sign}{float(cell.removeprefix('<')) * factor!r}"


def assert_same_results(ours: pd.DataFrame, theirs: pd.DataFrame) -> None:
    ours, theirs = (table.sort_values(KEYS).reset_index(drop=True) for table in (ours, theirs))
    pd.testing.assert_frame_equal(ours, theirs, rtol=1e-9, atol=0, check_exact=False)


def test_the_truth_is_recovered(reduced: Session):
    """Truth inside the interval for nearly 95 % of all D, over every kind of mishap the session holds."""
    truth = pd.read_csv(ROOT / "configs" / "ember" / "truth" / "partition_coefficients.csv")
    found = result(reduced, "classify").merge(truth, on=KEYS, suffixes=("", "_true"))
    assert len(found) == len(result(reduced, "classify"))
    D_true = found["D_true"].astype(float)
    low = found["D_lo"].astype(float).fillna(0.0)
    high = found["D_hi"].astype(float).fillna(np.inf)
    inside = (low <= D_true) & (D_true <= high)
    assert inside[found["kind"] != "undetermined"].mean() > 0.92
    boundaries = np.array([0.01, 1.0])
    names = np.array(["highly incompatible", "incompatible", "compatible"])
    expected = names[np.searchsorted(boundaries, D_true)]
    declared = found["class"] != "unresolved"
    assert (found["class"] == expected)[declared].mean() > 0.97
