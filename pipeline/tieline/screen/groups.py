"""What a test says of a whole group (one phase of one experiment by one technique), and the table of it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import pyarrow as pa

from tieline.columns import SCREEN_GROUPS
from tieline.results import Remark
from tieline.screen.findings import Findings
from tieline.screen.session import Spots
from tieline.tables import build

FOUND, NOT_FOUND, CANNOT_TELL = "found", "not found", "cannot tell"

# A remark names this many groups and counts the others.
NAMED_GROUPS = 6


@dataclass(frozen=True)
class Verdict:
    """One test's word on one group; `group` is its number in `Spots.groups`."""

    group: int
    test: str
    n_spots: int
    verdict: str
    detail: str
    statistic: float | None = None
    threshold: float | None = None
    p_value: float | None = None


@dataclass(frozen=True)
class TestResult:
    """What one test hands back."""

    __test__ = False  # not a pytest class

    findings: tuple[Findings, ...] = ()
    verdicts: tuple[Verdict, ...] = ()
    remarks: tuple[Remark, ...] = ()


def groups_table(verdicts: Iterable[Verdict], spots: Spots) -> pa.Table:
    """The table of verdicts, sorted by group and test."""
    ordered = sorted(verdicts, key=lambda verdict: (verdict.group, verdict.test, verdict.detail))
    keys = [spots.group_key(verdict.group) for verdict in ordered]
    columns: dict[str, Sequence[object]] = {
        name: [key[position] for key in keys]
        for position, name in enumerate(("experiment", "phase", "technique"))
    }
    names = ("test", "n_spots", "statistic", "threshold", "p_value", "verdict", "detail")
    columns |= {name: [getattr(verdict, name) for verdict in ordered] for name in names}
    return build(SCREEN_GROUPS, columns)


def remarks_by_phase(message: str, groups: Iterable[int], spots: Spots) -> list[Remark]:
    """One remark per phase and technique, naming the experiments it holds for."""
    experiments: dict[tuple[str, str], list[str]] = {}
    for group in sorted(set(groups)):
        experiment, phase, technique = spots.group_key(group)
        experiments.setdefault((phase, technique), []).append(experiment)
    return [
        Remark(f"{message} ({_named(names)})", f"{phase} by {technique}")
        for (phase, technique), names in sorted(experiments.items())
    ]


def _named(names: Sequence[str]) -> str:
    more = f" and {len(names) - NAMED_GROUPS} more" if len(names) > NAMED_GROUPS else ""
    return ", ".join(names[:NAMED_GROUPS]) + more
