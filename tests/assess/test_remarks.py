"""What the stage remarks on: names that fit nothing, and conditions that cannot be drawn against."""

import pandas as pd

from tieline.assess.condition_values import condition_values
from tieline.assess.frames import Conditions
from tieline.assess.remarks import remarks
from tieline.assess.starting_composition import Start
from tieline.settings.assess import AssessSettings

MEANS = pd.DataFrame(
    {"experiment": ["A", "B"], "phase": "glass", "element": "Mg", "mean_ppm": 1.0, "se_ppm": 0.1}
)
D = pd.DataFrame({"experiment": ["A"]})


def conditions(**given):
    table = pd.DataFrame(given, index=["A", "B"])
    return Conditions(table, pd.DataFrame(index=["A", "B"]), {})


def words(settings=None, start=None, **given):
    found = remarks(
        [], conditions(**given), MEANS, D, start or {}, AssessSettings.model_validate(settings or {})
    )
    return [str(one) for one in found]


def test_a_condition_that_does_not_vary_is_named_once():
    assert words(temperature_C=[1200.0, 1250.0]) == []
    assert words(temperature_C=[1200.0, 1200.0]) == [
        "no trends against 10^4/T: all experiments have the same"
    ]


def test_conditions_that_are_not_there_are_named():
    trends = {"trends": {"conditions": ["water_wt"]}}
    assert words(trends, temperature_C=[1200.0, 1250.0])[0].startswith(
        "no trends against water_wt: no condition"
    )


def test_experiments_that_do_not_exist_are_named():
    given = {("B", "Mg"): Start(1.0, 0.1), ("EM-1", "Mg"): Start(1.0, 0.1), (None, "Mg"): Start(1.0, 0.1)}
    modes = {"modes": {"proportions": {"A": {"olivine": 0.1}, "C": {"olivine": 0.1}}}}
    assert words(modes, given, temperature_C=[1200.0, 1250.0]) == [
        "the starting composition names EM-1, which no experiment with means is called",
        "[assess.modes] names C, which no experiment with means is called",
    ]


def test_impossible_values_of_a_condition_are_left_out_and_named():
    cold = conditions(temperature_C=[-273.15, 1200.0], temperature_C_sd=[5.0, 5.0])
    found = condition_values("10^4/T", cold, MEANS, AssessSettings())
    assert found.x.index.tolist() == ["B"]
    assert found.impossible == ("A",)
    assert words(temperature_C=[1200.0, 1250.0], temperature_C_sd=[5.0, -5.0]) == [
        "10^4/T of B left out: the value or its uncertainty is impossible"
    ]
