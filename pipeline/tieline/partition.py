"""Stage `partition`: D with standard uncertainty, interval and budget.

Means become D here and nowhere else. The propagation stands in `tieline.propagation`, the intervals in
`tieline.statistics.ratios`, and what limits allow to say in `tieline.limits`.
"""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from tieline.arrays import BoolArray, FloatArray, IntArray, Labels, TextArray, labels, numbers
from tieline.candidates import RULE, Candidates, candidates
from tieline.columns import PARTITION, PARTITION_ALTERNATIVES, PARTITION_COVARIANCE
from tieline.correction import calibrate_row
from tieline.limits import resolve_limits
from tieline.overlap_allowance import overlap_allowance
from tieline.propagation import Budget, Side, propagate, unshared
from tieline.results import Ledger, Remark, StageResult
from tieline.settings.results import PartitionSettings
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import ratio_interval
from tieline.tables import build

UNKNOWN_CALIBRATION = (
    "the phases are from different batches and no calibration uncertainty is known: "
    "the interval covers counting and spread only"
)


def partition(
    pair: pa.Table,
    pair_pairs: pa.Table,
    pair_limits: pa.Table,
    calibrate: pa.Table,
    *,
    settings: PartitionSettings,
) -> StageResult:
    """D of every element of every pair that was formed, the possible D's not chosen, and the covariances."""
    sources = _Sources(pair, calibrate)
    found = candidates(pair_pairs, pair, sources.relative_sd(), settings.prefer)
    alpha, beta = sources.side(found.alpha), sources.side(found.beta)
    budget = propagate(alpha, beta)
    rows = np.flatnonzero(found.chosen)
    table = _partition_table(
        pair, pair_pairs, pair_limits, found, rows, (alpha, beta), budget, sources, settings
    )
    tables = {
        "partition": table,
        "partition.alternatives": _alternatives(pair, pair_pairs, found, budget),
        "partition.covariance": _covariance(table, alpha, rows, beta),
    }
    return StageResult(tables, _ledger(pair, found), _remarks(table))


class _Sources:
    """The phase means and everything that makes them uncertain, row by row of `pair`."""

    def __init__(self, pair: pa.Table, calibrate: pa.Table) -> None:
        self.labels = {
            name: labels(pair, name)
            for name in ("experiment", "phase", "element", "technique", "batch", "analyte")
        }
        row = calibrate_row(pair, calibrate)
        shared = np.append(numbers(calibrate, "relative_sd"), np.nan)[row]
        self.mean, self.se, self.counting_se, self.dof = (
            numbers(pair, name) for name in ("mean_ppm", "se_ppm", "counting_se_ppm", "dof")
        )
        self.n = np.asarray(numbers(pair, "n_used"), dtype=np.int64)
        self.calibration_known: BoolArray = np.isfinite(shared)
        self.calibration = np.nan_to_num(shared)
        batch, element = self.labels["batch"], self.labels["element"]
        self.calibration_key = batch.codes * (len(element.texts) + 1) + element.codes
        self.matrix = np.append(numbers(calibrate, "matrix_sd"), 0.0)[row]
        standard = numbers(pair, "internal_standard_sd")
        self.internal_standard = np.nan_to_num(standard)
        experiment, phase, technique = (self.labels[name] for name in ("experiment", "phase", "technique"))
        key = (experiment.codes * (len(phase.texts) + 1) + phase.codes) * (
            len(technique.texts) + 1
        ) + technique.codes
        self.internal_standard_key: IntArray = np.where(np.isfinite(standard), key, -1 - np.arange(len(key)))

    def relative_sd(self) -> FloatArray:
        """Relative standard uncertainty of every mean with all its sources; infinite where there is none."""
        with np.errstate(divide="ignore", invalid="ignore"):
            own = np.where(self.mean > 0, self.se / self.mean, np.inf)
        return np.asarray(np.sqrt(own**2 + self.calibration**2 + self.matrix**2 + self.internal_standard**2))

    def side(self, rows: IntArray) -> Side:
        # A mean's counting part can exceed what its scatter shows; D_sd is that of the scatter, so it is cut there.
        mean = np.where(self.mean[rows] == 0, np.nan, np.abs(self.mean[rows]))
        total = np.nan_to_num(self.se[rows] / mean)
        counting = np.fmin(np.nan_to_num(self.counting_se[rows] / mean), total)
        spread = np.sqrt(np.maximum(total**2 - counting**2, 0.0))
        return Side(
            self.mean[rows],
            counting,
            spread,
            self.calibration[rows],
            self.calibration_key[rows],
            self.matrix[rows],
            self.internal_standard[rows],
            self.internal_standard_key[rows],
        )

    def estimate(self, rows: IntArray) -> MeanEstimate:
        return MeanEstimate(
            self.mean[rows],
            self.se[rows] ** 2,
            self.counting_se[rows] ** 2,
            np.nan_to_num(self.dof[rows]),
            self.n[rows],
        )


