"""Searches for input that breaks a promise of `targets.py`, guided by the branches it reaches.

    python tests/faults/fuzz.py --minutes 10            all targets, the time divided among them
    python tests/faults/fuzz.py --minutes 10 cells      one target

Sets out from `tests/corpus/` and the seeds, keeps what reached new branches in `build/fuzz/<target>/`, and leaves a
finding there as `crash-*`, `timeout-*` or `oom-*`. Copy a finding, smallest first, to the corpus: it is a test from then on.
"""

from __future__ import annotations

import argparse
import hashlib
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "pipeline"), str(ROOT / "tests")]
WORK = ROOT / "build" / "fuzz"
LONGEST_BYTES, SLOWEST_S, LARGEST_MB = 4096, 10, 2500


def search(target: str, seconds: int) -> None:
    """Runs one target in this process until the time is over or something is found; never returns."""
    import atheris

    with atheris.instrument_imports(include=["tieline"]):
        from faults.targets import CORPUS, TARGETS, seeds

    work = WORK / target
    work.mkdir(parents=True, exist_ok=True)
    for data in seeds()[target]:
        (work / hashlib.sha256(data).hexdigest()[:16]).write_bytes(data)
    (CORPUS / target).mkdir(parents=True, exist_ok=True)
    options = [
        f"-max_total_time={seconds}", f"-max_len={LONGEST_BYTES}", f"-timeout={SLOWEST_S}",
        f"-rss_limit_mb={LARGEST_MB}", f"-artifact_prefix={work}/", "-print_final_stats=1", "-verbosity=0",
    ]  # fmt: skip
    atheris.Setup([sys.argv[0], *options, str(work), str(CORPUS / target)], TARGETS[target])
    atheris.Fuzz()


def main() -> int:
    parser = argparse.ArgumentParser()
    parser.add_argument("targets", nargs="*")
    parser.add_argument("--minutes", type=float, default=10.0)
    parser.add_argument("--alone", action="store_true", help="in this process, for one target")
    wanted = parser.parse_args()
    if wanted.alone:
        search(wanted.targets[0], int(wanted.minutes * 60))
    from faults.targets import TARGETS

    names = wanted.targets or [*TARGETS]
    failed = []
    for name in names:
        share = f"--minutes={wanted.minutes / len(names):.4f}"
        done = subprocess.run(
            [sys.executable, __file__, name, share, "--alone"],
            capture_output=True,
            text=True,
            errors="replace",
            check=False,
        )
        executed = [
            line.split()[-1] for line in done.stderr.splitlines() if "number_of_executed_units" in line
        ]
        print(f"{name}: {executed[0] if executed else '?'} inputs, exit status {done.returncode}", flush=True)
        if done.returncode:
            failed.append(name)
            print(done.stdout[-3000:], flush=True)
            print(*(line[:300] for line in done.stderr.splitlines()[-12:]), sep="\n", flush=True)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
