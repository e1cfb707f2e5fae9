"""Glass in crystals and crystals in glass, on simulated spots of known fraction."""

import numpy as np
import pytest

from screen.synthetic import Block, found, inputs, used
from simulate_spots import phase, simulate
from tieline.chemistry.oxides import oxide_total

EXPERIMENTS = 12

# The simulated majors are invented and neither add up to 100 nor to a formula.
NO_FORMULA = {"total": {"enabled": False}, "cations": {"enabled": False}}


def blocks(
    fraction, seed, *, technique="laser", host="olivine", spread=0.05, glass_fraction=None, growth=0.0
):
    """One experiment per row of `fraction` (G, n): crystals with these fractions of glass, and glass."""
    rng = np.random.default_rng(seed)
    crystal = simulate(rng, fraction, host=host, technique=technique, spread=spread, growth=growth)
    glass_fraction = np.zeros((len(fraction), 10)) if glass_fraction is None else glass_fraction
    glass = simulate(rng, glass_fraction, host=host, technique=technique, exchanged=True)
    result = []
    for name, spots in ((host, crystal), ("glass", glass)):
        for at in range(len(fraction)):
            labels = [f"{name}-{at}-{spot}" for spot in range(spots.values.shape[1])]
            result.append(
                Block(
                    f"E{at:02}",
                    name,
                    spots.phase.elements,
                    spots.values[at],
                    spots.sigmas[at],
                    technique,
                    labels=labels,
                )
            )
    return result


def groups(result, test, phase_name="olivine"):
    rows = result.tables["screen.groups"].to_pylist()
    return [row for row in rows if row["test"] == test and row["phase"] == phase_name]


def test_contaminated_crystals_are_found_and_clean_ones_stay():
    fraction = np.zeros((EXPERIMENTS, 8))
    fraction[:, 1], fraction[:, 4] = 0.002, 0.02
    result = inputs(blocks(fraction, 11)).screen()
    assert found(result, "glass-overlap") == {
        f"olivine-{at}-{spot}" for at in range(EXPERIMENTS) for spot in (1, 4)
    }
    use = used(result)
    assert not use["olivine-0-1", "La"]
    assert use["olivine-0-0", "La"]
    assert not found(result, "crystal-overlap")


def test_seven_of_ten_contaminated_spots_do_not_hide_each_other():
    fraction = np.zeros((EXPERIMENTS, 10))
    fraction[:, :7] = 10 ** np.random.default_rng(3).uniform(-3, -1.5, (EXPERIMENTS, 7))
    caught = found(inputs(blocks(fraction, 12)).screen(), "glass-overlap")
    assert caught == {f"olivine-{at}-{spot}" for at in range(EXPERIMENTS) for spot in range(7)}


def test_the_detail_gives_the_fraction_and_what_it_does_to_d():
    fraction = np.zeros((1, 8))
    fraction[0, 3] = 0.01
    result = inputs(blocks(fraction, 13)).screen()
    (row,) = [row for row in result.tables["screen.findings"].to_pylist() if row["code"] == "glass-overlap"]
    fraction, _, sd = row["detail"].split(" ")[:3]
    assert abs(float(fraction) - 1.0) < 3 * float(sd) < 0.2
    assert "% glass in olivine; D of this spot alone: " in row["detail"]
    assert row["statistic"] > row["threshold"] == 3.0
    assert row["p_value"] < 0.001


def test_what_is_too_small_to_see_is_said():
    fraction = np.full((2, 8), 0.0)
    result = inputs(blocks(fraction, 14, technique="probe")).screen(**NO_FORMULA)
    for row in groups(result, "glass-overlap"):
        assert row["verdict"] == "not found"
        assert 0.0005 < row["statistic"] < 0.01
        assert "majors decide" in row["detail"]


