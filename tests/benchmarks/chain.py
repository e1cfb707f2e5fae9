"""Time and peak memory of the whole chain on big sessions, as ratios to two baselines of the same run.

    python tests/benchmarks/chain.py [--spots 200000] [--baseline-spots 20000] [--repeats 3] [--keep FOLDER]

Baselines: (a) Arrow reading the same table as text, every column, and nothing else; (b) the hand-written
script `baseline_script.py`. Sizes are N, 4 N and 16 N spots with forty analytes, each with a sigma and a limit.
Every measurement runs in a process of its own, imports left out; of repeated ones the fastest counts, which is
the one that other programs on the machine disturbed least. Processor time stands beside the elapsed time.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import math
import os
import platform
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path[:0] = [str(Path(__file__).resolve().parents[2] / "pipeline"), str(Path(__file__).resolve().parent)]

TARGET_TEXT_RATIO = 25.0
TARGET_EXPONENT = 1.05
TARGET_MEMORY = 8.0
TARGET_SCRIPT_RATIO = 20.0

Result = dict[str, Any]


class Meter:
    """Elapsed time, processor time and peak resident memory between marks."""

    def __init__(self) -> None:
        self.marks: dict[str, dict[str, float]] = {}
        self._start()

    def _start(self) -> None:
        _reset_peak()
        self._since = time.perf_counter(), time.process_time()

    def mark(self, name: str) -> None:
        """Ends the section that began with the last mark."""
        seconds, cpu = time.perf_counter() - self._since[0], time.process_time() - self._since[1]
        self.marks[name] = {"seconds": seconds, "cpu": cpu, "peak": _peak_bytes()}
        self._start()

    def result(self) -> Result:
        total = {name: sum(mark[name] for mark in self.marks.values()) for name in ("seconds", "cpu")}
        return {**total, "peak": max(mark["peak"] for mark in self.marks.values()), "parts": self.marks}


def _reset_peak() -> None:
    # Where the system cannot do this the peak only grows: a stage then shows the largest so far.
    with contextlib.suppress(OSError):
        Path("/proc/self/clear_refs").write_text("5")


def _peak_bytes() -> int:
    try:
        lines = Path("/proc/self/status").read_text().splitlines()
        return 1024 * next(int(line.split()[1]) for line in lines if line.startswith("VmHWM"))
    except (OSError, StopIteration):
        import resource

        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)


# --- what is measured, each in a process of its own ---


def read_text(folder: Path) -> Result:
    import pyarrow as pa
    import pyarrow.csv as csv

    path = folder / "spots.csv"
    with path.open(encoding="utf-8") as stream:
        names = [name.strip('"') for name in stream.readline().strip().split(",")]
    options = csv.ConvertOptions(column_types=dict.fromkeys(names, pa.string()))
    meter = Meter()
    table = csv.read_csv(path, convert_options=options)
    meter.mark("text")
    return {**meter.result(), "rows": table.num_rows}


def run_chain(folder: Path) -> Result:
    from tieline import runner
    from tieline.configuration import load
    from tieline.stages import STAGES

    for stage in STAGES:
        stage.function()
    session = load(folder / "session.toml")
    shutil.rmtree(session.run_folder, ignore_errors=True)
    meter = Meter()

    def progress(stage: str, state: str) -> None:
        meter.mark(stage if state == "done" else f"before {stage}")

    reports = runner.run(session, progress=progress)
    meter.mark("manifest")
    size = sum(path.stat().st_size for path in session.run_folder.iterdir())
    ledgers = {report.verdict.stage: dict(report.ledger.outcomes) for report in reports}
    return {**meter.result(), "written": size, "ledgers": ledgers}


def run_script(folder: Path) -> Result:
    import baseline_script

    meter = Meter()
    count = baseline_script.reduce(str(folder / "spots.csv"), str(folder / "baseline.csv"))
    meter.mark("script")
    return {**meter.result(), "D": count}


TASKS: dict[str, Callable[[Path], Result]] = {"text": read_text, "chain": run_chain, "script": run_script}


def measure(task: str, folder: Path, repeats: int) -> Result:
    """The fastest of so many runs, by elapsed time."""
    results = []
    for _ in range(repeats):
        command = [sys.executable, __file__, "--task", task, str(folder)]
        done = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True)
        results.append(json.loads(done.stdout))
    return min(results, key=lambda result: result["seconds"])


# --- what is printed ---


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--spots", type=int, default=200_000, help="largest session")
    parser.add_argument(
        "--baseline-spots", type=int, default=20_000, help="session given to the script; 0: none"
    )
    parser.add_argument("--repeats", type=int, default=2)
    parser.add_argument("--keep", type=Path, help="folder for the sessions, kept and used again")
    parser.add_argument("--task", nargs=2, metavar=("TASK", "FOLDER"), help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.task:
        print(json.dumps(TASKS[arguments.task[0]](Path(arguments.task[1]))))
        return
    with tempfile.TemporaryDirectory() as temporary:
        folder = arguments.keep or Path(temporary)
        sizes = [arguments.spots // 16, arguments.spots // 4, arguments.spots]
        report(folder, sizes, arguments.baseline_spots, arguments.repeats)


def report(folder: Path, sizes: list[int], baseline_spots: int, repeats: int) -> None:
    print(f"machine: {describe_machine()}\n")
    texts, chains = [], []
    for spots in sizes:
        session = _session(folder, spots)
        texts.append(measure("text", session, max(repeats, 3)))
        chains.append(measure("chain", session, repeats))
    bytes_ = (_session(folder, sizes[-1]) / "spots.csv").stat().st_size
    print_stages(sizes[-1], bytes_, texts[-1], chains[-1])
    growth = print_growth(sizes, texts, chains)
    met = [
        _target(
            "whole chain / reading as text", chains[-1]["seconds"] / texts[-1]["seconds"], TARGET_TEXT_RATIO
        ),
        _target("growth exponent", growth, TARGET_EXPONENT),
        _target("peak memory / text", chains[-1]["peak"] / bytes_, TARGET_MEMORY),
    ]
    if baseline_spots:
        session = _session(folder, baseline_spots)
        script, chain = measure("script", session, 1), measure("chain", session, repeats)
        print(
            f"\n{baseline_spots} spots, {baseline_spots // 40} experiments: script {script['seconds']:.1f} s "
            f"(cpu {script['cpu']:.1f} s, {script['D']} D without intervals), "
            f"chain {chain['seconds']:.2f} s (cpu {chain['cpu']:.2f} s)"
        )
        ratio = script["seconds"] / chain["seconds"]
        met.append(_target("script / whole chain", ratio, TARGET_SCRIPT_RATIO, at_least=True))
    print()
    for line in met:
        print(line)


def _session(folder: Path, spots: int) -> Path:
    from big_session import write_session

    session = folder / f"spots-{spots}"
    if not (session / "session.toml").exists():
        write_session(session, spots)
    return session


def print_stages(spots: int, text_bytes: int, text: Result, chain: Result) -> None:
    values = f"{spots} spots x 40 analytes, {text_bytes / 1e6:.0f} MB of text"
    print(f"{values}; {chain['written'] / 1e6:.0f} MB of stage files written")
    print(f"{'':14}{'s':>8}{'cpu s':>8}{'x text':>8}{'peak MB':>9}{'x text':>8}")

    def line(name: str, part: Result) -> None:
        ratio, memory = part["seconds"] / text["seconds"], part["peak"] / text_bytes
        numbers = (
            f"{part['seconds']:8.2f}{part['cpu']:8.2f}{ratio:8.2f}{part['peak'] / 1e6:9.0f}{memory:8.2f}"
        )
        print(f"{name:14}{numbers}")

    line("read as text", text)
    for name, part in chain["parts"].items():
        if part["seconds"] > 0.01 * text["seconds"]:
            line(name, part)
    line("whole chain", chain)


def print_growth(sizes: list[int], texts: list[Result], chains: list[Result]) -> float:
    """Prints the growth over the sizes; returns the exponent from the smallest to the largest."""
    print(f"\n{'spots':>10}{'text s':>9}{'chain s':>9}{'cpu s':>8}{'x text':>8}{'exponent':>10}")
    for position, spots in enumerate(sizes):
        step = _exponent(sizes, chains, position - 1, position) if position else math.nan
        text, chain = texts[position], chains[position]
        print(
            f"{spots:10}{text['seconds']:9.2f}{chain['seconds']:9.2f}{chain['cpu']:8.2f}"
            f"{chain['seconds'] / text['seconds']:8.2f}" + (f"{step:10.2f}" if position else "")
        )
    return _exponent(sizes, chains, 0, len(sizes) - 1)


def _exponent(sizes: list[int], chains: list[Result], first: int, last: int) -> float:
    return math.log(chains[last]["seconds"] / chains[first]["seconds"]) / math.log(sizes[last] / sizes[first])


def _target(name: str, value: float, target: float, *, at_least: bool = False) -> str:
    met = value >= target if at_least else value <= target
    sign = ">=" if at_least else "<="
    return f"{'met   ' if met else 'MISSED'}  {name}: {value:.2f} (target {sign} {target:g})"


def describe_machine() -> str:
    """Processor, cores, memory, system and the versions that the figures hang on."""
    import numpy
    import pyarrow

    model = platform.processor() or platform.machine()
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
        model = next(line.split(":")[1].strip() for line in lines if line.startswith("model name"))
        memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9
        load = f", load {os.getloadavg()[0]:.1f} at the start"
    except (OSError, StopIteration, ValueError, AttributeError):
        return f"{model}, {os.cpu_count()} cores, {platform.system()}"
    versions = f"Python {platform.python_version()}, NumPy {numpy.__version__}, Arrow {pyarrow.__version__}"
    return f"{model}, {os.cpu_count()} cores, {memory:.0f} GB, {platform.system()}; {versions}{load}"


if __name__ == "__main__":
    main()
