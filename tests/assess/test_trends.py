"""ln D against conditions, with and without each experiment, and against time."""

import numpy as np
import pandas as pd
import pytest

from assess.frames import partition
from tieline.assess.trends import approach_checks, inverse_temperature, trend_tables

TEMPERATURES = pd.Series({f"X{index}": 1150.0 + 25 * index for index in range(8)})


def rows(seed=3, error=0.04, element="Sr", odd=None):
    rng = np.random.default_rng(seed)
    across, _sd = inverse_temperature(TEMPERATURES.to_numpy(), np.zeros(8))
    D = np.exp(-3.0 + 0.6 * across + error * rng.standard_normal(8))
    if odd is not None:
        D[odd] *= 2
    return [
        {"experiment": name, "element": element, "D": d, "D_sd": error * d}
        for name, d in zip(TEMPERATURES.index, D, strict=True)
    ]


def x():
    across, sd = inverse_temperature(TEMPERATURES.to_numpy(), np.full(8, 5.0))
    return pd.Series(across, TEMPERATURES.index), pd.Series(sd, TEMPERATURES.index)


def test_inverse_temperature():
    value, sd = inverse_temperature(np.array([1226.85]), np.array([15.0]))
    assert value[0] == pytest.approx(10_000 / 1500)
    assert sd[0] == pytest.approx(10_000 / 1500 * 0.01)


def test_slope_is_recovered_with_errors_in_both():
    trends, points, checks = trend_tables(partition(rows()), "10^4/T", *x())
    row = trends.iloc[0]
    assert row["slope_lo"] < 0.6 < row["slope_hi"]
    assert row["n_points"] == 8
    exact_x = trend_tables(partition(rows()), "10^4/T", x()[0])[0].iloc[0]
    assert row["slope_se"] > exact_x["slope_se"]
    assert checks["verdict"].tolist() == ["consistent"]
    assert len(points) == 8


def test_each_experiment_is_predicted_from_the_others():
    _trends, points, checks = trend_tables(partition(rows(odd=5)), "10^4/T", *x())
    outside = (points["ln_D"] < points["predicted_lo"]) | (points["ln_D"] > points["predicted_hi"])
    assert points.loc[outside, "experiment"].tolist() == ["X5"]
    assert checks["verdict"].tolist() == ["differs"]


def test_limits_are_left_out_and_counted():
    table = partition(
        [*rows()[:5], {"experiment": "X6", "element": "Sr", "kind": "upper-limit", "D_hi": 0.1}]
    )
    trends, _points, checks = trend_tables(table, "10^4/T", *x())
    assert trends["n_left_out"].tolist() == [1]
    assert "1 experiments left out" in checks["detail"][0]


def test_two_points_and_one_temperature_cannot_tell():
    _trends, _points, two = trend_tables(partition(rows()[:2]), "10^4/T", *x())
    assert two["verdict"].tolist() == ["cannot tell"]
    same = pd.Series(6.5, TEMPERATURES.index)
    trends, _points, flat = trend_tables(partition(rows()), "10^4/T", same)
    assert flat["verdict"].tolist() == ["cannot tell"]
    assert np.isnan(trends["slope"][0])


def timed(change: float):
    durations = [2.0, 8.0, 32.0, 128.0]
    rng = np.random.default_rng(5)
    D = 0.2 * np.array(durations) ** change * np.exp(0.03 * rng.standard_normal(4))
    table = partition(
        [{"experiment": f"T{i}", "element": "Ni", "D": d, "D_sd": 0.03 * d} for i, d in enumerate(D)]
    )
    conditions = pd.DataFrame(
        {
            "temperature_C": 1250.0,
            "pressure_GPa": 1.0,
            "duration_h": durations,
            "temperature_C_sd": [1.0, 2.0, 3.0, 4.0],
        },
        index=[f"T{i}" for i in range(4)],
    )
    return table, conditions


def test_a_change_with_time_is_seen():
    moving = approach_checks(*timed(-0.15))
    assert moving["verdict"].tolist() == ["differs"]
    assert moving["value"][0] == pytest.approx(-0.15, abs=0.05)
    steady = approach_checks(*timed(0.0))
    assert steady["verdict"].tolist() == ["consistent"]
    assert "no proof of equilibrium" in steady["detail"][0]


def test_only_runs_at_the_same_conditions_are_compared():
    table, conditions = timed(-0.15)
    conditions["temperature_C"] = [1200.0, 1225.0, 1250.0, 1275.0]
    assert approach_checks(table, conditions).empty
    assert approach_checks(table, conditions.drop(columns="duration_h")).empty
    table, conditions = timed(-0.15)
    limited = table.assign(kind=["value", "upper-limit", "upper-limit", "upper-limit"])
    assert approach_checks(limited, conditions)["verdict"].tolist() == ["cannot tell"]
