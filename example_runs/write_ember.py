"""Writes the spot tables of the invented session `ember`, and the truth behind them.

Nothing here was measured: experiments, compositions, partition coefficients, reference glass and errors are
made up, with a fixed seed. All iron is ferrous, the charges are dry; `ember_charges.py` has their chemistry.

    python example_runs/write_ember.py            write configs/ember/
    python example_runs/write_ember.py --check    compare instead; exit 1 and name the files that differ

Needs Python 3.11 and NumPy, nothing else. `RandomState` is used because its number stream is frozen. Numbers
are rounded far above the last bits in which mathematical libraries differ: the bytes are the same anywhere.
"""

from __future__ import annotations

import csv
import io
import math
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from ember_charges import (
    CATIONS,
    ISOTOPES,
    LASER_ELEMENTS,
    LASER_LIMIT,
    OXIDES,
    PPM_PER_WT,
    PROBE_COUNTING,
    PROBE_LIMIT,
    REFERENCE_PPM,
    REFERENCE_WT,
    SEED,
    START_WT,
    TRACES,
    Composition,
    Experiment,
    make_experiments,
    natural,
)

FOLDER = Path(__file__).resolve().parent.parent / "configs" / "ember"
REFERENCE = "TWG-1"

LABELS = {"olivine": "ol", "clinopyroxene": "cpx", "plagioclase": "plag", "glass": "gl"}
ASSUMED_SIO2 = {
    "olivine": 41.0,
    "clinopyroxene": 53.0,
    "plagioclase": 51.0,
    "glass": 51.5,
}  # used by the laser

# What is wrong with single spots: (table, run, phase, number in its group) -> condition
MISHAPS = {
    ("probe", "EM-02", "glass", 3): "low-total",
    ("probe", "EM-03", "olivine", 5): "mislabelled",
    ("probe", "EM-05", "olivine", 2): "bad-total",
    ("probe", "EM-09", "clinopyroxene", 4): "low-total",
    ("laser", "EM-05", "clinopyroxene", 3): "inclusion",
    ("laser", "EM-08", "glass", 2): "crystal-in-glass",
}
TOTAL_FACTORS = {"EM-02": 0.958, "EM-05": 0.951, "EM-09": 0.974}
NOTES = {"EM02-gl-3": "bubble nearby", "EM05-ol-2": "bad polish", "EM05-cpx-L3": "unsteady signal"}
RULINGS = """
EM05-cpx-L3 | * | drop | K.V. | 2026-03-12 | Cr and V jump halfway through the signal: oxide inclusion
EM09-cpx-4  | * | keep | M.T. | 2026-03-13 | coat worn thin; cation sum and ratios agree with neighbours
"""
HEAVY_RUN, ZONED_GROUP = "EM-04", ("EM-07", "clinopyroxene")
ZONED_DISTANCES_UM = (4, 9, 13, 17, 32, 48, 75)
INCLUSION_PPM = {"Cr": 3.2e5, "Al": 1.13e5, "Fe": 1.55e5, "Mg": 6.2e4, "Ti": 7000, "Mn": 2100, "Ni": 1300,
                 "V": 2200, "Zn": 1100, "Co": 300}  # fmt: skip


@dataclass
class Spot:
    """One analysis to be made: what was hit, and how it is labelled."""

    label: str
    run: str
    phase: str
    labelled: str
    composition: Composition
    grain: str = ""
    distance: float | None = None
    condition: str = "clean"
    overlap: float = 0.0
    overlap_phase: str = ""
    core: float = 0.0
    yield_: float = 1.0


# --- what the beam hits ---


def group_sizes(
    table: str, rng: np.random.RandomState, experiments: list[Experiment]
) -> dict[tuple[str, str], int]:
    """Spots per experiment and phase."""
    sizes = {}
    for experiment in experiments:
        for phase in experiment.phases:
            low, high = (6, 9) if table == "probe" else (4, 7) if phase == "glass" else (5, 8)
            sizes[experiment.run, phase] = int(rng.randint(low, high))
            if (experiment.run, phase) == ZONED_GROUP or (experiment.run == HEAVY_RUN and phase != "glass"):
                sizes[experiment.run, phase] = 7
    return sizes


