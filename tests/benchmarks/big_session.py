"""Big sessions of known size for the benchmarks: spots x 40 analytes, each with a sigma and a limit column.

    PYTHONPATH=pipeline python tests/benchmarks/big_session.py FOLDER [SPOTS]

Everything is invented and follows from the seed. An experiment has forty spots: thirteen each of olivine,
clinopyroxene and glass, and one of a reference glass; fifty experiments share a batch. One crystal spot in ten
hit some glass, and what lies below its limit is written as `<limit`, as laboratories do.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv

SEED = 20260312
PHASES = ("olivine", "clinopyroxene", "glass")
REFERENCE = "BRG-1"
SPOTS_PER_PHASE = 13
SPOTS_PER_EXPERIMENT = len(PHASES) * SPOTS_PER_PHASE + 1
EXPERIMENTS_PER_BATCH = 50
EXPERIMENTS_PER_BLOCK = 125

# analyte: olivine, clinopyroxene, glass. Oxides in wt%, elements in ppm.
MAJORS = {
    "SiO2": (39.8, 51.5, 50.0),
    "TiO2": (0.012, 0.6, 1.6),
    "Al2O3": (0.04, 3.6, 15.0),
    "FeO": (14.2, 6.2, 9.5),
    "MnO": (0.22, 0.15, 0.17),
    "MgO": (45.3, 16.6, 7.6),
    "CaO": (0.28, 20.6, 11.5),
    "Na2O": (0.005, 0.3, 2.8),
    "K2O": (0.001, 0.002, 0.6),
    "P2O5": (0.01, 0.006, 0.25),
}
TRACES = {
    "Li": (4.0, 3.0, 20.0), "Be": (0.002, 0.04, 2.0), "Sc": (6.0, 60.0, 45.0), "V": (14.0, 250.0, 280.0),
    "Cr": (300.0, 2600.0, 330.0), "Co": (140.0, 48.0, 44.0), "Ni": (1200.0, 300.0, 120.0), "Cu": (7.0, 3.0, 70.0),
    "Zn": (85.0, 40.0, 95.0), "Ga": (0.4, 8.0, 20.0), "Rb": (0.008, 0.06, 30.0), "Sr": (0.2, 30.0, 350.0),
    "Y": (0.3, 22.0, 45.0), "Zr": (0.3, 24.0, 180.0), "Nb": (0.01, 0.3, 40.0), "Cs": (0.002, 0.003, 8.0),
    "Ba": (0.02, 0.12, 250.0), "La": (0.004, 2.6, 45.0), "Ce": (0.012, 6.3, 70.0), "Nd": (0.02, 8.0, 40.0),
    "Sm": (0.04, 10.0, 30.0), "Eu": (0.03, 7.5, 20.0), "Gd": (0.07, 13.0, 30.0), "Dy": (0.18, 15.0, 30.0),
    "Er": (0.4, 14.0, 30.0), "Yb": (0.9, 14.0, 30.0), "Lu": (0.8, 9.0, 20.0), "Hf": (0.06, 6.0, 25.0),
    "Th": (0.002, 0.25, 28.0), "U": (0.003, 0.2, 28.0),
}  # fmt: skip
MAJOR_LIMIT_WT, TRACE_LIMIT_PPM = 0.02, 0.01
RELATIVE_SIGMA = {True: 0.006, False: 0.02}  # by: is it a major?
MOST_DECIMALS = 4

CONFIGURATION = """\
session = "{name}"
out = "{out}"

[[ingest.tables]]
path = "spots.csv"
technique = "laser"
unit = "ppm"
columns = {{ spot = "Point", batch = "Session", experiment = "Run", phase = "Phase", grain = "Grain", comment = "Note" }}
sigma = {{ pattern = "{{analyte}} 1s" }}
limit = {{ pattern = "{{analyte}} DL" }}

