"""`partition` on many D's against as many plain `uncertainties` ratios, and its memory.

    python tests/benchmarks/partition.py [EXPERIMENTS] [REPEATS]

One call makes all D's of two pairs and 25 elements per experiment, with budgets, intervals, limits and
covariances, and with what the table needs around them. The loop it is held against does nothing but make two
uncertain numbers, divide them and take the standard deviation. Every measurement runs in a process of its own.
"""

from __future__ import annotations

import json
import math
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

sys.path[:0] = [str(Path(__file__).resolve().parents[2] / "pipeline"), str(Path(__file__).resolve().parent)]

ELEMENTS = (
    "Li", "Sc", "V", "Cr", "Co", "Ni", "Ga", "Rb", "Sr", "Y", "Zr", "Nb", "Ba",
    "La", "Ce", "Nd", "Sm", "Eu", "Gd", "Dy", "Er", "Yb", "Hf", "Th", "U",
)  # fmt: skip
PHASES = ("clinopyroxene", "glass", "olivine")
PAIRS = (("clinopyroxene", "glass"), ("olivine", "glass"))
TARGET = 0.25


def stage_tables(experiments: int, rescaled: bool) -> dict[str, Any]:
    """The tables that `partition` reads; `rescaled`: every mean shares an internal standard with its phase.

    In three experiments of ten the phases are of two batches.
    """
    import numpy as np

    from tieline.arrays import Labels
    from tieline.columns import CALIBRATE, PAIR, PAIR_LIMITS
    from tieline.columns import PAIRS as PAIRS_TABLE
    from tieline.tables import build

    rng = np.random.default_rng(7)
    names = tuple(f"X{number:06d}" for number in range(experiments))
    n = experiments * len(PHASES) * len(ELEMENTS)
    row = np.arange(n)
    experiment = row // (len(PHASES) * len(ELEMENTS))
    phase = row // len(ELEMENTS) % len(PHASES)
    mean = rng.lognormal(1.0, 2.0, n)
    se = mean * rng.uniform(0.01, 0.1, n)
    apart = (phase == 1) & (experiment % 10 < 3)
    columns = {
        "experiment": Labels(experiment, names),
        "phase": Labels(phase, PHASES),
        "element": Labels(row % len(ELEMENTS), ELEMENTS),
        "technique": Labels(np.zeros(n, dtype=np.int64), ("laser",)),
        "batch": Labels(apart.astype(np.int64), ("first", "second")),
        "analyte": Labels(row % len(ELEMENTS), ELEMENTS),
        "n_used": rng.integers(3, 12, n),
        "mean_ppm": mean,
        "se_ppm": se,
        "counting_se_ppm": se * rng.uniform(0.3, 0.9, n),
        "n_independent": 0,
        "internal_standard": np.full(n, rescaled),
        "internal_standard_sd": np.where(
            rescaled, rng.uniform(0.005, 0.02, n // len(ELEMENTS)).repeat(len(ELEMENTS)), np.nan
        ),
    }
    columns["dof"] = columns["n_used"] - 1.0
    columns["n_independent"] = columns["n_used"]
    of_pair = np.arange(experiments * len(PAIRS))
    calibration = [(batch, element) for batch in ("first", "second") for element in ELEMENTS]
    return {
        "pair": build(PAIR, _filled(PAIR, n, columns)),
        "pair_pairs": build(
            PAIRS_TABLE,
            {
                "experiment": Labels(of_pair // len(PAIRS), names),
                "alpha": Labels(of_pair % len(PAIRS), tuple(alpha for alpha, _ in PAIRS)),
                "beta": Labels(np.zeros_like(of_pair), ("glass",)),
                "n_alpha": np.full(len(of_pair), 5),
                "n_beta": np.full(len(of_pair), 5),
                "formed": np.ones(len(of_pair), dtype=np.bool_),
                "reason": [None] * len(of_pair),
            },
        ),
        "pair_limits": PAIR_LIMITS.schema().empty_table(),
        "calibrate": build(
            CALIBRATE,
            _filled(
                CALIBRATE,
                len(calibration),
                {
                    "technique": ["laser"] * len(calibration),
                    "batch": [batch for batch, _ in calibration],
                    "element": [element for _, element in calibration],
                    "analyte": [element for _, element in calibration],
                    "n_spots": [9] * len(calibration),
                    "n_materials": [1] * len(calibration),
                    "factor": [1.0] * len(calibration),
                    "drift_applied": [0.0] * len(calibration),
                    "relative_sd": [0.03] * len(calibration),
                    "matrix_sd": [0.01] * len(calibration),
                    "origin": ["reference materials"] * len(calibration),
                },
            ),
        ),
    }


def _filled(spec: Any, rows: int, columns: dict[str, Any]) -> dict[str, Any]:
    """The columns, and for the others of the table nothing, zero or an empty text."""
    nothing = {"number": 0.0, "count": 0, "flag": False, "label": "", "text": ""}
    rest = {column.name: None if column.nullable else nothing[column.kind] for column in spec.columns}
    return {**{name: [value] * rows for name, value in rest.items()}, **columns}


def run_stage(experiments: int, rescaled: bool = False) -> dict[str, float]:
    from chain import Meter

    from tieline.partition import partition
    from tieline.settings.results import PartitionSettings

    tables = stage_tables(experiments, rescaled)
    partition(**stage_tables(2, rescaled), settings=PartitionSettings())  # imports what is imported late
    base = Meter()
    base.mark("base")
    meter = Meter()
    result = partition(**tables, settings=PartitionSettings())
    meter.mark("partition")
    found = meter.result()
    rows = result.tables["partition"].num_rows
    return {
        "seconds": found["seconds"],
        "cpu": found["cpu"],
        "bytes": found["peak"] - base.result()["peak"],
        "D": rows,
        "covariances": result.tables["partition.covariance"].num_rows,
    }


def run_loop(experiments: int) -> dict[str, float]:
    from uncertainties import ufloat

    n = experiments * len(PAIRS) * len(ELEMENTS)
    values = [(10.0 + number % 7, 0.5, 20.0 + number % 5, 0.8) for number in range(n)]
    start = time.perf_counter(), time.process_time()
    total = 0.0
    for alpha, u_alpha, beta, u_beta in values:
        total += (ufloat(alpha, u_alpha) / ufloat(beta, u_beta)).std_dev
    assert total > 0
    return {"seconds": time.perf_counter() - start[0], "cpu": time.process_time() - start[1], "D": n}


def measure(task: str, experiments: int, repeats: int) -> dict[str, float]:
    runs = []
    for _ in range(repeats):
        command = [sys.executable, __file__, task, str(experiments), "one"]
        runs.append(json.loads(subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True).stdout))
    return min(runs, key=lambda run: run["seconds"])


def main() -> None:
    experiments = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    repeats = int(sys.argv[2]) if len(sys.argv) > 2 else 3
    loop = measure("loop", experiments, repeats)
    print(f"{loop['D']:8} plain ratios in a loop: {loop['seconds']:.2f} s (cpu {loop['cpu']:.2f} s)")
    sizes = [experiments // 4, experiments, experiments * 4]
    met = []
    for task, what in (("stage", "measured alone"), ("rescaled", "rescaled to an internal standard")):
        found = [measure(task, size, repeats) for size in sizes]
        for run in found:
            print(
                f"{run['D']:8} D, {what}: {run['seconds']:.2f} s (cpu {run['cpu']:.2f} s), {run['bytes'] / 1e6:.0f} MB, "
                f"{run['bytes'] / run['D']:.0f} bytes per D; {run['covariances']} covariances"
            )
        ratio = found[1]["seconds"] / loop["seconds"]
        growth = math.log(found[2]["bytes"] / found[1]["bytes"]) / math.log(4.0)
        met += [
            f"{'met   ' if ratio <= TARGET else 'MISSED'}  stage / loop, {what}: {ratio:.2f} (target <= {TARGET})",
            f"{'met   ' if growth <= 1.05 else 'MISSED'}  growth of memory: exponent {growth:.2f} (target <= 1.05)",
        ]
    print("\n".join(met))


TASKS = {"stage": run_stage, "rescaled": lambda experiments: run_stage(experiments, True), "loop": run_loop}

if __name__ == "__main__":
    if sys.argv[3:] == ["one"]:
        print(json.dumps(TASKS[sys.argv[1]](int(sys.argv[2]))))
    else:
        main()
