"""Mislabelled spots are named with both distances; mixtures, homogeneous phases and lone labels are left alone."""

import numpy as np

from screen.synthetic import Block, found, inputs, oxide_ppm
from simulate_spots import simulate

MAJORS = ["SiO2", "TiO2", "Al2O3", "FeO", "MgO", "CaO", "Na2O", "K2O"]
COMPOSITIONS = {
    "olivine": [40.8, 0.02, 0.05, 9.8, 49.0, 0.2, 0.01, 0.01],
    "clinopyroxene": [52.0, 0.6, 3.5, 6.5, 17.0, 19.8, 0.4, 0.01],
    "glass": [49.6, 1.8, 14.8, 10.6, 7.5, 11.6, 2.7, 0.5],
}


def block(composition, labels, phase, rng, experiment="E1", spread=0.02):
    analytes, ppm = oxide_ppm(dict(zip(MAJORS, composition, strict=True)))
    values = ppm * (1 + spread * rng.standard_normal((len(labels), len(ppm))))
    return Block(experiment, phase, analytes, values, 0.01 * values, labels=labels)


def session(extra=(), phases=tuple(COMPOSITIONS), seed=1):
    rng = np.random.default_rng(seed)
    made = [block(COMPOSITIONS[name], [f"{name}-{at}" for at in range(6)], name, rng) for name in phases]
    return [*made, *(block(*spots, rng=rng) for spots in extra)]


def only_identity(blocks, **more):
    off = {"enabled": False}
    return inputs(blocks).screen(total=off, cations=off, overlap=off, zoning=off, **more)


def test_a_pyroxene_labelled_olivine_is_named_with_both_distances():
    result = only_identity(session([(COMPOSITIONS["clinopyroxene"], ["wrong"], "olivine")]))
    (row,) = result.tables["screen.findings"].to_pylist()
    assert (row["spot"], row["code"], row["action"]) == ("wrong", "identity", "drop")
    assert row["detail"].startswith(
        "composition fits clinopyroxene better than olivine: log-ratio distances 0.0"
    )
    assert row["statistic"] > row["threshold"] == 3.0


def test_a_wrong_total_is_not_a_wrong_identity():
    low = np.array(COMPOSITIONS["olivine"]) * 0.9
    assert not found(only_identity(session([(low, ["low"], "olivine")])), "identity")


def test_a_mixture_is_left_to_the_overlap_test():
    mixed = 0.8 * np.array(COMPOSITIONS["olivine"]) + 0.2 * np.array(COMPOSITIONS["glass"])
    assert not found(only_identity(session([(mixed, ["mixed"], "olivine")])), "identity")


def test_two_labels_for_one_phase_are_not_told_apart():
    blocks = session([(COMPOSITIONS["olivine"], [f"rim-{at}" for at in range(6)], "olivine rim")])
    assert not found(only_identity(blocks), "identity")


def test_a_label_with_too_few_spots_has_no_centre():
    blocks = session([(COMPOSITIONS["olivine"], ["a", "b"], "spinel")])
    assert not found(only_identity(blocks), "identity")


def test_contaminated_trace_analyses_are_no_mislabelled_ones():
    rng = np.random.default_rng(4)
    fraction = np.zeros((3, 8))
    fraction[:, :2] = [0.01, 0.05]
    crystal = simulate(rng, fraction, technique="laser")
    glass = simulate(rng, np.zeros((3, 8)), technique="laser", exchanged=True)
    blocks = [
        Block(f"E{at}", name, spots.phase.elements, spots.values[at], spots.sigmas[at], "laser")
        for name, spots in (("olivine", crystal), ("glass", glass))
        for at in range(3)
    ]
    assert not found(only_identity(blocks), "identity")
    swapped = Block(
        "E0",
        "olivine",
        glass.phase.elements,
        glass.values[0, :1],
        glass.sigmas[0, :1],
        "laser",
        labels=["gl"],
    )
    assert found(only_identity([*blocks, swapped]), "identity") == {"gl"}
