"""Stage `partition`: D with standard uncertainty, interval and budget.

Means become D here and nowhere else. The propagation stands in `tieline.propagation`, the intervals in
`tieline.statistics.ratios`, and what limits allow to say in `tieline.limits`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import BoolArray, FloatArray, IntArray, Labels, TextArray, labels, numbers
from tieline.candidates import RULE, Candidates, candidates
from tieline.columns import PARTITION, PARTITION_ALTERNATIVES
from tieline.covariances import covariance_table
from tieline.limits import lowest_limits, resolve_limits
from tieline.mean_sources import MeanSources
from tieline.overlap_allowance import overlap_allowance
from tieline.propagation import Budget, Side, propagate, unshared
from tieline.results import Ledger, Remark, StageResult
from tieline.settings.results import PartitionSettings
from tieline.statistics.ratios import ratio_interval
from tieline.tables import build

UNKNOWN_CALIBRATION = (
    "the phases, or their internal standards, are from different batches and no calibration uncertainty is known: "
    "the interval does not cover it"
)
UNKNOWN_STANDARD = "the uncertainty of an internal standard is unknown: the interval does not cover it"
DRIFT = "the batch drifts with the run order, and the drift stays in the values: it is part of the interval"


def partition(
    pair: pa.Table,
    pair_pairs: pa.Table,
    pair_limits: pa.Table,
    calibrate: pa.Table,
    *,
    settings: PartitionSettings,
) -> StageResult:
    """D of every element of every pair that was formed, the possible D's not chosen, and the covariances."""
    sources = MeanSources(pair, calibrate)
    found = candidates(pair_pairs, pair, sources, lowest_limits(pair, pair_limits), settings.prefer)
    alpha, beta = sources.with_drift(
        (sources.side(found.alpha), sources.side(found.beta)), found.alpha, found.beta
    )
    budget = propagate(alpha, beta)
    rows = np.flatnonzero(found.chosen)
    table = _partition_table(
        pair, pair_pairs, pair_limits, found, rows, (alpha, beta), budget, sources, settings
    )
    tables = {
        "partition": table,
        "partition.alternatives": _alternatives(pair, pair_pairs, found, budget),
        "partition.covariance": covariance_table(table, (alpha, beta), found, sources),
    }
    return StageResult(tables, _ledger(pair, found), _remarks(table))


