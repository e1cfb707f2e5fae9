"""Overlap taken out of single values: near the truth, honest about what it cannot give, and never silently."""

import numpy as np

from screen.synthetic import Block, found, inputs, used
from simulate_spots import simulate
from tieline.reading.input_file import InputFile

UNMIX = {"overlap": {"use": "unmix"}}


def session(seed=51, experiments=30):
    rng = np.random.default_rng(seed)
    fraction = np.zeros((experiments, 8))
    fraction[:, :3] = 10 ** rng.uniform(-2.5, -1.3, (experiments, 3))
    crystal = simulate(rng, fraction, technique="laser", spread=0.02)
    glass = simulate(rng, np.zeros((experiments, 8)), technique="laser", exchanged=True)
    blocks = [
        Block(f"E{at:02}", name, spots.phase.elements, spots.values[at], spots.sigmas[at], "laser",
              labels=[f"{name}-{at}-{spot}" for spot in range(8)])
        for name, spots in (("olivine", crystal), ("glass", glass))
        for at in range(experiments)
    ]  # fmt: skip
    return inputs(blocks), crystal.phase, crystal.values


def unmixed(result):
    table = result.tables["screen"]
    names = ("spot", "analyte", "unmixed_ppm", "unmixed_sigma_ppm", "unmixed_shared_ppm")
    rows = zip(*(table.column(name).to_pylist() for name in names), strict=True)
    return {(spot, analyte): numbers for spot, analyte, *numbers in rows if numbers[0] is not None}


def test_unmixed_values_are_near_the_truth_and_only_flagged_spots_are_changed():
    tables, phase, _ = session()
    result = tables.screen(**UNMIX)
    values = unmixed(result)
    rows = result.tables["screen.findings"].to_pylist()
    flagged = {row["spot"] for row in rows if "% glass in olivine" in row["detail"]}
    assert {spot for spot, _ in values} == flagged
    assert len(flagged) >= 88
    elements = list(phase.elements)
    for analyte in ("La", "Sm", "Y", "Zr", "Ni"):
        truth = phase.host_ppm[elements.index(analyte)]
        of_analyte = [numbers for (_, name), numbers in values.items() if name == analyte]
        if not of_analyte:
            continue
        deviation = np.array([value - truth for value, _, _ in of_analyte])
        sigma = np.array([np.hypot(sd, shared) for _, sd, shared in of_analyte])
        spread = 0.03 * truth
        assert abs(np.mean(deviation)) < 4 * np.sqrt(np.mean(sigma**2 + spread**2) / len(deviation))
        assert np.mean(np.abs(deviation) < 2 * np.hypot(sigma, spread)) > 0.9


def test_what_decides_the_fraction_has_no_value_of_its_own():
    tables, _, _ = session()
    result = tables.screen(overlap={"use": "unmix", "tracer_share": 0.05})
    tracers = {
        (row["spot"], row["analyte"])
        for row in result.tables["screen.findings"].to_pylist()
        if row["analyte"] is not None and row["code"] == "glass-overlap"
    }
    use = used(result)
    assert tracers
    assert not any(use[key] for key in tracers)
    assert not tracers & set(unmixed(result))
    flagged = {spot for spot, _ in tracers}
    assert all(use[spot, "Ni"] for spot in flagged)


def test_without_unmixing_nothing_is_taken_out():
    tables, _, _ = session(experiments=2)
    assert not unmixed(tables.screen())


def test_a_kept_spot_keeps_its_measured_value():
    tables, _, _ = session(experiments=2)
    text = "spot,analyte,verdict,analyst,date,reason\nolivine-0-0,*,keep,X,2024-03-09,checked\n"
    result = tables.screen({"r.csv": InputFile.from_bytes("r.csv", text.encode())}, **UNMIX)
    assert "olivine-0-0" in found(result, "glass-overlap")
    assert not [key for key in unmixed(result) if key[0] == "olivine-0-0"]
    assert used(result)["olivine-0-0", "La"]


def test_something_else_is_rejected_and_never_unmixed():
    rng = np.random.default_rng(52)
    crystal = simulate(rng, np.zeros((1, 8)), technique="laser")
    glass = simulate(rng, np.zeros((1, 8)), technique="laser", exchanged=True)
    values = crystal.values[0].copy()
    values[3, :8] *= 5.0
    blocks = [
        Block("E0", "olivine", crystal.phase.elements, values, crystal.sigmas[0], "laser"),
        Block("E0", "glass", glass.phase.elements, glass.values[0], glass.sigmas[0], "laser"),
    ]
    result = inputs(blocks).screen(**UNMIX)
    assert "000-003" in found(result, "glass-overlap")
    assert not unmixed(result)
    assert not used(result)["000-003", "La"]
