"""The `archive` command: find, reduce, write the table of sessions, tell what became of it."""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tieline.archive.dataset import kept_parts, left_over_parts, write_sessions
from tieline.archive.find import find_units
from tieline.archive.unit import CURRENT, FAILED, REDUCED, Outcome
from tieline.archive.workers import reduce_all
from tieline.errors import InputError, Problem

DATASET = "archive"


@dataclass(frozen=True)
class Summary:
    """What became of an archive: the outcome of every session, and parts of the dataset that none of them made now.

    kept: earlier results of sessions that failed; left_over: parts that belong to no session found.
    """

    dataset: Path
    sessions: Path
    outcomes: tuple[Outcome, ...]
    kept: tuple[str, ...]
    left_over: tuple[str, ...]

    def count(self, state: str) -> int:
        return Counter(outcome.state for outcome in self.outcomes)[state]

    @property
    def failures(self) -> list[Outcome]:
        return [outcome for outcome in self.outcomes if outcome.state == FAILED]

    def as_json(self) -> dict[str, Any]:
        return {
            "dataset": str(self.dataset),
            "sessions_table": str(self.sessions),
            "counts": {state: self.count(state) for state in (REDUCED, CURRENT, FAILED)},
            "sessions": [{"state": outcome.state, **outcome.row} for outcome in self.outcomes],
            "kept": list(self.kept),
            "left_over": list(self.left_over),
        }


def reduce_archive(
    root: Path,
    *,
    out: Path | None = None,
    scheduler: str | None = None,
    workers: int | None = None,
    started: Callable[[int], None] = lambda count: None,
    finished: Callable[[Outcome], None] = lambda outcome: None,
) -> Summary:
    """Reduces every session below a folder that is not current, each on its own.

    out: the dataset, `archive` below the root where not given. workers: processes on this machine, one per
    processor where not given. `started` is told the number of sessions, `finished` every outcome as it comes.
    Raises InputError where there is no such folder or no session below it, or no worker to be had.
    """
    if not root.is_dir():
        message = "is a file, not a folder." if root.exists() else "no such folder."
        raise InputError(Problem(message, str(root), remedy="Name the folder above the sessions."))
    given = str(root)
    # Workers may run in another folder.
    root, dataset = root.resolve(), (root / DATASET if out is None else out).resolve()
    units = find_units(root, dataset)
    if not units:
        raise InputError(
            Problem(
                "there is no session configuration below this folder.",
                given,
                remedy="A configuration is a TOML file with `session` and [[ingest.tables]].",
            )
        )
    started(len(units))
    workers = min(workers or os.cpu_count() or 1, len(units))
    outcomes = reduce_all(units, dataset, scheduler=scheduler, workers=workers, finished=finished)
    sessions = write_sessions(dataset, outcomes)
    kept, left_over = kept_parts(dataset, outcomes), left_over_parts(dataset, outcomes)
    return Summary(dataset, sessions, tuple(outcomes), tuple(kept), tuple(left_over))