def choose_overlaps(
    table: str, rng: np.random.RandomState, sizes: dict[tuple[str, str], int]
) -> dict[tuple[str, str, int], float]:
    """Glass fractions (0.05 % to 5 %) of 17 % of the crystal spots.

    Four of the seven spots of every crystal in one experiment, elsewhere at most two of a group.
    """
    groups = [g for g in sizes if g[1] != "glass"]
    wanted = round(0.17 * sum(sizes[g] for g in groups))
    chosen = [
        (*g, number) for g in groups if g[0] == HEAVY_RUN for number in sorted(rng.permutation(7)[:4] + 1)
    ]
    eligible = [(*g, number) for g in groups if g[0] != HEAVY_RUN and g != ZONED_GROUP
                for number in range(1, sizes[g] + 1) if (table, *g, number) not in MISHAPS]  # fmt: skip
    for index in rng.permutation(len(eligible)):
        group = eligible[index][:2]
        if len(chosen) < wanted and sum(c[:2] == group for c in chosen) < 2:
            chosen.append(eligible[index])
    fractions = np.exp(rng.uniform(math.log(5e-4), math.log(5e-2), len(chosen)))
    return dict(zip(chosen, (float(f) for f in fractions), strict=True))


def afflict(spot: Spot, condition: str, experiment: Experiment, rng: np.random.RandomState) -> None:
    """Applies a mishap to a spot."""
    spot.condition = condition
    if condition in ("low-total", "bad-total"):
        spot.yield_ = TOTAL_FACTORS[spot.run]
    elif condition == "mislabelled":
        spot.phase = "clinopyroxene"
        spot.composition = natural(rng, experiment, spot.phase)
    elif condition == "crystal-in-glass":
        spot.overlap, spot.overlap_phase = 0.12, "clinopyroxene"
        spot.composition = spot.composition.mixed(experiment.phases[spot.overlap_phase], spot.overlap)
    elif condition == "inclusion":
        inside = np.array([INCLUSION_PPM.get(e, 0.0) for e in TRACES])
        oxides = np.array([INCLUSION_PPM.get(e, 0.0) for e in CATIONS]) / PPM_PER_WT
        spot.overlap, spot.overlap_phase = 0.01, "spinel"
        spot.composition = spot.composition.mixed(Composition(oxides, inside), spot.overlap)


def plan(table: str, experiments: list[Experiment]) -> list[Spot]:
    """All spots on unknowns, in the order of the experiments."""
    rng = np.random.RandomState([SEED, 2 if table == "probe" else 3])
    sizes = group_sizes(table, rng, experiments)
    overlaps = choose_overlaps(table, rng, sizes)
    spots = []
    for experiment in experiments:
        for phase in experiment.phases:
            group = (experiment.run, phase)
            for number in range(1, sizes[group] + 1):
                mark = f"{'L' if table == 'laser' else ''}{number}"
                label = f"{experiment.run.replace('-', '')}-{LABELS[phase]}-{mark}"
                spot = Spot(label, experiment.run, phase, phase, experiment.phases[phase])
                if phase != "glass":
                    spot.grain, spot.distance = "abc"[number % 3], float(round(rng.uniform(5, 60)))
                if group == ZONED_GROUP:
                    spot.distance = float(ZONED_DISTANCES_UM[number - 1])
                    way = min(max((spot.distance - 20) / 40, 0), 1)
                    spot.core = way * way * (3 - 2 * way)
                    spot.condition = "zoned" if spot.core > 0 else "clean"
                spot.composition = natural(rng, experiment, phase, spot.core)
                if (*group, number) in overlaps:
                    spot.condition, spot.overlap_phase = "overlap", "glass"
                    spot.overlap = overlaps[(*group, number)]
                    spot.composition = spot.composition.mixed(experiment.phases["glass"], spot.overlap)
                mishap = MISHAPS.get((table, *group, number))
                if mishap:
                    afflict(spot, mishap, experiment, rng)
                spots.append(spot)
    return spots


# --- the instruments ---


def in_second_batch(table: str, spot: Spot) -> bool:
    """The second laser session starts with the glass of EM-06, whose crystals belong to the first."""
    if table == "probe":
        return spot.run in ("EM-09", "EM-10")
    return spot.run > "EM-06" or (spot.run == "EM-06" and spot.phase == "glass")


def batches(table: str, spots: list[Spot], reference: Composition) -> list[tuple[str, list[Spot]]]:
    """Spots by measuring session, with the reference glass at the start, every 15 spots and at the end."""
    second = [in_second_batch(table, spot) for spot in spots]
    result, count = [], 0
    for part in (False, True):
        unknowns = [spot for spot, late in zip(spots, second, strict=True) if late is part]
        blocks = [unknowns[i : i + 15] for i in range(0, len(unknowns), 15)]
        rows: list[Spot] = []
        for block in (*blocks, []):
            for _ in range(2):
                count += 1
                mark = f"{'L' if table == 'laser' else ''}{count:02d}"
                rows.append(Spot(f"{REFERENCE}-{mark}", "", REFERENCE, REFERENCE, reference))
            rows += block
        result.append((f"{table}-{int(part) + 1}", rows))
    return result