def test_an_inclusion_is_something_else_and_not_glass():
    made = blocks(np.zeros((2, 8)), 15)
    values = made[0].values.copy()
    elements = list(made[0].analytes)
    values[2, [elements.index("V"), elements.index("Ga"), elements.index("Zr")]] *= 4.0
    made[0] = Block(**{**vars(made[0]), "values": values})
    result = inputs(made).screen()
    (row,) = [row for row in result.tables["screen.findings"].to_pylist() if row["code"] == "glass-overlap"]
    assert row["spot"] == "olivine-0-2"
    assert "something else than olivine with glass" in row["detail"]
    assert row["action"] == "drop"


def test_crystal_in_glass_is_found_and_named():
    glass_fraction = np.zeros((3, 10))
    glass_fraction[:, 5] = 0.12
    result = inputs(blocks(np.zeros((3, 8)), 16, glass_fraction=glass_fraction)).screen()
    rows = {
        row["spot"]: row
        for row in result.tables["screen.findings"].to_pylist()
        if row["code"] == "crystal-overlap"
    }
    contaminated = {f"glass-{at}-5" for at in range(3)}
    # One in some hundred clean glass spots is a false alarm.
    assert contaminated <= set(rows)
    assert len(set(rows) - contaminated) <= 1
    assert all("olivine in glass" in rows[spot]["detail"] for spot in contaminated)


def test_a_glass_spot_is_something_else_only_if_no_crystal_explains_it():
    rng = np.random.default_rng(17)
    glass_fraction = np.zeros((1, 10))
    glass_fraction[0, 5] = 0.15
    made = blocks(np.zeros((1, 8)), 17, glass_fraction=glass_fraction)
    pyroxene = simulate(rng, np.zeros((1, 8)), host="clinopyroxene", technique="laser")
    made.append(
        Block("E00", "clinopyroxene", made[0].analytes, pyroxene.values[0], pyroxene.sigmas[0], "laser")
    )
    result = inputs(made).screen()
    (row,) = [row for row in result.tables["screen.findings"].to_pylist() if row["code"] == "crystal-overlap"]
    assert "olivine in glass" in row["detail"]


def test_marking_leaves_all_in_use():
    fraction = np.zeros((2, 8))
    fraction[:, 0] = 0.02
    result = inputs(blocks(fraction, 18)).screen(overlap={"use": "mark"})
    assert len(found(result, "glass-overlap")) == 2
    assert all(used(result).values())


def test_spots_left_out_for_their_total_do_not_shape_the_level():
    made = blocks(np.zeros((1, 5)), 19, technique="probe")
    values = made[0].values.copy()
    values[:3] *= 1.10
    made[0] = Block(**{**vars(made[0]), "values": values})
    total = oxide_total(made[0].values[3:], made[0].analytes).mean()
    limits = {"olivine": (total - 1.5, total + 1.5)}
    result = inputs(made).screen(cations={"enabled": False}, total={"limits": limits})
    assert found(result, "total") == {"olivine-0-0", "olivine-0-1", "olivine-0-2"}
    (row,) = groups(result, "glass-overlap")
    assert row["verdict"] == "cannot tell"
    assert row["n_spots"] == 2


def test_values_known_only_as_limits_do_not_raise_the_clean_level():
    fraction = np.zeros((4, 8))
    fraction[:, :3] = 0.01
    made = blocks(fraction, 20)
    cut = []
    for block in made:
        # A generous limit: what is below three of its sigmas is only reported as below.
        limits = 4.0 * np.nanmedian(block.sigmas, axis=0) * np.ones_like(block.values)
        values = np.where(block.values < limits, np.nan, block.values)
        cut.append(Block(**{**vars(block), "values": values, "limits": limits}))
    result = inputs(cut).screen()
    assert np.isnan(cut[0].values[4:]).any()
    assert found(result, "glass-overlap") == {f"olivine-{at}-{spot}" for at in range(4) for spot in range(3)}


