"""The Python interface: what is public, what it returns, and that it imports nothing before it is needed."""

import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

import tieline
from sessions import demo_copy
from tieline.columns import TABLES
from tieline.plan import table_path
from tieline.storage import read_table


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> tieline.Run:
    return tieline.reduce(demo_copy(tmp_path_factory.mktemp("api")))


def test_nothing_else_is_public():
    assert set(dir(tieline)) == {"InputError", "Run", "__version__", "open_run", "reduce"}
    members = {name for name in dir(tieline.Run) if not name.startswith("_")}
    assert members == {"session", "tables", "settings", "table", "recompute"}
    with pytest.raises(AttributeError, match="no attribute 'reduse'"):
        tieline.reduse  # noqa: B018


def test_importing_it_loads_nothing_heavy():
    code = "import sys, tieline; print([name for name in ('numpy', 'pandas', 'pyarrow', 'pydantic') if name in sys.modules])"
    path = str(Path(tieline.__file__).parents[1])
    command = [sys.executable, "-c", f"import sys; sys.path.insert(0, {path!r}); {code}"]
    found = subprocess.run(command, capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"


def test_a_table_carries_its_units(run: tieline.Run):
    frame = run.table("classify")
    assert frame.attrs["units"]["mean_alpha_ppm"] == "ug/g"
    assert frame.attrs["meanings"]["D"] == next(
        c.meaning for c in TABLES["classify"].columns if c.name == "D"
    )
    assert list(frame.attrs["units"]) == list(frame.columns)
    stored = read_table(table_path(run.folder, "classify"), "classify")
    assert len(frame) == stored.num_rows
    assert frame["D"].isna().sum() == stored.column("D").null_count


def test_every_table_opens(run: tieline.Run):
    assert run.tables == tuple(TABLES)
    assert all(isinstance(run.table(name), pd.DataFrame) for name in run.tables)


def test_settings_in_effect(run: tieline.Run):
    assert run.session == "ember"
    assert run.settings["classify"]["highly_incompatible_below"] == 0.01
    assert run.settings["screen"]["zoning"]["represent"] == "rim"


def test_recomputing_with_the_same_settings_changes_nothing(run: tieline.Run):
    for stage in ("ingest", "calibrate", "screen", "classify"):
        for name, frame in run.recompute(stage).items():
            pd.testing.assert_frame_equal(frame, run.table(name))


def test_recomputing_with_others_writes_nothing(run: tieline.Run):
    before = {path: path.read_bytes() for path in run.folder.iterdir() if path.is_file()}
    stricter = run.recompute("screen", {"total.limits": {"glass": [99.9, 101.5]}})["screen"]
    assert stricter["use"].sum() < run.table("screen")["use"].sum()
    assert {path: path.read_bytes() for path in run.folder.iterdir() if path.is_file()} == before


def test_overrides_take_every_kind_of_value(tmp_path: Path):
    config = demo_copy(tmp_path)
    overrides = {
        "classify.extra": {"nearly one": [0.8, 1.2]},
        "partition.prefer": ["EPMA", "laser"],
        "report.title": 'a "quoted" title',
    }
    run = tieline.reduce(config, overrides=overrides, out=tmp_path / "elsewhere")
    assert run.folder == tmp_path / "elsewhere" / "ember"
    assert not (run.folder / "report.html").exists()
    assert run.settings["report"]["title"] == 'a "quoted" title'
    assert "nearly one" in set(run.table("classify")["class"])
    assert run.settings["partition"]["prefer"] == ["EPMA", "laser"]


def test_a_report_on_request(tmp_path: Path):
    config = demo_copy(tmp_path)
    assert not (tieline.reduce(config).folder / "report.html").exists()
    assert (tieline.reduce(config, report=True).folder / "report.html").exists()


def test_problems_say_what_to_do(run: tieline.Run, tmp_path: Path):
    with pytest.raises(tieline.InputError, match=r"run\.json"):
        tieline.open_run(tmp_path)
    with pytest.raises(tieline.InputError, match='Did you mean "classify"'):
        run.table("clasify")
    with pytest.raises(tieline.InputError, match='Did you mean "screen"'):
        run.recompute("scren")
    with pytest.raises(tieline.InputError, match='Did you mean "confidence"'):
        run.recompute("classify", {"confidnce": 0.9})


def test_inputs_that_moved_are_named(tmp_path: Path):
    config = demo_copy(tmp_path)
    run = tieline.reduce(config)
    (config.parent / "ember" / "rulings.csv").unlink()
    with pytest.raises(tieline.InputError, match=r"rulings\.csv"):
        run.recompute("screen")
