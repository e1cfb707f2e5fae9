"""Totals and cation sums: what is outside, what is within its uncertainty, and who is not judged at all."""

import numpy as np
import pytest

from screen.synthetic import Block, found, inputs, oxide_ppm, used

FORSTERITE_90 = {"SiO2": 40.8, "FeO": 9.8, "MnO": 0.15, "MgO": 49.1, "CaO": 0.2}
ANORTHITE_70 = {"SiO2": 50.5, "Al2O3": 31.7, "FeO": 0.3, "CaO": 14.3, "Na2O": 3.4, "K2O": 0.05}
BASALT = {
    "SiO2": 49.6,
    "TiO2": 1.8,
    "Al2O3": 14.8,
    "FeO": 10.6,
    "MgO": 7.5,
    "CaO": 11.6,
    "Na2O": 2.7,
    "K2O": 0.5,
}
DIOPSIDE = {"SiO2": 55.49, "TiO2": 0.0, "Al2O3": 0.0, "FeO": 0.0, "MgO": 18.61, "CaO": 25.90, "Na2O": 0.0}
# Diopside 80, acmite 20 by moles, all iron written as FeO: the cation sum exceeds 4 only for want of Fe3+.
ACMITE_DIOPSIDE = {"SiO2": 54.87, "FeO": 6.56, "MgO": 14.72, "CaO": 20.49, "Na2O": 2.83}


def block(composition, scale, phase="olivine", experiment="E1", sigma=0.003, **options):
    """Spots of one composition, each scaled by one number; sigma relative."""
    analytes, ppm = oxide_ppm(composition)
    values = np.asarray(scale)[:, None] * ppm
    return Block(experiment, phase, analytes, values, np.maximum(sigma * values, 1.0), **options)


def total_of(composition, scale=1.0):
    return sum(composition.values()) * scale


def test_a_total_is_outside_only_beyond_its_own_uncertainty():
    base = total_of(FORSTERITE_90)
    scale = [1.0, 98.3 / base, 96.0 / base, 103.5 / base]
    result = inputs([block(FORSTERITE_90, scale)]).screen()
    # The spot at 98.3 has an uncertainty of about 0.2; the limit is 98.5.
    assert found(result, "total") == {"000-002", "000-003"}
    use = used(result)
    assert use["000-001", "MgO"]
    assert not any(use["000-002", oxide] for oxide in FORSTERITE_90)


def test_a_small_uncertainty_makes_the_same_total_a_finding():
    scale = [1.0, 98.3 / total_of(FORSTERITE_90)]
    result = inputs([block(FORSTERITE_90, scale, sigma=0.0002)]).screen()
    assert found(result, "total") == {"000-001"}


def test_total_statistic_is_the_sum_of_oxides_and_its_uncertainty_the_root_of_squares():
    scale = 96.0 / total_of(FORSTERITE_90)
    result = inputs([block(FORSTERITE_90, [1.0, scale], sigma=0.01)]).screen()
    row = result.tables["screen.findings"].to_pylist()[0]
    assert row["statistic"] == pytest.approx(96.0, abs=1e-9)
    assert row["threshold"] == 98.5
    sd = np.sqrt(sum((0.01 * wt * scale) ** 2 for wt in FORSTERITE_90.values()))
    assert f"± {sd:.2f}" in row["detail"]


def test_limits_of_a_phase_can_be_set():
    scale = [1.0, 96.0 / total_of(FORSTERITE_90)]
    result = inputs([block(FORSTERITE_90, scale)]).screen(total={"limits": {"olivine": (95.0, 105.0)}})
    assert not found(result, "total")


def test_hydrous_glass_that_falls_short_as_a_whole_is_not_rejected_spot_by_spot():
    base = total_of(BASALT)
    short = [93.0 / base, 93.3 / base, 92.8 / base, 93.1 / base, 84.0 / base]
    result = inputs([block(BASALT, short, "glass"), block(FORSTERITE_90, [1.0] * 4)]).screen()
    assert found(result, "total") == {"000-004"}
    assert any("fall short as a whole" in remark.message for remark in result.remarks)


def test_a_stated_window_for_glass_is_taken_at_its_word():
    scale = [94.0 / total_of(BASALT)] * 4
    result = inputs([block(BASALT, scale, "glass")]).screen(total={"limits": {"glass": (97.0, 101.5)}})
    assert len(found(result, "total")) == 4


def test_a_technique_that_does_not_measure_everything_has_no_totals():
    part = {name: BASALT[name] for name in ("SiO2", "TiO2", "CaO", "MgO")}
    laser = block(part, [1.0, 1.1, 0.9], "glass", technique="laser")
    result = inputs([laser]).screen()
    assert not found(result, "total")
    assert not found(result, "cations")


@pytest.mark.parametrize(
    ("composition", "phase"),
    [(FORSTERITE_90, "olivine"), (ANORTHITE_70, "plagioclase"), (DIOPSIDE, "clinopyroxene")],
)
def test_sound_minerals_fit_their_formula_whatever_their_total(composition, phase):
    result = inputs([block(composition, [1.0, 1.01, 0.99], phase)]).screen()
    assert not found(result, "cations")


def test_an_olivine_that_is_a_pyroxene_does_not_fit():
    result = inputs([block(DIOPSIDE, [1.0, 1.0], "olivine")]).screen(identity={"enabled": False})
    assert len(found(result, "cations")) == 2


def test_ferric_iron_explains_a_high_sum_but_only_as_much_as_there_is():
    acmitic = block(ACMITE_DIOPSIDE, [1.0] * 3, "clinopyroxene")
    assert not found(inputs([acmitic]).screen(), "cations")
    assert len(found(inputs([acmitic]).screen(cations={"ferric": False}), "cations")) == 3
    # An olivine written as clinopyroxene has a sum of 4.5 per 6 oxygens, far more than its iron can explain.
    wrong = block(FORSTERITE_90, [1.0] * 3, "clinopyroxene")
    assert len(found(inputs([wrong]).screen(), "cations")) == 3


def test_marking_leaves_the_values_in_use():
    scale = [1.0, 96.0 / total_of(FORSTERITE_90)]
    result = inputs([block(FORSTERITE_90, scale)]).screen(total={"action": "mark"})
    assert found(result, "total") == {"000-001"}
    assert all(used(result).values())


def test_a_switched_off_test_finds_nothing():
    scale = [1.0, 90.0 / total_of(FORSTERITE_90)]
    result = inputs([block(FORSTERITE_90, scale)]).screen(
        total={"enabled": False}, cations={"enabled": False}
    )
    assert result.tables["screen.findings"].num_rows == 0
