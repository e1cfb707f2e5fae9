"""Test `imprecise`: values too imprecise to matter, limits above the melt's value, failed reference materials."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray
from tieline.results import Remark
from tieline.screen.composition import SIGMAS_PER_LIMIT, group_medians, values_for_tests
from tieline.screen.findings import Findings, joined
from tieline.screen.groups import CANNOT_TELL, TestResult, Verdict
from tieline.screen.padding import few_rows
from tieline.screen.session import Measured, Session
from tieline.settings.screen import ImpreciseSettings
from tieline.statistics.threads import side_by_side

# A detail names this many analytes and counts the others.
NAMED_ANALYTES = 10


def imprecision_result(
    session: Session, measured: Measured, melt_phase: str, settings: ImpreciseSettings
) -> TestResult:
    """Values above their limit with a large relative sigma, and analytes whose limits hide even the melt's
    value.

    A value below its limit (where none is stated, below three of its sigmas) is imprecise by nature and is
    treated as such later; it is not remarked here. Dropping imprecise values prefers high ones and biases
    the mean, which is why the default only marks.
    """
    parts = [measured.part(rows) for rows in few_rows(*measured.value.shape)]
    findings = joined("imprecise", side_by_side(lambda part: _imprecise_values(part, settings), parts))
    verdicts = tuple(_hidden_by_limits(session, measured, melt_phase))
    return TestResult((findings,), verdicts)


def _imprecise_values(measured: Measured, settings: ImpreciseSettings) -> Findings:
    positive = measured.value > 0
    relative = measured.sigma / np.where(positive, measured.value, np.nan)
    limit = np.where(np.isfinite(measured.limit), measured.limit, SIGMAS_PER_LIMIT * measured.sigma)
    detected = positive & ~measured.below_limit & (measured.value >= limit)
    rows, columns = np.nonzero(detected & (relative > settings.relative_sigma))
    statistic = relative[rows, columns]
    return Findings(
        "imprecise",
        measured.spots[rows],
        measured.analyte_codes[columns],
        statistic,
        np.full(len(rows), settings.relative_sigma),
        np.full(len(rows), np.nan),
        [settings.action] * len(rows),
        [
            f"{measured.analytes[column]}: sigma is {100 * share:.0f} % of the value"
            for column, share in zip(columns, statistic, strict=True)
        ],
    )


def _hidden_by_limits(session: Session, measured: Measured, melt_phase: str) -> Iterable[Verdict]:
    """Groups with analytes whose typical limit is above the melt's own value: no D below one can be seen."""
    groups = np.unique(measured.group)
    keys = [session.spots.group_key(int(group)) for group in groups]
    melt_of = {key[0]: position for position, key in enumerate(keys) if key[1] == melt_phase}
    hosts = np.array(
        [at for at, key in enumerate(keys) if key[1] != melt_phase and key[0] in melt_of], dtype=np.int64
    )
    if not len(hosts) or not np.isfinite(measured.limit).any():
        return
    melts = np.array([melt_of[keys[at][0]] for at in hosts], dtype=np.int64)
    limit = group_medians(measured, groups[hosts], lambda block: block.of(measured.limit))
    melt_groups, melt = np.unique(groups[melts], return_inverse=True)
    values = values_for_tests(measured).value
    value = group_medians(measured, melt_groups, lambda block: block.of(values))
    hidden: BoolArray = limit > value[melt]
    for position in np.flatnonzero(hidden.any(axis=1)):
        at = int(hosts[position])
        rows = measured.of_group(int(groups[at]))
        names = [measured.analytes[column] for column in np.flatnonzero(hidden[position])]
        detail = f"detection limit above the value of the {melt_phase}: {_named(names)}"
        yield Verdict(
            int(groups[at]), "imprecise", rows.stop - rows.start, CANNOT_TELL, detail, float(len(names))
        )


def _named(names: list[str]) -> str:
    more = f" and {len(names) - NAMED_ANALYTES} more" if len(names) > NAMED_ANALYTES else ""
    return ", ".join(names[:NAMED_ANALYTES]) + more


def reference_remarks(calibrate: pa.Table) -> list[Remark]:
    """One remark per batch on elements whose reference materials are off by more than the laboratory's own limit."""
    failed: dict[tuple[str, str], list[str]] = {}
    columns = ("technique", "batch", "element", "passed")
    for technique, batch, element, passed in zip(
        *(calibrate.column(name).to_pylist() for name in columns), strict=True
    ):
        if passed is False:
            failed.setdefault((technique, batch), []).append(element)
    return [
        Remark(
            f"reference materials are out of tolerance for {_named(sorted(elements))}",
            f"{batch} by {technique}",
        )
        for (technique, batch), elements in sorted(failed.items())
    ]