def significant(value: float, digits: int = 4) -> str:
    """Plain decimal notation with a number of significant digits."""
    if value == 0:
        return "0"
    return f"{value:.{max(0, digits - 1 - math.floor(math.log10(abs(value))))}f}"


def fixed(value: float, decimals: int = 3) -> str:
    """Fixed decimals, without a negative zero."""
    return f"{round(float(value), decimals) + 0.0:.{decimals}f}"


def label_cells(spot: Spot, batch: str) -> list[str]:
    """The label columns both tables share."""
    distance = "" if spot.distance is None else f"{spot.distance:.0f}"
    return [spot.label, batch, spot.run, LABELS.get(spot.labelled, spot.labelled), spot.grain, distance]


LABEL_HEADERS = ["Point", "Session", "Run", "Phase", "Grain", "Rim um"]


def probe_table(spots: list[Spot], reference: Composition) -> list[list[str]]:
    """Oxides in wt%, each with 1 sigma and limit; values below the limit stand as measured."""
    rng = np.random.RandomState([SEED, 4])
    headers = [f"{oxide}{kind}" for oxide in OXIDES for kind in ("", " 1s", " DL")]
    rows = [[*LABEL_HEADERS, *headers, "Total", "Note"]]
    relative = np.array([0.006 if o in ("SiO2", "Al2O3", "FeO", "MgO", "CaO") else 0.018 for o in OXIDES])
    for batch, members in batches("probe", spots, reference):
        calibration = np.exp(relative * np.clip(rng.standard_normal(len(OXIDES)), -1.7, 1.7))
        for spot in members:
            surface = spot.yield_ * math.exp(0.003 * rng.standard_normal())
            true = spot.composition.oxides * calibration * surface
            sigma = np.sqrt((PROBE_LIMIT / 3) ** 2 + PROBE_COUNTING * true)
            value = true + sigma * rng.standard_normal(len(OXIDES))
            reported = np.sqrt((PROBE_LIMIT / 3) ** 2 + PROBE_COUNTING * np.maximum(value, 0))
            cells = [fixed(x) for triple in zip(value, reported, PROBE_LIMIT, strict=True) for x in triple]
            rows.append([*label_cells(spot, batch), *cells, fixed(value.sum(), 2), NOTES.get(spot.label, "")])
    return rows


def laser_table(spots: list[Spot], reference: Composition) -> list[list[str]]:
    """Elements in ppm for the assumed SiO2 of each phase; below the limit only `<limit` is printed."""
    rng = np.random.RandomState([SEED, 5])
    headers = [f"{isotope}{kind}" for isotope in ISOTOPES for kind in ("", " 1s", " DL")]
    rows = [[*LABEL_HEADERS, *headers, "Note"]]
    for batch, members in batches("laser", spots, reference):
        calibration = np.exp(0.018 * np.clip(rng.standard_normal(len(ISOTOPES)), -1.7, 1.7))
        for spot in members:
            silica = spot.composition.oxides[OXIDES.index("SiO2")]
            # the internal standard's own counting noise is common to all elements of the spot
            rescaling = ASSUMED_SIO2.get(spot.labelled, silica) / silica
            rescaling *= math.exp(0.008 * rng.standard_normal())
            true = spot.composition.ppm(LASER_ELEMENTS) * calibration * rescaling
            sensitivity = 0.15 * rng.standard_normal() + 0.1 * rng.standard_normal(len(true))
            limit = LASER_LIMIT * np.exp(sensitivity)
            spread = (limit / 3) ** 2
            sigma = np.sqrt(spread + 0.12 * limit * true + (0.005 * true) ** 2)
            value = true + sigma * rng.standard_normal(len(true))
            reported = np.sqrt(spread + 0.12 * limit * np.maximum(value, 0) + (0.005 * value) ** 2)
            cells: list[str] = []
            for measured, sd, bound in zip(value, reported, limit, strict=True):
                text = significant(bound, 3)
                seen = measured >= float(text)
                cells += [significant(measured), significant(sd, 3), text] if seen else [f"<{text}", "", text]
            rows.append([*label_cells(spot, batch), *cells, NOTES.get(spot.label, "")])
    return rows


# --- files ---