def test_all_spots_a_little_contaminated_is_remarked():
    rng = np.random.default_rng(21)
    sd = 0.0002
    fraction = np.abs(rng.normal(6 * sd, 4 * sd, (20, 12)))
    result = inputs(blocks(fraction, 21, technique="probe", spread=0.0)).screen(**NO_FORMULA)
    clean = inputs(blocks(np.zeros((20, 12)), 22, technique="probe", spread=0.0)).screen(**NO_FORMULA)
    marked = [
        row
        for row in groups(result, "glass-overlap")
        if row["verdict"] != "not found" or "scatter" in row["detail"]
    ]
    assert len(marked) >= 10
    assert sum("scatter toward" in row["detail"] for row in groups(clean, "glass-overlap")) <= 1


def test_a_group_that_cannot_be_tested_says_why():
    made = blocks(np.zeros((2, 8)), 23)
    without_glass = [made[0], made[1], made[3]]
    result = inputs(without_glass).screen()
    rows = {row["experiment"]: row for row in groups(result, "glass-overlap")}
    assert rows["E00"]["verdict"] == "cannot tell"
    assert "no glass of this experiment by laser" in rows["E00"]["detail"]
    assert any("no melt measured" in remark.message for remark in result.remarks)
    few = Block(**{**vars(made[0]), "values": made[0].values[:2], "sigmas": made[0].sigmas[:2]})
    (row,) = groups(inputs([few, made[2]]).screen(), "glass-overlap")
    assert (row["verdict"], row["detail"]) == ("cannot tell", "not tested: fewer than 3 spots")
    nothing = Block(**{**vars(made[0]), "sigmas": np.full_like(made[0].sigmas, np.nan)})
    (row,) = groups(inputs([nothing, made[2]]).screen(), "glass-overlap")
    assert "no uncertainties" in row["detail"]


@pytest.mark.parametrize("factor", [0.4, 3.0])
def test_sigmas_that_are_wrong_are_doubted(factor):
    rng = np.random.default_rng(24)
    made = blocks(np.zeros((3, 12)), 24, spread=0.0)
    of = phase("olivine", "laser")
    # Normal errors of the true counting variance, reported with sigmas that are off by a factor.
    sd = np.sqrt(of.variance(of.host_ppm))
    wrong = []
    for block in made:
        values = of.host_ppm + sd * rng.standard_normal((12, len(sd)))
        misjudged = Block(**{**vars(block), "values": values, "sigmas": np.ones_like(values) * sd * factor})
        wrong.append(misjudged if block.phase == "olivine" else block)
    text = "overstated" if factor > 1 else "understated"
    assert all(text in row["detail"] for row in groups(inputs(wrong).screen(), "glass-overlap"))


def test_groups_do_not_influence_each_other_and_order_does_not_matter():
    fraction = np.zeros((5, 7))
    fraction[::2, 2] = 0.004
    made = blocks(fraction, 25)
    whole = inputs(made)
    first, second = whole.screen(), whole.shuffled(9).screen()
    assert first.tables["screen.findings"].to_pylist() == second.tables["screen.findings"].to_pylist()
    alone = inputs([block for block in made if block.experiment == "E02"]).screen()

    def of_experiment(result):
        rows = result.tables["screen.findings"].to_pylist()
        return [
            (row["spot"], row["statistic"])
            for row in rows
            if row["experiment"] == "E02" and row["analyte"] is None
        ]

    assert [spot for spot, _ in of_experiment(alone)] == [spot for spot, _ in of_experiment(first)]
    np.testing.assert_allclose(
        [value for _, value in of_experiment(alone)], [value for _, value in of_experiment(first)], rtol=1e-9
    )


def test_two_techniques_are_judged_apart():
    fraction = np.zeros((1, 8))
    fraction[0, 0] = 0.02
    made = blocks(fraction, 26)
    clean = blocks(np.zeros((1, 8)), 27, technique="probe")
    renamed = [Block(**{**vars(block), "labels": [f"p-{text}" for text in block.labels]}) for block in clean]
    result = inputs([*made, *renamed]).screen()
    assert found(result, "glass-overlap") == {"olivine-0-0"}
    assert {row["technique"] for row in groups(result, "glass-overlap")} == {"laser", "probe"}
