"""Small stays small: the time of commands on the demo session, as ratios to importing the libraries they use.

    python tests/benchmarks/commands.py [REPEATS]

Every command runs in a process of its own, warm, in turn with the others so that all see the same load; of the
repeats the fastest counts. Byte code is compiled beforehand, as an installed package has it.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
LIBRARIES = "import pandas, scipy.stats, pyarrow.parquet"
TWO_COMMANDS = """
import typer
app = typer.Typer(help="Two commands.")
@app.command()
def first(name: str, count: int = 1) -> None:
    "Does one thing."
@app.command()
def second(name: str) -> None:
    "Does another."
app()
"""


def main() -> None:
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    with tempfile.TemporaryDirectory() as folder:
        measure(Path(folder), repeats)


def measure(folder: Path, repeats: int) -> None:
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONDONTWRITEBYTECODE"}
    environment |= {"PYTHONPATH": str(ROOT / "pipeline"), "PYTHONPYCACHEPREFIX": str(folder / "cache")}

    def seconds(*arguments: str) -> float:
        start = time.perf_counter()
        subprocess.run([sys.executable, *arguments], check=True, capture_output=True, env=environment)
        return time.perf_counter() - start

    config = folder / "configs" / "ember.toml"
    shutil.copytree(ROOT / "configs", folder / "configs")
    tieline = ("-m", "tieline")
    seconds(*tieline, "run", str(config), "--quiet")
    boundaries = iter(range(1, 1000))

    def changed_boundary() -> float:
        setting = f"classify.highly_incompatible_below=0.0{next(boundaries):03d}"
        return seconds(*tieline, "run", str(config), "--quiet", "--set", setting)

    # name: how it is timed, what it is compared with, the largest ratio that is acceptable
    tasks = {
        "libraries": (lambda: seconds("-c", LIBRARIES), "libraries", 1.0),
        "two-command help": (lambda: seconds("-c", TWO_COMMANDS, "--help"), "two-command help", 1.0),
        "run, everything": (
            lambda: seconds(*tieline, "run", str(config), "--fresh", "--out", str(folder / "all")),
            "libraries",
            4.0,
        ),
        "run, changed boundary": (changed_boundary, "libraries", 1.5),
        "status": (lambda: seconds(*tieline, "status", str(config)), "libraries", 1.5),
        "trace": (
            lambda: seconds(
                *tieline, "trace", str(config), "EM-02", "olivine/glass", "Ni", "--out", str(folder / "all")
            ),
            "libraries",
            1.5,
        ),
        "compare": (
            lambda: seconds(
                *tieline, "compare", str(folder / "example_runs" / "ember"), str(folder / "all" / "ember")
            ),
            "libraries",
            1.5,
        ),
        "help": (lambda: seconds(*tieline, "--help"), "two-command help", 1.6),
    }
    best = dict.fromkeys(tasks, float("inf"))
    for _ in range(repeats + 1):  # the first round only warms up
        for name, (timed, _, _) in tasks.items():
            best[name] = min(best[name], timed())
    print(f"{'':24}{'s':>7}  ratio")
    for name, (_, base, target) in tasks.items():
        ratio = best[name] / best[base]
        verdict = (
            ""
            if name == base
            else f"  {'met' if ratio <= target else 'MISSED'} (target <= {target:g} x {base})"
        )
        print(f"{name:24}{best[name]:7.2f}{ratio:7.2f}{verdict}")


if __name__ == "__main__":
    main()
