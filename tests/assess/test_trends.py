"""ln D against conditions, with and without each experiment, and against time."""

import numpy as np
import pandas as pd
import pytest

from assess.frames import partition
from tieline.assess.approach import approach_checks
from tieline.assess.condition_values import condition_values, inverse_temperature
from tieline.assess.frames import Conditions
from tieline.assess.trends import trend_tables
from tieline.settings.assess import AssessSettings

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


def tables(*arguments, **options):
    made = trend_tables(*arguments, **options)
    return made.trends, made.points, made.predictions, made.checks


def test_inverse_temperature():
    value, sd = inverse_temperature(np.array([1226.85]), np.array([15.0]))
    assert value[0] == pytest.approx(10_000 / 1500)
    assert sd[0] == pytest.approx(10_000 / 1500 * 0.01)


def test_slope_is_recovered_with_errors_in_both():
    trends, points, _predictions, checks = tables(partition(rows()), "10^4/T", *x())
    row = trends.iloc[0]
    assert row["slope_lo"] < 0.6 < row["slope_hi"]
    assert row["n_points"] == 8
    exact_x = tables(partition(rows()), "10^4/T", x()[0])[0].iloc[0]
    assert row["slope_se"] > exact_x["slope_se"]
    assert checks["verdict"].tolist() == ["consistent"]
    assert len(points) == 8


def test_each_experiment_is_predicted_from_the_others():
    _trends, points, _predictions, checks = tables(partition(rows(odd=5)), "10^4/T", *x())
    outside = (points["ln_D"] < points["predicted_lo"]) | (points["ln_D"] > points["predicted_hi"])
    assert points.loc[outside, "experiment"].tolist() == ["X5"]
    assert points["deleted_sigmas"].abs().idxmax() == 5
    assert points["deleted_sigmas"][5] > 8
    assert checks["verdict"].tolist() == ["differs"]


def test_limits_are_left_out_and_counted():
    table = partition(
        [*rows()[:5], {"experiment": "X6", "element": "Sr", "kind": "upper-limit", "D_hi": 0.1}]
    )
    trends, _points, _predictions, checks = tables(table, "10^4/T", *x())
    assert trends["n_left_out"].tolist() == [1]
    assert "1 experiment left out" in checks["detail"][0]


def test_two_points_and_one_temperature_cannot_tell():
    _trends, _points, _predictions, two = tables(partition(rows()[:2]), "10^4/T", *x())
    assert two["verdict"].tolist() == ["cannot tell"]
    same = pd.Series(6.5, TEMPERATURES.index)
    trends, _points, _predictions, flat = tables(partition(rows()), "10^4/T", same)
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


def test_runs_of_another_starting_material_are_not_compared():
    table, conditions = timed(-0.15)
    other = conditions.assign(material=["basalt", "basalt", "andesite", "andesite"])
    assert len(approach_checks(table, other)) == 2
    assert len(approach_checks(table, other, same=("temperature_C", "pressure_GPa"))) == 1
    noted = conditions.assign(note=["a", "b", "c", "d"])
    assert approach_checks(table, noted).empty
    assert len(approach_checks(table, noted, same=("temperature_C",))) == 1
    same_length = conditions.assign(duration_h=24.0)
    assert approach_checks(table, same_length).empty


def test_many_elements_that_do_not_change_are_rarely_said_to():
    """Forty elements at once: one by one, two of them would be called changed every time."""
    rng = np.random.default_rng(8)
    _table, conditions = timed(0.0)
    called = 0
    for _ in range(40):
        off = 0.03 * rng.standard_normal((40, 4))
        table = partition(
            [
                {"experiment": f"T{i}", "element": f"E{e}", "D": d, "D_sd": 0.03 * d}
                for e in range(40)
                for i, d in enumerate(0.2 * np.exp(off[e]))
            ]
        )
        called += (approach_checks(table, conditions)["verdict"] == "differs").any()
    assert called <= 7  # 2 are expected at 5 %


def test_predictions_come_with_the_line_and_with_the_scatter():
    options = {"predict": (6.5, 9.0)}
    _trends, _points, quiet, _checks = tables(partition(rows()), "10^4/T", *x(), **options)
    true = np.exp(-3.0 + 0.6 * np.array([6.5, 9.0]))
    assert np.all((quiet["D_lo"] < true) & (true < quiet["D_hi"]))
    assert quiet["outside"].tolist() == [False, True]
    np.testing.assert_allclose(quiet["new_hi"], quiet["D_hi"])
    noisy = partition([row | {"D_sd": row["D_sd"] / 4} for row in rows()])
    wide = tables(noisy, "10^4/T", *x(), **options)[2]
    assert np.all(wide["new_hi"] > wide["D_hi"])
    assert np.all(wide["new_lo"] < wide["D_lo"])


def test_composition_of_a_phase_as_condition():
    means = pd.DataFrame(
        {
            "experiment": ["A", "B", "B", "A"], "phase": ["glass", "glass", "glass", "olivine"], "element": "Mg",
            "mean_ppm": [60304.0, 30152.0, 31000.0, 2e5], "se_ppm": [603.04, 301.52, 3000.0, 1.0],
        }
    )  # fmt: skip
    none = pd.DataFrame(index=["A", "B"])
    at = condition_values("MgO in glass", Conditions(none, none, {}), means, AssessSettings())
    assert at.x.to_dict() == pytest.approx({"A": 10.0, "B": 5.0}, rel=1e-4)
    assert at.x_sd["A"] == pytest.approx(0.1, rel=1e-4)
    assert at.common == ("glass", "Mg")
    ppm = condition_values("Mg in glass", Conditions(none, none, {}), means, AssessSettings())
    assert ppm.x["B"] == 30152.0
    for absent in ("MgO in melt", "Xy in glass", "fO2"):
        assert condition_values(absent, Conditions(none, none, {}), means, AssessSettings()) is None


def test_a_mean_that_is_in_both_axes_is_counted_once():
    """D = 100/x exactly, x being the mean of beta: its error moves the points along the line, not off it."""
    rng = np.random.default_rng(5)
    names = [f"G{i}" for i in range(8)]
    true = np.linspace(4, 9, 8)
    measured = true * (1 + 0.05 * rng.standard_normal(8))
    table = partition(
        [
            {"experiment": name, "element": "Mg", "D": 100 / value, "D_sd": 0.05 * 100 / value}
            for name, value in zip(names, measured, strict=True)
        ]
    )
    at, sd = pd.Series(measured, names), pd.Series(0.05 * measured, names)
    linked = tables(table, "MgO in glass", at, sd, common=("glass", "Mg"))[0].iloc[0]
    apart = tables(table, "MgO in glass", at, sd)[0].iloc[0]
    assert linked["chi_square"] > apart["chi_square"]
    assert linked["slope_se"] < apart["slope_se"]
    other = tables(table, "MgO in glass", at, sd, common=("glass", "Fe"))[0].iloc[0]
    assert other["slope"] == apart["slope"]
