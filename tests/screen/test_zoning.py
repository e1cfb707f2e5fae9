"""Zoned crystals: found by distance or zone label, told from overlap, and who then stands for equilibrium."""

import numpy as np
import pytest

from screen.synthetic import Block, found, inputs, used
from simulate_spots import simulate

SPOTS = 12
DISTANCE = np.tile(np.array([5.0, 15.0, 40.0, 80.0]), 3)
GRAIN = [f"g{at // 4}" for at in range(SPOTS)]


def blocks(zoning, seed, *, fraction=0.0, experiments=6, labels_only=False, technique="laser"):
    """Olivine of several experiments: growth zoning of `zoning` from edge to 80 um, overlap where `fraction` says."""
    rng = np.random.default_rng(seed)
    growth = -zoning * DISTANCE / 80.0 * np.ones((experiments, 1))
    fractions = np.broadcast_to(fraction, growth.shape)
    crystal = simulate(rng, fractions, technique=technique, spread=0.02, growth=growth)
    glass = simulate(rng, np.zeros((experiments, 8)), technique=technique, exchanged=True)
    made = []
    for at in range(experiments):
        place = (
            {"zone": ["Rim" if distance < 20 else "Core" for distance in DISTANCE]}
            if labels_only
            else {"distance_um": DISTANCE.tolist()}
        )
        names = [f"ol-{at}-{spot}" for spot in range(SPOTS)]
        made += [
            Block(f"E{at}", "olivine", crystal.phase.elements, crystal.values[at], crystal.sigmas[at], technique,
                  labels=names, grain=GRAIN, **place),
            Block(f"E{at}", "glass", glass.phase.elements, glass.values[at], glass.sigmas[at], technique),
        ]  # fmt: skip
    return made


def verdicts(result):
    rows = result.tables["screen.groups"].to_pylist()
    return {row["experiment"]: row for row in rows if row["test"] == "zoned"}


@pytest.mark.parametrize("labels_only", [False, True])
def test_zoned_crystals_are_found_and_only_marked(labels_only):
    result = inputs(blocks(0.3, 31, labels_only=labels_only)).screen()
    assert [row["verdict"] for row in verdicts(result).values()] == ["found"] * 6
    marked = found(result, "zoned")
    assert len(marked) == 6 * SPOTS
    assert all(use for (spot, _), use in used(result).items() if spot in marked)
    # From 5 to 80 um with distances; with labels from the mean of the rims, 10 um, to that of the cores, 60 um.
    expected = -0.3 * (50 if labels_only else 75) / 80
    for row in verdicts(result).values():
        assert row["statistic"] == pytest.approx(expected, abs=0.06)
        assert row["p_value"] < 0.01


def test_unzoned_and_contaminated_crystals_are_not_called_zoned():
    rim_contaminated = np.where(DISTANCE < 10, 0.002, 0.0)
    for fraction, seed in ((0.0, 32), (rim_contaminated, 33)):
        result = inputs(blocks(0.0, seed, fraction=fraction)).screen()
        assert not found(result, "zoned")
        assert [row["verdict"] for row in verdicts(result).values()] == ["not found"] * 6


@pytest.mark.parametrize(("represent", "kept"), [("rim", DISTANCE <= 20), ("core", DISTANCE > 20)])
@pytest.mark.parametrize("labels_only", [False, True])
def test_only_the_wanted_zone_represents_a_zoned_group(represent, kept, labels_only):
    made = blocks(0.3, 34, experiments=2, labels_only=labels_only)
    use = used(inputs(made).screen(zoning={"represent": represent}))
    for at in range(2):
        assert [use[f"ol-{at}-{spot}", "La"] for spot in range(SPOTS)] == kept.tolist()


def test_a_group_without_spots_in_the_wanted_zone_keeps_all():
    made = blocks(0.3, 35, experiments=1)
    shifted = Block(**{**vars(made[0]), "distance_um": (DISTANCE + 100).tolist()})
    result = inputs([shifted, made[1]]).screen(zoning={"represent": "rim"})
    assert all(used(result).values())
    assert len(found(result, "zoned")) == SPOTS


def test_unzoned_groups_keep_their_cores():
    result = inputs(blocks(0.0, 36)).screen(zoning={"represent": "rim"})
    assert not found(result, "zoned")


def test_few_spots_are_never_called_unzoned():
    names = ("values", "sigmas", "labels", "grain", "distance_um")
    made = []
    for block in blocks(0.0, 37):
        fields = vars(block)
        short = {name: fields[name][:4] for name in names if fields[name] is not None}
        made.append(Block(**{**fields, **short}) if block.phase == "olivine" else block)
    result = verdicts(inputs(made).screen())
    assert {row["verdict"] for row in result.values()} <= {"cannot tell", "found"}
    assert "cannot tell" in {row["verdict"] for row in result.values()}
    assert all("grains" in row["detail"] for row in result.values() if row["p_value"] is not None)


def test_a_significant_but_small_change_is_no_finding():
    result = inputs(blocks(0.3, 38)).screen(zoning={"least_change": 0.5})
    assert not found(result, "zoned")
    assert all("less than 50%" in row["detail"] for row in verdicts(result).values())


def test_without_places_nothing_is_said():
    made = [Block(**{**vars(block), "distance_um": None}) for block in blocks(0.3, 39, experiments=1)]
    assert not verdicts(inputs(made).screen())


def test_zoning_seen_by_one_technique_holds_for_the_crystals():
    made = blocks(0.3, 40, experiments=1)
    probe = blocks(0.0, 41, experiments=1, technique="probe")
    renamed = Block(**{**vars(probe[0]), "labels": [f"p-{spot}" for spot in range(SPOTS)]})
    off = {"enabled": False}
    result = inputs([*made, renamed, probe[1]]).screen(zoning={"represent": "rim"}, total=off, cations=off)
    use = used(result)
    assert [use[f"p-{spot}", "Mg"] for spot in range(SPOTS)] == (DISTANCE <= 20).tolist()
