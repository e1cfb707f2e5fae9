"""Stage `pair`: means per group, pairs formed and not, limits kept apart, zones and areas, techniques compared."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa
import pytest

from stage_tables import ingest_tables, spot
from tieline.calibrate import calibrate
from tieline.columns import SCREEN
from tieline.convert import convert
from tieline.errors import InputError
from tieline.pair import pair
from tieline.results import StageResult
from tieline.settings.chemistry import CalibrateSettings, ConvertSettings
from tieline.settings.results import PairSettings
from tieline.tables import build

PPM = {"unit": "ppm", "technique": "laser", "batch": "laser-1"}


def paired(spots: Sequence[dict[str, Any]], dropped: Sequence[str] = (), **settings: Any) -> StageResult:
    ingest, heads = ingest_tables(spots)
    tables = convert(ingest, settings=ConvertSettings()).tables
    table = tables["convert"]
    batches = calibrate(table, heads, files={}, settings=CalibrateSettings()).tables["calibrate"]
    use = [name not in dropped for name in table.column("spot").to_pylist()]
    columns: dict[str, Any] = {
        c.name: table.column(c.name) for c in SCREEN.columns if c.name in table.column_names
    }
    for column in SCREEN.columns:
        if column.name not in columns:
            columns[column.name] = np.full(table.num_rows, np.nan)
    columns |= {"use": use, "why": ["" if used else "ruling" for used in use]}
    result = pair(
        table,
        tables["convert.standards"],
        batches,
        build(SCREEN, columns),
        heads,
        settings=PairSettings(**settings),
    )
    result.ledger.check("pair")
    return result


def rows(table: pa.Table) -> dict[tuple[str, ...], dict[str, Any]]:
    return {(row["experiment"], row["phase"], row["element"]): row for row in table.to_pylist()}


def session(ol: Sequence[Any], gl: Sequence[Any], **keys: Any) -> list[dict[str, Any]]:
    spots = [
        spot(f"o{n}", {"Ni60": cell}, **{**PPM, **keys, "phase": "olivine"}) for n, cell in enumerate(ol)
    ]
    return spots + [
        spot(f"g{n}", {"Ni60": cell}, **{**PPM, **keys, "phase": "glass"}) for n, cell in enumerate(gl)
    ]


def test_mean_and_standard_error_of_equal_sigmas_are_the_plain_ones():
    values = [100.0, 104.0, 96.0, 101.0, 99.0]
    row = rows(paired(session([(v, 2.0) for v in values], [(10.0, 0.1)] * 3)).tables["pair"])[
        "X1", "olivine", "Ni"
    ]
    assert row["mean_ppm"] == pytest.approx(np.mean(values), rel=1e-9)
    assert row["se_ppm"] == pytest.approx(np.std(values, ddof=1) / np.sqrt(5), rel=1e-9)
    assert row["counting_se_ppm"] == pytest.approx(2.0 / np.sqrt(5), rel=1e-9)
    assert row["dof"] == 4
    assert row["mswd"] == pytest.approx(np.var(values, ddof=1) / 4, rel=1e-9)


def test_left_out_values_are_counted_and_do_not_enter():
    result = paired(session([(100.0, 1.0), (101.0, 1.0), (500.0, 1.0)], [(10.0, 0.1)] * 3), dropped=["o2"])
    row = rows(result.tables["pair"])["X1", "olivine", "Ni"]
    assert (row["n_used"], row["n_left_out"]) == (2, 1)
    assert row["mean_ppm"] == pytest.approx(100.5)


def test_values_below_their_limit_are_used_as_measured_and_bare_limits_are_kept_apart():
    result = paired(
        session([(0.5, 0.4, 1.0), (0.7, 0.4, 1.0), (-0.2, 0.4, 1.0)], ["<1.0", "<2.0", (3.0, 0.5, 1.0)])
    )
    table = rows(result.tables["pair"])
    assert table["X1", "olivine", "Ni"]["mean_ppm"] == pytest.approx(1.0 / 3, rel=1e-6)
    assert table["X1", "olivine", "Ni"]["n_below_limit"] == 3
    glass = table["X1", "glass", "Ni"]
    assert (glass["mean_ppm"], glass["n_limit_only"], glass["n_used"]) == (None, 2, 3)
    limits = result.tables["pair.limits"].to_pylist()
    assert [(row["value_ppm"], row["limit_ppm"]) for row in limits] == [(3.0, 1.0), (None, 1.0), (None, 2.0)]


def test_pairs_that_cannot_be_formed_say_why():
    spots = session([(1.0, 0.1)], [(2.0, 0.1)])
    spots += [spot("p", {"Ni60": (3.0, 0.1)}, **{**PPM, "phase": "plagioclase", "experiment": "X2"})]
    result = paired(spots, dropped=["g0"])
    pairs = {(row["experiment"], row["alpha"]): row for row in result.tables["pair.pairs"].to_pylist()}
    assert pairs["X1", "olivine"]["reason"] == "every glass spot was left out"
    assert pairs["X2", "plagioclase"]["reason"] == "the experiment has no glass spots"
    assert not any(row["formed"] for row in pairs.values())


def test_configured_pairs_of_unknown_phases_are_refused():
    with pytest.raises(InputError, match='Did you mean "olivine"'):
        paired(session([(1.0, 0.1)], [(2.0, 0.1)]), pairs=(("olivin", "glass"),))


def test_grain_means_take_their_number_for_the_degrees_of_freedom():
    spots = session([(100.0, 1.0), (100.2, 1.0), (110.0, 1.0), (110.2, 1.0)], [(10.0, 0.1)] * 3)
    for one, grain in zip(spots, ("a", "a", "b", "b"), strict=False):
        one["grain"] = grain
    row = rows(paired(spots, average="grains").tables["pair"])["X1", "olivine", "Ni"]
    assert row["mean_ppm"] == pytest.approx(105.1)
    assert row["dof"] == 1
    assert row["se_ppm"] == pytest.approx(10.0 / 2, rel=0.05)


def zoned() -> list[dict[str, Any]]:
    spots = session([(100.0, 1.0), (101.0, 1.0), (50.0, 1.0), (51.0, 1.0)], [(10.0, 0.1), (11.0, 0.1)])
    for one, zone in zip(spots, ("rim", "rim", "core", "core", "core", "rim"), strict=True):
        one["zone"] = zone
    return spots


def test_zones_have_their_own_means_over_the_whole_melt():
    result = paired(zoned(), separate="zone", pairs=(("olivine", "glass"),))
    table = rows(result.tables["pair"])
    assert table["X1", "olivine (rim)", "Ni"]["mean_ppm"] == pytest.approx(100.5)
    assert table["X1", "olivine (core)", "Ni"]["mean_ppm"] == pytest.approx(50.5)
    assert table["X1", "glass", "Ni"]["n_used"] == 2
    formed = [(row["alpha"], row["beta"]) for row in result.tables["pair.pairs"].to_pylist() if row["formed"]]
    assert formed == [("olivine (core)", "glass"), ("olivine (rim)", "glass")]


def test_local_pairs_join_only_the_same_area():
    result = paired(zoned(), local="zone")
    formed = [(row["alpha"], row["beta"]) for row in result.tables["pair.pairs"].to_pylist() if row["formed"]]
    assert formed == [("olivine (core)", "glass (core)"), ("olivine (rim)", "glass (rim)")]
    with pytest.raises(ValueError, match="exclude"):
        PairSettings(local="zone", separate="grain")


def test_two_techniques_that_disagree_are_reported():
    spots = session([(100.0, 1.0), (101.0, 1.0), (99.0, 1.0)], [(10.0, 0.1)] * 3)
    probe = {"technique": "EPMA", "batch": "probe-1", "unit": "ppm", "phase": "olivine"}
    spots += [spot(f"p{n}", {"Ni": (value, 1.0)}, **probe) for n, value in enumerate((120.0, 121.0, 119.0))]
    result = paired(spots)
    (row,) = result.tables["pair.techniques"].to_pylist()
    assert row["differ"]
    assert abs(row["deviation"]) == pytest.approx(20 / np.hypot(1 / np.sqrt(3), 1 / np.sqrt(3)), rel=1e-6)
    assert any("differ" in str(remark) for remark in result.remarks)