def _partition_table(
    pair: pa.Table,
    pairs: pa.Table,
    limits: pa.Table,
    found: Candidates,
    rows: IntArray,
    sides: tuple[Side, Side],
    budget: Budget,
    sources: _Sources,
    settings: PartitionSettings,
) -> pa.Table:
    alpha, beta = found.alpha[rows], found.beta[rows]
    u_alpha, u_beta = (u[rows] for u in unshared(*sides))
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
    names = {name: labels(pairs, name).take(found.pair[rows]) for name in ("experiment", "alpha", "beta")}
    reason = _with_calibration_remark(interval.reason, sources, alpha, beta)
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
            "D_sd": np.where(is_value, interval.sd, np.nan),
            "D_lo": interval.low,
            "D_hi": np.where(np.isfinite(interval.high), interval.high, np.nan),
            "confidence": np.full(len(rows), settings.confidence),
            "kind": interval.kind,
            "reason": reason,
            "n_alpha": sources.n[alpha],
            "n_beta": sources.n[beta],
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
            "share_calibration": share(budget.calibration),
            "share_internal_standard": share(budget.internal_standard),
            "D_overlap_lo": D_overlap_lo,
            "overlap_bound": bound,
        },
    )


def _with_calibration_remark(
    reason: TextArray, sources: _Sources, alpha: IntArray, beta: IntArray
) -> TextArray:
    apart = sources.calibration_key[alpha] != sources.calibration_key[beta]
    unknown = apart & ~(sources.calibration_known[alpha] & sources.calibration_known[beta])
    reason = reason.copy()
    reason[unknown] = [
        f"{own}; {UNKNOWN_CALIBRATION}" if own else UNKNOWN_CALIBRATION for own in reason[unknown]
    ]
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


def _covariance(table: pa.Table, alpha: Side, rows: IntArray, beta: Side) -> pa.Table:
    """Variances, and the covariances that internal standards shared between elements make.

    Two elements of one pair share the internal-standard factor of a phase when both were measured by the same
    rescaled technique: cov(D_i, D_j) = D_i D_j (u_a² + u_b²). Everything else is independent between elements.
    """
    D, sd = numbers(table, "D"), numbers(table, "D_sd")
    usable = np.isfinite(D) & np.isfinite(sd)
    keys = [
        np.where(side.internal_standard[rows] > 0, side.internal_standard_key[rows], -1)
        for side in (alpha, beta)
    ]
    # A standard that both phases share cancels in D.
    keys = [np.where(keys[0] == keys[1], -1, key) for key in keys]
    first, second = _pairs_within(_pair_codes(table), usable, usable & ((keys[0] >= 0) | (keys[1] >= 0)))
    shared = np.zeros(len(first))
    for side, key in zip((alpha, beta), keys, strict=True):
        relative = side.internal_standard[rows]
        same = (key[first] == key[second]) & (key[first] >= 0)
        shared += np.where(same, relative[first] * relative[second], 0.0)
    covariance = np.where(first == second, sd[first] ** 2, D[first] * D[second] * shared)
    kept = (first == second) | (shared != 0)
    if not kept.all():
        first, second, covariance = first[kept], second[kept], covariance[kept]
    element = labels(table, "element")
    return build(
        PARTITION_COVARIANCE,
        {
            **{name: labels(table, name).take(first) for name in ("experiment", "alpha", "beta")},
            "element": element.take(first),
            "other": element.take(second),
            "covariance": covariance,
        },
    )


def _pair_codes(table: pa.Table) -> IntArray:
    """A number per pair in the order of the rows, where the rows of a pair stand together."""
    columns = [labels(table, name).codes for name in ("experiment", "alpha", "beta")]
    new = np.zeros(table.num_rows, dtype=np.int64)
    for codes in columns:
        new[1:] |= codes[1:] != codes[:-1]
    return np.cumsum(new)


def _pairs_within(code: IntArray, usable: BoolArray, sharing: BoolArray) -> tuple[IntArray, IntArray]:
    """Row pairs (i, j), sorted: every usable row with itself, and i < j of all sharing rows with one code.

    Rows of one code stand together; a sharing row is usable.
    """
    alone, among = np.flatnonzero(usable), np.flatnonzero(sharing)
    place = np.cumsum(sharing)[alone]  # of the next sharing row after each
    end = np.searchsorted(code[among], code[alone], side="right")
    size = np.where(sharing[alone], end - place, 0) + 1
    first = np.repeat(np.arange(len(alone)), size)
    offset = np.arange(len(first)) - np.repeat(np.cumsum(size) - size, size)
    second = alone[first]
    later = offset > 0
    second[later] = among[place[first[later]] + offset[later] - 1]
    return alone[first], second


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
