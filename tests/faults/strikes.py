"""Kills a run, or fails one of its file operations, at point after point, and checks what lies there afterwards.

    python tests/faults/strikes.py kill --points 16      SIGKILL at operations spread over the run
    python tests/faults/strikes.py timed --points 16     SIGKILL from outside at moments spread over the run
    python tests/faults/strikes.py fail --points 16      one operation fails: disk full, no permission
    python tests/faults/strikes.py full --points 16      from one operation on, all fail: the disk stays full

Several kinds may be named. `--points 0` strikes at every operation, but only at every eighth of the many writes.
Every run is a forked child of this process, which has imported everything but started no thread. After each strike:
every file that readers see is the old or the new one, whole; what `status` calls current is of one run only; the next
run succeeds, gives the bytes of a run never struck, and leaves nothing else.
"""

from __future__ import annotations

import argparse
import errno
import itertools
import json
import os
import shutil
import signal
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "pipeline"))

from faults.operations import Striking
from faults.small import change_settings, write_session
from tieline import cli, runner
from tieline.configuration import load
from tieline.report.currency import FILES, report_verdict
from tieline.stages import NAMES, STAGES

ERRORS = (errno.ENOSPC, errno.EACCES, errno.EIO)
MODULES = [stage.function for stage in STAGES]


def in_child(work: Callable[[], Any]) -> tuple[int, Any]:
    """Runs a function in a forked child: its exit status (negative: the signal) and what it returned."""
    read, write = os.pipe()
    sys.stdout.flush()
    pid = os.fork()
    if pid == 0:
        status = 99
        try:
            os.close(read)
            result = json.dumps(work()).encode()
            with os.fdopen(write, "wb") as stream:
                stream.write(result)
            status = 0
        except SystemExit as stop:
            status = int(stop.code or 0)
        except BaseException:
            import traceback

            traceback.print_exc()
        finally:
            os._exit(status)
    os.close(write)
    with os.fdopen(read, "rb") as stream:
        data = stream.read()
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]), json.loads(data) if data else None


def run_command(config: Path, striking: Striking | None, log: Path) -> Any:
    """`tieline run` with all output in a log; ends the process with its exit status."""
    sink = os.open(log, os.O_WRONLY | os.O_CREAT | os.O_TRUNC)
    os.dup2(sink, 1)
    os.dup2(sink, 2)
    sys.argv = ["tieline", "run", str(config), "--quiet", "--report"]
    if striking is not None:
        striking.install()
    cli.main()


def files_of(folder: Path) -> dict[str, bytes]:
    """What readers see: all but hidden files."""
    return {path.name: path.read_bytes() for path in folder.iterdir() if not path.name.startswith(".")}


def judged(config: Path) -> dict[str, str]:
    session = load(config)
    states = {verdict.stage: verdict.state for verdict in runner.status(session)}
    return {**states, "report": report_verdict(session).state}