def _partition_table(
    pair: pa.Table,
    pairs: pa.Table,
    limits: pa.Table,
    found: Candidates,
    rows: IntArray,
    sides: tuple[Side, Side],
    budget: Budget,
    sources: MeanSources,
    settings: PartitionSettings,
) -> pa.Table:
    alpha, beta = found.alpha[rows], found.beta[rows]
    wide = (
        sources.widened(side, own, settings.confidence)
        for side, own in zip(sides, (found.alpha, found.beta), strict=True)
    )
    u_alpha, u_beta = (u[rows] for u in unshared(*wide))
    interval = ratio_interval(
        sources.estimate(alpha),
        sources.estimate(beta),
        u_alpha=u_alpha,
        u_beta=u_beta,
        confidence=settings.confidence,
        method=settings.interval,
    )
    interval, how = resolve_limits(pair, limits, (alpha, beta), (u_alpha, u_beta), interval, settings)
    is_value = (interval.kind == "value") | (np.isfinite(interval.value) & (interval.kind == "undetermined"))
    D = np.where(is_value, interval.value, np.nan)
    from_means = is_value & np.isfinite(budget.D[rows])
    own_sd = np.where(is_value, interval.sd, np.nan)
    names = {name: labels(pairs, name).take(found.pair[rows]) for name in ("experiment", "alpha", "beta")}
    no_calibration, no_standard = sources.unknown(alpha, beta)
    reason = _with_remarks(
        interval.reason,
        (
            (no_calibration, UNKNOWN_CALIBRATION),
            (no_standard, UNKNOWN_STANDARD),
            (sources.drift[alpha] != sources.drift[beta], DRIFT),
        ),
    )
    D_overlap_lo, bound = overlap_allowance(found.pair[rows], D, interval, settings.confidence)

    def share(part: FloatArray) -> FloatArray:
        return np.where(from_means, part[rows], np.nan)

    def of(column: str, side: IntArray) -> Labels:
        return sources.labels[column].take(side)

    return build(
        PARTITION,
        {
            **names,
            "element": of("element", alpha),
            "D": D,
            # The interval's own sd counts factors from few measurements by Student's quantile; D_sd does not.
            "D_sd": np.where(from_means & np.isfinite(interval.sd), budget.D_sd[rows], own_sd),
            "D_lo": interval.low,
            "D_hi": np.where(np.isfinite(interval.high), interval.high, np.nan),
            "confidence": np.full(len(rows), settings.confidence),
            "kind": interval.kind,
            "reason": reason,
            "complete": ~(no_calibration | no_standard),
            "n_alpha": sources.n[alpha],
            "n_beta": sources.n[beta],
            "n_independent_alpha": sources.n_independent[alpha],
            "n_independent_beta": sources.n_independent[beta],
            **{
                f"{column}_{side}": of(column, side_rows)
                for column in ("batch", "technique", "analyte")
                for side, side_rows in (("alpha", alpha), ("beta", beta))
            },
            "mean_alpha_ppm": sources.mean[alpha],
            "mean_beta_ppm": sources.mean[beta],
            "se_alpha_ppm": sources.se[alpha],
            "se_beta_ppm": sources.se[beta],
            "counting_se_alpha_ppm": sources.counting_se[alpha],
            "counting_se_beta_ppm": sources.counting_se[beta],
            "dof_alpha": sources.dof[alpha],
            "dof_beta": sources.dof[beta],
            "shared_sd_alpha": u_alpha,
            "shared_sd_beta": u_beta,
            "dof": np.where(interval.dof > 0, interval.dof, np.nan),
            "interval": how,
            "share_counting": share(budget.counting),
            "share_spread": share(budget.spread),
            "share_calibration": np.where(no_calibration, np.nan, share(budget.calibration)),
            "share_internal_standard": np.where(no_standard, np.nan, share(budget.internal_standard)),
            "D_overlap_lo": D_overlap_lo,
            "overlap_bound": bound,
        },
    )


def _with_remarks(reason: TextArray, remarks: Sequence[tuple[BoolArray, str]]) -> TextArray:
    """The reasons with further texts behind them, where these apply."""
    reason = reason.copy()
    for applies, text in remarks:
        reason[applies] = [f"{own}; {text}" if own else text for own in reason[applies]]
    return reason


def _alternatives(pair: pa.Table, pairs: pa.Table, found: Candidates, budget: Budget) -> pa.Table:
    rows = np.flatnonzero(~found.chosen)

    def of(column: str, side: IntArray) -> Labels:
        return labels(pair, column).take(side[rows])

    return build(
        PARTITION_ALTERNATIVES,
        {
            **{name: labels(pairs, name).take(found.pair[rows]) for name in ("experiment", "alpha", "beta")},
            "element": of("element", found.alpha),
            "D": budget.D[rows],
            "D_sd": budget.D_sd[rows],
            "batch_alpha": of("batch", found.alpha),
            "batch_beta": of("batch", found.beta),
            "analyte_alpha": of("analyte", found.alpha),
            "analyte_beta": of("analyte", found.beta),
            "reason": [f"the other was preferred: {RULE}"] * len(rows),
        },
    )


def _ledger(pair: pa.Table, found: Candidates) -> Ledger:
    used = np.zeros(pair.num_rows, dtype=np.bool_)
    used[found.alpha[found.chosen]] = True
    used[found.beta[found.chosen]] = True
    possible = np.zeros(pair.num_rows, dtype=np.bool_)
    possible[found.alpha] = True
    possible[found.beta] = True
    without = numbers(pair, "n_used") == 0
    outcomes = {
        "in a D": int(used.sum()),
        "only in a D that was not chosen": int((possible & ~used).sum()),
        "no used value": int((~possible & without).sum()),
        "no partner for this element": int((~possible & ~without).sum()),
    }
    return Ledger("phase means", pair.num_rows, outcomes)


def _remarks(table: pa.Table) -> tuple[Remark, ...]:
    unknown = pc.sum(pc.match_substring(table.column("reason"), UNKNOWN_CALIBRATION)).as_py()
    if not unknown:
        return ()
    text = f"{unknown} D across batches have no calibration uncertainty; set calibrate.relative_sd or measure a reference"
    return (Remark(text),)
