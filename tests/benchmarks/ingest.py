"""Time and peak memory of `ingest` on a large table, against Arrow reading the same file as text.

    PYTHONPATH=pipeline python tests/benchmarks/ingest.py [spots] [repeats]

Prints the ratio of the median times and the peak memory (resident set, whole process, file included) over
the file's size. The table is made up: 40 analytes with an uncertainty and a limit column each, labels, and
one cell in ten below its limit. Every measurement runs in a process of its own.
"""

from __future__ import annotations

import json
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ANALYTES = (
    "Li", "Be", "B", "Na", "Mg", "Al", "Si", "P", "K", "Ca", "Sc", "Ti", "V", "Cr", "Mn", "Fe", "Co", "Ni", "Cu", "Zn",
    "Ga", "Rb", "Sr", "Y", "Zr", "Nb", "Cs", "Ba", "La", "Ce", "Pr", "Nd", "Sm", "Eu", "Gd", "Tb", "Dy", "Ho", "Er", "Yb",
)  # fmt: skip


def write_table(path: Path, spots: int) -> None:
    """A table of random cells with four decimals at most, about one in ten of them below the limit."""
    import numpy as np

    rng = np.random.default_rng(11)
    headers = ["Point", "Run", "Phase", "Grain", "Note"]
    for name in ANALYTES:
        headers += [f"{name} ppm", f"{name} 1s", f"{name} DL"]
    phases = np.array(["olivine", "cpx", "glass"])
    with path.open("w", encoding="utf-8", newline="") as stream:
        stream.write(",".join(headers) + "\n")
        for start in range(0, spots, 5000):
            n = min(5000, spots - start)
            columns = [
                np.char.add("spot-", np.arange(start, start + n).astype(str)),
                np.char.add("TX", rng.integers(1, 900, n).astype(str)),
                phases[rng.integers(0, 3, n)],
                np.char.add("g", rng.integers(1, 9, n).astype(str)),
                np.where(rng.random(n) < 0.05, "rough surface", ""),
            ]
            for _ in ANALYTES:
                value = np.char.mod("%.5g", rng.lognormal(3, 2, n))
                limit = np.char.mod("%.3f", rng.uniform(0.01, 0.09, n))
                columns += [
                    np.where(rng.random(n) < 0.1, np.char.add("<", limit), value),
                    np.char.mod("%.4g", rng.lognormal(0, 1, n)),
                    limit,
                ]
            lines = columns[0].astype(object)
            for column in columns[1:]:
                lines = lines + "," + column.astype(object)
            stream.write("\n".join(lines) + "\n")


def read_as_text(path: str) -> None:
    import pyarrow as pa
    import pyarrow.csv

    with open(path, encoding="utf-8") as stream:
        names = stream.readline().strip().split(",")
    options = pyarrow.csv.ConvertOptions(column_types=dict.fromkeys(names, pa.string()))
    start = time.perf_counter(), time.process_time()
    pyarrow.csv.read_csv(path, convert_options=options)
    _report(start)


def run_ingest(path: str) -> None:
    import pyarrow as pa

    from tieline.ingest import ingest
    from tieline.reading.input_file import InputFile
    from tieline.settings.ingest import IngestSettings

    table = {
        "path": "large.csv",
        "unit": "ppm",
        "columns": {
            "spot": "Point",
            "experiment": "Run",
            "phase": "Phase",
            "grain": "Grain",
            "comment": "Note",
        },
        "sigma": {"pattern": "{analyte} 1s"},
        "limit": {"pattern": "{analyte} DL"},
    }
    settings = IngestSettings.model_validate({"tables": [table]})
    small = b"Point,Run,Phase,Grain,Note,Ni ppm,Ni 1s,Ni DL\n1,a,glass,,,<1,1,2\n"
    ingest(
        {"large.csv": InputFile.from_bytes("large.csv", small)}, settings=settings
    )  # imports are not measured
    base = _peak_bytes()
    start = time.perf_counter(), time.process_time()
    with pa.memory_map(path) as stream:
        result = ingest({"large.csv": InputFile("large.csv", stream.read_buffer())}, settings=settings)
    result.ledger.check("ingest")
    _report(start, base, rows=result.tables["ingest"].num_rows, table_bytes=result.tables["ingest"].nbytes)


def _report(start: tuple[float, float], base: int = 0, **more: int) -> None:
    seconds, cpu = time.perf_counter() - start[0], time.process_time() - start[1]
    print(json.dumps({"seconds": seconds, "cpu": cpu, "base": base, "peak": _peak_bytes(), **more}))


def _peak_bytes() -> int:
    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit


def _measure(task: str, path: Path) -> dict[str, float]:
    command = [sys.executable, __file__, task, str(path)]
    result: dict[str, float] = json.loads(
        subprocess.run(command, check=True, capture_output=True, text=True).stdout
    )
    return result


def main() -> None:
    spots = int(sys.argv[1]) if len(sys.argv) > 1 else 200_000
    repeats = int(sys.argv[2]) if len(sys.argv) > 2 else 3
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "large.csv"
        write_table(path, spots)
        size = path.stat().st_size
        plain, whole = [], []
        for _ in range(repeats):
            plain.append(_measure("text", path))
            whole.append(_measure("ingest", path))
    seconds, cpu = (
        [statistics.median(run[kind] for run in runs) for runs in (plain, whole)]
        for kind in ("seconds", "cpu")
    )
    print(f"processor time: {cpu[0]:.2f} s and {cpu[1]:.2f} s; ratio {cpu[1] / cpu[0]:.2f}")
    peak = max(run["peak"] for run in whole)
    print(f"file: {spots} spots, {5 + 3 * len(ANALYTES)} columns, {size / 1e6:.0f} MB")
    print(
        f"arrow, all text: {seconds[0]:.2f} s; ingest: {seconds[1]:.2f} s; ratio {seconds[1] / seconds[0]:.2f}"
    )
    print(
        f"peak memory: {peak / 1e6:.0f} MB, {peak / size:.2f} x the file; before the call {whole[0]['base'] / 1e6:.0f} MB"
    )
    print(f"rows: {whole[0]['rows']}")


if __name__ == "__main__":
    if len(sys.argv) == 3 and sys.argv[1] in ("text", "ingest"):
        {"text": read_as_text, "ingest": run_ingest}[sys.argv[1]](sys.argv[2])
    else:
        main()