[ingest.reference_materials]
path = "accepted.csv"
"""

Array = npt.NDArray[np.float64]


def write_session(
    folder: Path, spots: int, *, name: str = "big", out: str = "runs", seed: int = SEED
) -> Path:
    """Writes `spots.csv`, `accepted.csv` and the configuration below `folder`; returns the configuration's path.

    spots: rounded up to whole experiments of forty.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng([seed, spots])
    experiments = -(-spots // SPOTS_PER_EXPERIMENT)
    # Text cells are handed over as text: every cell is written exactly as made, none between quotes.
    options = pyarrow.csv.WriteOptions(quoting_style="none")
    writer = None
    for start in range(0, experiments, EXPERIMENTS_PER_BLOCK):
        block = _block(rng, start, min(EXPERIMENTS_PER_BLOCK, experiments - start))
        if writer is None:
            writer = pyarrow.csv.CSVWriter(folder / "spots.csv", block.schema, write_options=options)
        writer.write_table(block)
    if writer is not None:
        writer.close()
    _write_accepted(folder / "accepted.csv")
    path = folder / "session.toml"
    path.write_text(CONFIGURATION.format(name=name, out=out), encoding="utf-8")
    return path


def _block(rng: np.random.Generator, first: int, count: int) -> pa.Table:
    """The text cells of some whole experiments."""
    n = count * SPOTS_PER_EXPERIMENT
    number = first * SPOTS_PER_EXPERIMENT + np.arange(n)
    experiment = number // SPOTS_PER_EXPERIMENT
    place = number % SPOTS_PER_EXPERIMENT
    is_reference = place == SPOTS_PER_EXPERIMENT - 1
    phase = np.where(is_reference, 2, place // SPOTS_PER_PHASE)
    names = np.array([*PHASES, REFERENCE], dtype=object)
    runs = np.char.mod("BG-%05d", experiment).astype(object)
    columns = {
        "Point": np.char.mod("s%07d", number).astype(object),
        "Session": np.char.mod("batch-%03d", experiment // EXPERIMENTS_PER_BATCH).astype(object),
        "Run": np.where(is_reference, "", runs),
        "Phase": names[np.where(is_reference, len(PHASES), phase)],
        "Grain": np.where(is_reference | (phase == 2), "", np.char.mod("g%d", place % 4).astype(object)),
        "Note": np.where(rng.random(n) < 0.03, "rough surface", ""),
    }
    table = {name: pa.array(cells, pa.string()) for name, cells in columns.items()}
    glass_in_spot = np.where((phase < 2) & (rng.random(n) < 0.1), np.exp(rng.uniform(-7.0, -3.0, n)), 0.0)
    for name, by_phase in (MAJORS | TRACES).items():
        table |= _analyte(rng, name, by_phase, phase, glass_in_spot, experiment - first, is_reference)
    return pa.table(table)


def _analyte(
    rng: np.random.Generator,
    name: str,
    by_phase: tuple[float, float, float],
    phase: npt.NDArray[np.int64],
    glass_in_spot: Array,
    experiment: npt.NDArray[np.int64],
    is_reference: npt.NDArray[np.bool_],
) -> dict[str, pa.Array]:
    is_major = name in MAJORS
    level = rng.lognormal(0.0, 0.002 if is_major else 0.2, int(experiment.max()) + 1)[experiment]
    truth = np.array(by_phase)[phase] * np.where(is_reference, 1.0, level)
    glass = by_phase[2] * level
    truth = (1.0 - glass_in_spot) * truth + glass_in_spot * glass
    limit = (MAJOR_LIMIT_WT if is_major else TRACE_LIMIT_PPM) * rng.uniform(0.7, 1.4, len(truth))
    sigma = np.hypot(RELATIVE_SIGMA[is_major] * truth, limit / 3.0)
    value = truth * (1.0 + 0.3 * RELATIVE_SIGMA[is_major] * rng.standard_normal(len(truth)))
    value += sigma * rng.standard_normal(len(truth))
    limit_text = _text(limit, 2)
    below = pa.array(value < limit)
    cells = pc.if_else(below, pc.binary_join_element_wise("<", limit_text, ""), _text(value, 4))
    header = f"{name} (wt%)" if is_major else f"{name} ppm"
    return {header: cells, f"{name} 1s": _text(sigma, 2), f"{name} DL": limit_text}


def _text(values: Array, digits: int) -> pa.Array:
    """Positive numbers with so many significant digits, and no more decimals than a laboratory writes."""
    magnitude = np.floor(np.log10(np.maximum(values, 10.0**-MOST_DECIMALS)))
    scale = 10.0 ** np.clip(digits - 1 - magnitude, 0, MOST_DECIMALS)
    return pc.cast(pa.array(np.maximum(np.round(values * scale), 1.0) / scale), pa.string())


def _write_accepted(path: Path) -> None:
    lines = ["material,analyte,value,unit,sd,source"]
    for names, unit in ((MAJORS, "wt%"), (TRACES, "ppm")):
        lines += [
            f"{REFERENCE},{name},{row[2]:g},{unit},{0.01 * row[2]:.4g},invented"
            for name, row in names.items()
        ]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    print(write_session(Path(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else 200_000))