def accepted_table(reference: Composition) -> list[list[str]]:
    """Accepted values of the reference glass, each off the truth by its own stated uncertainty."""
    rng = np.random.RandomState([SEED, 6])
    rows = [["material", "analyte", "value", "unit", "sd", "source"]]
    true = [(name, value, "wt%", 0.005 if value > 5 else 0.01)
            for name, value in zip(OXIDES, reference.oxides, strict=True)]  # fmt: skip
    true += [(name, value, "ppm", 0.012) for name, value in zip(TRACES, reference.traces, strict=True)]
    for name, value, unit, relative in true:
        printed = significant(value * (1 + relative * rng.standard_normal()))
        rows.append([REFERENCE, name, printed, unit, significant(relative * value, 2), "invented, version 1"])
    return rows


def truth_tables(experiments: list[Experiment], spots: dict[str, list[Spot]]) -> dict[str, list[list[str]]]:
    """True D, phase compositions and proportions, and what was wrong with every spot."""
    elements = (*CATIONS, *TRACES)
    coefficients = [["experiment", "alpha", "beta", "element", "D"]]
    compositions = [["experiment", "phase", "analyte", "value", "unit"]]
    proportions = [["experiment", "phase", "mass_fraction"]]
    for experiment in experiments:
        glass = experiment.phases["glass"].ppm(elements)
        for phase, composition in experiment.phases.items():
            named = [*zip(OXIDES, composition.oxides, ["wt%"] * len(OXIDES), strict=True),
                     *zip(TRACES, composition.traces, ["ppm"] * len(TRACES), strict=True)]  # fmt: skip
            compositions += [
                [experiment.run, phase, name, significant(x, 7), unit] for name, x, unit in named
            ]
            share = experiment.fractions.get(phase, 1 - sum(experiment.fractions.values()))
            proportions.append([experiment.run, phase, fixed(share)])
            if phase != "glass":
                ratios = zip(elements, composition.ppm(elements) / glass, strict=True)
                coefficients += [[experiment.run, phase, "glass", e, significant(d, 6)] for e, d in ratios]
    states = [["table", "spot", "experiment", "labelled", "phase", "condition", "overlap_fraction",
               "overlap_phase", "core_fraction", "yield"]]  # fmt: skip
    for table, members in spots.items():
        states += [[f"{table}.csv", s.label, s.run, s.labelled, s.phase, s.condition, significant(s.overlap),
                    s.overlap_phase, significant(s.core), fixed(s.yield_)] for s in members]  # fmt: skip
    return {"truth/partition_coefficients.csv": coefficients, "truth/compositions.csv": compositions,
            "truth/phase_proportions.csv": proportions, "truth/spots.csv": states}  # fmt: skip


def make_files() -> dict[str, bytes]:
    """Every file of the session: path below configs/ember -> content."""
    experiments = make_experiments()
    spots = {table: plan(table, experiments) for table in ("probe", "laser")}
    reference = Composition(REFERENCE_WT, REFERENCE_PPM)
    rulings = [[cell.strip() for cell in line.split("|")] for line in RULINGS.strip().splitlines()]
    tables = {
        "probe.csv": probe_table(spots["probe"], reference),
        "laser.csv": laser_table(spots["laser"], reference),
        "experiments.csv": [["Run", "T", "P", "t"]]
        + [[e.run, f"{e.temperature:.0f}", f"{e.pressure:.1f}", f"{e.duration:.0f}"] for e in experiments],
        "accepted.csv": accepted_table(reference),
        "starting_composition.csv": [["analyte", "value", "unit"]]
        + [[oxide, fixed(x), "wt%"] for oxide, x in zip(OXIDES, START_WT, strict=True)],
        "rulings.csv": [["spot", "analyte", "verdict", "analyst", "date", "reason"], *rulings],
        **truth_tables(experiments, spots),
    }
    files = {}
    for name, rows in tables.items():
        text = io.StringIO()
        csv.writer(text, lineterminator="\n").writerows(rows)
        files[name] = text.getvalue().encode("utf-8")
    return files


def main(arguments: list[str], folder: Path = FOLDER) -> int:
    """Writes or compares; returns the exit status."""
    if arguments not in ([], ["--check"]):
        print("usage: write_ember.py [--check]", file=sys.stderr)
        return 2
    files = make_files()
    if not arguments:
        for name, content in files.items():
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            (folder / name).write_bytes(content)
        return 0
    differing = [
        n
        for n, content in files.items()
        if not (folder / n).is_file() or (folder / n).read_bytes() != content
    ]
    for name in differing:
        print(f"{folder / name} differs from what the script writes", file=sys.stderr)
    return 1 if differing else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
