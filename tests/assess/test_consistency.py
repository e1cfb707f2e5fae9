"""D by way of a third phase, and rim against core."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assess.frames import partition
from tieline.assess.consistency import rim_against_core, through_third_phase

positive = st.floats(1e-4, 1e5)


def three(a: float, b: float, c: float, wrong: float = 1.0) -> pd.DataFrame:
    return partition(
        [
            {"alpha": "opx", "beta": "cpx", "element": "Ni", "D": wrong * a / b},
            {"alpha": "opx", "beta": "glass", "element": "Ni", "D": a / c},
            {"alpha": "cpx", "beta": "glass", "element": "Ni", "D": b / c},
        ]
    )


@given(positive, positive, positive)
@settings(max_examples=50, deadline=None)
def test_the_same_means_agree_exactly(a, b, c):
    found = through_third_phase(three(a, b, c))
    assert len(found) == 1
    assert abs(found["value"][0]) < 1e-9
    assert found["verdict"][0] == "consistent"
    assert "by construction" in found["detail"][0]


def test_other_means_that_differ_are_found():
    found = through_third_phase(three(3.0, 2.0, 1.0, wrong=1.5))
    assert found["verdict"][0] == "differs"
    assert found["value"][0] == pytest.approx(np.log(1.5))
    assert found["sd"][0] == pytest.approx(0.05 * np.sqrt(3))
    assert through_third_phase(three(3.0, 2.0, 1.0, wrong=1.05))["verdict"][0] == "consistent"


def test_limits_and_missing_pairs_are_not_compared():
    table = three(3.0, 2.0, 1.0)
    assert through_third_phase(table.iloc[:2]).empty
    table.loc[0, ["kind", "D"]] = ["upper-limit", np.nan]
    assert through_third_phase(table).empty


def zones(rim_factor=1.0, elements=12, seed=7):
    rng = np.random.default_rng(seed)
    rows = []
    for index in range(elements):
        for zone, factor in (("rim", rim_factor if index == 0 else 1.0), ("core", 1.0)):
            true = 100.0 * (index + 1) * factor
            rows.append(
                {
                    "experiment": "A", "phase": f"olivine ({zone})", "element": f"E{index}", "batch": "one",
                    "mean_ppm": true * (1 + 0.02 * rng.standard_normal()), "se_ppm": 0.02 * true, "dof": 7.0,
                }
            )  # fmt: skip
    rows.append(rows[0] | {"phase": "olivine", "mean_ppm": 1.0})  # not split into zones
    return pd.DataFrame(rows)


def test_a_zoned_element_stands_out_from_its_neighbours():
    found = rim_against_core(zones(1.3)).set_index("subject")
    assert len(found) == 12
    assert found.loc["E0", "verdict"] == "differs"
    assert (found.drop("E0")["verdict"] == "consistent").all()
    assert found.loc["E0", "value"] == pytest.approx(np.log(1.3), abs=0.1)


def test_flat_crystals_are_rarely_called_zoned():
    called = [(rim_against_core(zones(seed=seed))["verdict"] == "differs").any() for seed in range(150)]
    assert np.mean(called) < 0.05 + 3.5 * np.sqrt(0.05 * 0.95 / 150)


def test_missing_errors_cannot_tell():
    table = zones()
    table.loc[0, "se_ppm"] = np.nan
    found = rim_against_core(table).set_index("subject")
    assert found.loc["E0", "verdict"] == "cannot tell"
    assert (found.drop("E0")["verdict"] == "consistent").all()


def test_nothing_to_compare():
    assert rim_against_core(zones()[lambda table: ~table["phase"].str.contains("core")]).empty
