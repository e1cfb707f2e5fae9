"""An archive of generated sessions with one and with two workers, and again when all is current.

    python tests/benchmarks/archive.py [SESSIONS] [SPOTS]

Every measurement starts from sessions never reduced, in a process of its own, the start of the workers included.
The two are only worth comparing on a machine with two processors that nothing else uses; the load is printed.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "pipeline"), str(Path(__file__).resolve().parent)]

TARGET = 1.7
LABORATORIES = 8


def write_archive(root: Path, sessions: int, spots: int) -> None:
    from big_session import write_session

    for number in range(sessions):
        folder = root / f"lab-{number % LABORATORIES}" / f"session-{number:04d}"
        write_session(folder, spots, name=f"session-{number:04d}", seed=number)


def reduce(root: Path, workers: int) -> tuple[float, dict[str, int]]:
    """Seconds, and how many sessions came out how."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT / "pipeline")}
    command = [sys.executable, "-m", "tieline", "archive", str(root), "--workers", str(workers), "--json"]
    start = time.perf_counter()
    done = subprocess.run(command, capture_output=True, text=True, env=environment, check=True)
    return time.perf_counter() - start, json.loads(done.stdout)["counts"]


def forget(root: Path) -> None:
    for folder in [*root.glob("*/*/runs"), root / "archive"]:
        shutil.rmtree(folder, ignore_errors=True)


def main() -> None:
    sessions = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    spots = int(sys.argv[2]) if len(sys.argv) > 2 else 400
    with tempfile.TemporaryDirectory() as folder:
        root = Path(folder) / "sessions"
        write_archive(root, sessions, spots)
        seconds = {}
        for workers in (1, 2):
            forget(root)
            load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
            seconds[workers], counts = reduce(root, workers)
            print(
                f"{workers} workers: {seconds[workers]:.1f} s for {counts['reduced']} sessions of {spots} spots, "
                f"{seconds[workers] / sessions:.2f} s each; load before {load:.1f} on {os.cpu_count()} processors"
            )
        again, counts = reduce(root, 2)
        print(f"all current: {again:.1f} s for {counts['current']} sessions")
        files = list(root.rglob("*.parquet"))
        size = sum(path.stat().st_size for path in files)
        print(f"{len(files)} Parquet files, {size / 1e6:.0f} MB, {size / sessions / 1e3:.0f} kB per session")
        ratio = seconds[1] / seconds[2]
        print(
            f"{'met   ' if ratio >= TARGET else 'MISSED'}  one worker / two: {ratio:.2f} (target >= {TARGET})"
        )


if __name__ == "__main__":
    main()