class Case:
    """A session reduced once with old settings, in a folder that can be put back, and what new settings give."""

    def __init__(self, folder: Path) -> None:
        self.root = folder / "session"
        session = write_session(self.root)
        self.config, self.runs = session.path, session.run_folder
        self.log = folder / "log"
        self.old_config = self.config.with_name("old.toml")
        shutil.copyfile(self.config, self.old_config)
        self.must_run()
        # Results name their configuration: the old ones are asked for under the same name.
        change_settings(session)
        self.old = files_of(self.runs)
        self.kept = folder / "kept"
        shutil.copytree(self.runs, self.kept)
        self.must_run()
        self.new = files_of(self.runs)

    def must_run(self) -> None:
        status, _ = in_child(lambda: run_command(self.config, None, self.log))
        if status != 0:
            raise SystemExit(f"a run failed without any strike: {self.log.read_text()}")

    def put_back(self) -> None:
        shutil.rmtree(self.runs, ignore_errors=True)
        shutil.copytree(self.kept, self.runs)

    def operations(self) -> list[str]:
        """The operations of one undisturbed run."""

        def counted() -> Any:
            striking = Striking(self.root)
            try:
                run_command(self.config, striking, self.log)
            except SystemExit:
                return striking.seen

        self.put_back()
        return list(in_child(counted)[1])

    def struck(self, striking: Striking) -> int:
        self.put_back()
        return in_child(lambda: run_command(self.config, striking, self.log))[0]

    def struck_after(self, seconds: float) -> int:
        """A run that is killed from outside after some time."""
        self.put_back()
        pid = os.fork()
        if pid == 0:
            try:
                run_command(self.config, None, self.log)
            except SystemExit as stop:
                os._exit(int(stop.code or 0))
            os._exit(99)
        time.sleep(seconds)
        os.kill(pid, signal.SIGKILL)
        return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])

    def complaints(self, status: int) -> list[str]:
        """What is wrong after a strike; empty if nothing is."""
        wrong = []
        if "Traceback" in self.log.read_text(errors="replace"):
            wrong.append(f"a traceback, exit status {status}: {self.log.read_text()[-600:]}")
        if status not in (-signal.SIGKILL, 0, cli.MACHINE, cli.WRONG_INPUT):
            wrong.append(f"exit status {status}")
        now = files_of(self.runs) if self.runs.exists() else {}
        wrong += [
            f"{name} is neither the old nor the new one"
            for name, data in now.items()
            if data not in (self.old.get(name), self.new.get(name))
        ]
        if status == 0 and now != self.new:
            wrong.append("done, but not all results are new")
        for config, expected in ((self.config, self.new), (self.old_config, self.old)):
            states = in_child(lambda config=config: judged(config))[1]
            for name in NAMES:
                own = {f"{table}.parquet" for table in STAGES[NAMES.index(name)].outputs}
                if states[name] == "current" and any(now.get(file) != expected[file] for file in own):
                    wrong.append(f"{name} looks current under {config.name} and is not")
            all_current = all(states[name] == "current" for name in NAMES)
            if all_current and states["report"] == "current" and any(now[f] != expected[f] for f in FILES):
                wrong.append(f"the report looks current under {config.name} and is not")
        wrong += self._next_run()
        return wrong

    def _next_run(self) -> list[str]:
        again, _ = in_child(lambda: run_command(self.config, None, self.log))
        if again != 0:
            return [f"the next run gave {again}: {self.log.read_text()[-600:]}"]
        wrong = [] if files_of(self.runs) == self.new else ["the next run gave other bytes"]
        hidden = [path.name for path in self.runs.iterdir() if path.name.startswith(".")]
        return wrong + [f"left over: {name}" for name in hidden]


def spread(seen: list[str], points: int) -> list[int]:
    """Positions of `points` operations evenly spread; all but the writes, and every eighth write, for 0."""
    if not points:
        writes = (place for place, name in enumerate(seen) if name == "write")
        others = (place for place, name in enumerate(seen) if name != "write")
        return sorted({*others, *itertools.islice(writes, 0, None, 8)})
    return sorted({round(i * (len(seen) - 1) / (points - 1)) for i in range(points)})


def strikes(case: Case, kind: str, points: int) -> list[tuple[str, Callable[[], int]]]:
    """Name and action of every strike."""
    if kind == "timed":
        lasted = []
        for _ in range(3):
            case.put_back()
            start = time.monotonic()
            case.must_run()
            lasted.append(time.monotonic() - start)
        moments = [min(lasted) * (i + 0.5) / points for i in range(points)]
        return [
            (f"after {moment:.3f} s", lambda moment=moment: case.struck_after(moment)) for moment in moments
        ]
    seen = case.operations()
    found = []
    for i, at in enumerate(spread(seen, points)):
        error = None if kind == "kill" else ERRORS[i % len(ERRORS)] if kind == "fail" else errno.ENOSPC
        striking = Striking(case.root, at, error, lasting=kind == "full")
        name = f"{at} of {len(seen)}, {seen[at]}{'' if error is None else ', ' + errno.errorcode[error]}"
        found.append((name, lambda striking=striking: case.struck(striking)))
    return found


def main() -> int:
    parser = argparse.ArgumentParser()
    parser.add_argument("kinds", nargs="+", choices=("kill", "timed", "fail", "full"))
    parser.add_argument("--points", type=int, default=0)
    wanted = parser.parse_args()
    for module in MODULES:
        module()  # imported now, not in every child
    failed = 0
    with tempfile.TemporaryDirectory() as folder:
        case = Case(Path(folder).resolve())
        for kind in wanted.kinds:
            account = all_strikes(case, kind, wanted.points)
            failed += account["failed"]
            print(json.dumps(account), flush=True)
    return 1 if failed else 0


def all_strikes(case: Case, kind: str, points: int) -> dict[str, Any]:
    """Strikes, and prints every complaint; how many strikes there were, how many failed, how the runs ended."""
    planned = strikes(case, kind, points)
    failed, ends = 0, Counter[int]()
    for name, strike in planned:
        status = strike()
        ends[status] += 1
        wrong = case.complaints(status)
        failed += bool(wrong)
        for text in wrong:
            print(f"{kind} {name}: {text}", flush=True)
    return {"kind": kind, "strikes": len(planned), "failed": failed, "ends": dict(ends)}


if __name__ == "__main__":
    sys.exit(main())
