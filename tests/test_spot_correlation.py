"""How two elements vary together between the spots behind the means: against NumPy, with gaps, grains, zones and drift."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

from stage_tables import ingest_tables, spot
from tieline.calibrate import calibrate
from tieline.columns import SCREEN
from tieline.convert import convert
from tieline.pair import pair
from tieline.settings import SessionSettings
from tieline.settings.assess import AssessSettings
from tieline.settings.chemistry import CalibrateSettings, ConvertSettings
from tieline.settings.results import PairSettings
from tieline.stages import STAGES
from tieline.tables import build

PAIR = ("Fe", "Mg")


def correlations(
    spots: list[dict[str, Any]],
    dropped: tuple[tuple[str, str], ...] = (),
    unmixed: Callable[[pa.Table], Any] | None = None,
    **settings: Any,
) -> pd.DataFrame:
    """`pair.correlations` of spots; dropped: (spot, element) left out; unmixed: values freed of overlap, from `convert`."""
    ingest, heads = ingest_tables(spots)
    made = convert(ingest, settings=ConvertSettings()).tables
    table = made["convert"]
    batches = calibrate(table, heads, files={}, settings=CalibrateSettings()).tables["calibrate"]
    named = zip(table.column("spot").to_pylist(), table.column("element").to_pylist(), strict=True)
    use = [key not in dropped for key in named]
    columns: dict[str, Any] = {
        c.name: table.column(c.name) if c.name in table.column_names else np.full(table.num_rows, np.nan)
        for c in SCREEN.columns
    }
    columns |= {"use": use, "why": ["" if used else "ruling" for used in use]}
    if unmixed is not None:
        columns |= {"unmixed_ppm": unmixed(table)}
    wanted = PairSettings(**{"ratios": (PAIR,), **settings})
    result = pair(table, made["convert.standards"], batches, build(SCREEN, columns), heads, settings=wanted)
    return result.tables["pair.correlations"].to_pandas()


def crystals(rng: np.random.Generator, n: int = 12, **keys: Any) -> list[dict[str, Any]]:
    """Spots of an invented olivine, iron traded for magnesium, and of a melt."""
    spots = []
    for number in range(n):
        trade, own = rng.standard_normal(2)
        cells = {"FeO": 10 + 0.5 * trade, "MgO": 48 - 0.4 * trade + 0.1 * own, "SiO2": 40.0}
        spots.append(spot(f"o{number}", cells, **{key: value(number) for key, value in keys.items()}))
    melt = [{"FeO": 9 + 0.1 * a, "MgO": 8 + 0.1 * b, "SiO2": 50.0} for a, b in rng.standard_normal((5, 2))]
    return spots + [spot(f"g{number}", cells, phase="glass") for number, cells in enumerate(melt)]


def by_phase(spots: list[dict[str, Any]], **settings: Any) -> pd.DataFrame:
    return correlations(spots, **settings).set_index("phase")


def numpy_correlation(spots: list[dict[str, Any]], names: set[str]) -> float:
    own = [one["values"] for one in spots if one["spot"] in names]
    return float(np.corrcoef([one["FeO"] for one in own], [one["MgO"] for one in own])[0, 1])


def test_it_is_that_of_the_spots_used():
    spots = crystals(np.random.default_rng(1))
    found = by_phase(spots)
    assert found.loc["olivine", "correlation"] == pytest.approx(
        numpy_correlation(spots, {f"o{n}" for n in range(12)})
    )
    assert found.loc["olivine", "correlation"] < -0.9
    assert found.loc["glass", "n_common"] == 5
    gaps = by_phase(spots, dropped=(("o3", "Fe"), ("o7", "Mg"), ("g1", "Mg")))
    kept = {f"o{n}" for n in range(12)} - {"o3", "o7"}
    assert gaps.loc["olivine", "correlation"] == pytest.approx(numpy_correlation(spots, kept))
    assert (gaps.loc["olivine", "n_common"], gaps.loc["glass", "n_common"]) == (10, 4)


def test_order_of_spots_does_not_matter():
    spots = crystals(np.random.default_rng(2))
    one, other = by_phase(spots), by_phase(spots[::-1])
    np.testing.assert_allclose(one["correlation"], other["correlation"].reindex(one.index), rtol=1e-12)


def test_sessions_and_zones_are_apart():
    rng = np.random.default_rng(3)
    spots = crystals(
        rng, batch=lambda n: "late" if n >= 6 else "early", zone=lambda n: "rim" if n % 2 else "core"
    )
    found = correlations(spots, separate="zone").set_index(["phase", "batch"])
    for phase, remainder in (("olivine (core)", 0), ("olivine (rim)", 1)):
        for batch, numbers in (("early", range(6)), ("late", range(6, 12))):
            names = {f"o{n}" for n in numbers if n % 2 == remainder}
            assert found.loc[(phase, batch), "correlation"] == pytest.approx(numpy_correlation(spots, names))
            assert found.loc[(phase, batch), "n_common"] == 3


def test_grains_count_once_where_the_means_are_made_of_grains():
    spots = crystals(np.random.default_rng(4), grain=lambda n: "abcd"[n // 3])
    found = by_phase(spots, average="grains")
    own = [one["values"] for one in spots[:12]]
    means = np.array([[one["FeO"], one["MgO"]] for one in own]).reshape(4, 3, 2).mean(axis=1)
    assert found.loc["olivine", "n_common"] == 4
    assert found.loc["olivine", "correlation"] == pytest.approx(np.corrcoef(means.T)[0, 1])


def test_elements_that_are_not_there_and_pairs_named_twice():
    spots = crystals(np.random.default_rng(5))
    assert correlations(spots, ratios=()).empty
    assert correlations(spots, ratios=(("Ni", "Mg"),)).empty
    twice = correlations(spots, ratios=(PAIR, ("Si", "Mg"), PAIR))
    assert sorted(twice["element_first"]) == ["Fe", "Fe", "Si", "Si"]


def test_values_freed_of_overlap_take_the_place_of_the_measured_ones():
    def turned(convert: pa.Table) -> Any:
        is_iron = np.array(convert.column("element").to_pylist()) == "Fe"
        return np.where(is_iron, -1.0, 1.0) * convert.column("value_ppm").to_numpy()

    spots = crystals(np.random.default_rng(6))
    before, after = by_phase(spots), by_phase(spots, unmixed=turned)
    np.testing.assert_allclose(after["correlation"], -before["correlation"])


def test_the_elements_of_exchange_coefficients_are_among_them():
    stage = next(stage for stage in STAGES if stage.name == "pair")
    assess = AssessSettings(exchange={"pairs": [["Fe", "Mn"], ["Ni", "Mg"]]})
    session = SessionSettings.model_construct(pair=PairSettings(ratios=(("Ni", "Mg"),)), assess=assess)
    assert stage.own_settings(session)["ratios"] == [["Ni", "Mg"], ["Fe", "Mn"]]
