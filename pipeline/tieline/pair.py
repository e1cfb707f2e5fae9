"""Stage `pair`: the mean of every phase, element and batch of every experiment, and the pairs of phases.

The statistics of the means stand in `tieline.statistics.means` and, where values are known only as limits,
`tieline.statistics.censored`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    Groups,
    IntArray,
    flags,
    group_rows,
    labels,
    numbers,
    spot_codes,
)
from tieline.columns import PAIR, PAIR_LIMITS
from tieline.correction import Concentrations, calibrated
from tieline.pairing import phase_pairs, technique_differences, with_parts
from tieline.results import Ledger, StageResult
from tieline.settings.results import PairSettings
from tieline.statistics.means import PhaseMeans, phase_means, pooled_sigmas
from tieline.statistics.mswd import mswd_interval
from tieline.tables import build

GROUP_COLUMNS = ("experiment", "phase", "element", "technique", "batch", "analyte")


@dataclass(frozen=True)
class Used:
    """Which rows of `convert` enter the means: measured values, and values known only as a limit."""

    measured: BoolArray
    limit_only: BoolArray


def pair(
    convert: pa.Table,
    calibrate: pa.Table,
    screen: pa.Table,
    ingest_spots: pa.Table,
    *,
    settings: PairSettings,
) -> StageResult:
    """Phase means with their variance and its parts, and the alpha/beta pairs that can be formed."""
    convert = with_parts(convert, settings)
    concentrations, shared = _unmixed(calibrated(convert, calibrate, ingest_spots), screen)
    use = flags(screen, "use")
    unknown = labels(convert, "experiment").codes >= 0
    groups = group_rows([labels(convert, name) for name in GROUP_COLUMNS], unknown)
    measured = use & unknown & np.isfinite(concentrations.value)
    limit_only = use & unknown & ~measured & np.isfinite(concentrations.limit)
    used = Used(measured, limit_only)
    means = _with_shared_error(
        _means(convert, concentrations, groups, used, settings), shared, groups, measured
    )
    table = _pair_table(convert, concentrations, groups, used, means)
    pairs, remarks = phase_pairs(convert, measured | limit_only, settings)
    differences, difference_remarks = technique_differences(table, calibrate, settings)
    outcomes = {
        "in a phase mean": int(measured.sum()),
        "in a phase mean as a limit": int(limit_only.sum()),
        "left out or not measured": int((unknown & ~measured & ~limit_only).sum()),
        "reference materials": int((~unknown).sum()),
    }
    tables = {
        "pair": table,
        "pair.pairs": pairs,
        "pair.limits": _limit_rows(convert, concentrations, groups, used),
        "pair.techniques": differences,
    }
    return StageResult(tables, Ledger("values", convert.num_rows, outcomes), (*remarks, *difference_remarks))


def _means(
    convert: pa.Table, values: Concentrations, groups: Groups, used: Used, settings: PairSettings
) -> PhaseMeans:
    """Means of the measured values; groups that also hold limits get theirs from the likelihood afterwards."""
    rows = used.measured
    code = groups.code[rows]
    sigma = pooled_sigmas(values.value[rows], values.sigma[rows], code, groups.count)
    grains = _grains(convert)[rows] if settings.average == "grains" else None
    return phase_means(
        values.value[rows], sigma, code, groups.count, estimator=settings.mean, subgroup=grains
    )


def _unmixed(values: Concentrations, screen: pa.Table) -> tuple[Concentrations, FloatArray | None]:
    """Values freed of overlap where `screen` was asked to unmix, and the error that these share, per row."""
    if screen.column("unmixed_ppm").null_count == screen.num_rows:
        return values, None
    unmixed = numbers(screen, "unmixed_ppm")
    taken = np.isfinite(unmixed)
    value = np.where(taken, unmixed, values.value)
    sigma = np.where(taken, numbers(screen, "unmixed_sigma_ppm"), values.sigma)
    return Concentrations(value, sigma, values.limit), np.nan_to_num(numbers(screen, "unmixed_shared_ppm"))


def _with_shared_error(
    means: PhaseMeans, shared: FloatArray | None, groups: Groups, measured: BoolArray
) -> PhaseMeans:
    """Adds to every variance what the unmixed values of a group have in common, which averaging does not reduce."""
    if shared is None:
        return means
    total = np.bincount(groups.code[measured], weights=shared[measured], minlength=groups.count)
    common = (total / np.maximum(means.n_values, 1)) ** 2
    return replace(
        means, variance=means.variance + common, counting_variance=means.counting_variance + common
    )


def _grains(convert: pa.Table) -> IntArray:
    """Grain of every row; a spot without a grain label counts as a grain of its own."""
    grain = labels(convert, "grain")
    spot, _ = spot_codes(convert)
    return np.where(grain.codes >= 0, grain.codes, len(grain.texts) + spot)


def _pair_table(
    convert: pa.Table, values: Concentrations, groups: Groups, used: Used, means: PhaseMeans
) -> pa.Table:
    def count(rows: BoolArray) -> IntArray:
        return np.bincount(groups.code[rows], minlength=groups.count)

    taken = used.measured | used.limit_only
    n_limit_only = count(used.limit_only)
    below = flags(convert, "below_limit") & taken
    censored = n_limit_only > 0
    mswd_lo, mswd_hi = mswd_interval(np.maximum(means.n - 1, 0))
    counting_sd = _root_mean_square(values.sigma, used.measured, groups)

    def unless_censored(array: FloatArray) -> FloatArray:
        # With limits among the values these quantities have no plain meaning; the likelihood replaces them.
        return np.where(censored, np.nan, array)

    return build(
        PAIR,
        {
            **dict(zip(GROUP_COLUMNS, groups.labels, strict=True)),
            "n_used": count(taken),
            "n_left_out": count(groups.code >= 0) - count(taken),
            "n_below_limit": count(below),
            "n_limit_only": n_limit_only,
            "mean_ppm": unless_censored(means.mean),
            "se_ppm": unless_censored(np.sqrt(means.variance)),
            "counting_se_ppm": unless_censored(np.sqrt(means.counting_variance)),
            "dof": unless_censored(np.where(means.n > 0, means.dof, np.nan)),
            "counting_sd_ppm": counting_sd,
            "spread_sd_ppm": unless_censored(means.spread_sd),
            "mswd": unless_censored(np.where(means.n > 1, means.mswd, np.nan)),
            "mswd_lo": np.where(means.n > 1, mswd_lo, np.nan),
            "mswd_hi": np.where(means.n > 1, mswd_hi, np.nan),
            "internal_standard_sd": numbers(convert, "internal_standard_sd")[groups.first],
        },
    )


def _root_mean_square(sigma: FloatArray, rows: BoolArray, groups: Groups) -> FloatArray:
    known = rows & np.isfinite(sigma)
    squares = np.bincount(groups.code[known], weights=sigma[known] ** 2, minlength=groups.count)
    n = np.bincount(groups.code[known], minlength=groups.count)
    return np.sqrt(squares / np.where(n > 0, n, np.nan))


def _limit_rows(convert: pa.Table, values: Concentrations, groups: Groups, used: Used) -> pa.Table:
    """Every used value of the groups that hold limits, so that `partition` can form their likelihood."""
    has_limits = np.bincount(groups.code[used.limit_only], minlength=groups.count) > 0
    chosen = (used.measured | used.limit_only) & np.append(has_limits, False)[groups.code]
    rows = np.flatnonzero(chosen)
    # One order whatever the order of the source rows.
    rows = rows[np.lexsort((values.limit[rows], values.value[rows], groups.code[rows]))]
    names = ("experiment", "phase", "element", "batch", "analyte")
    return build(
        PAIR_LIMITS,
        {
            **{name: convert.column(name).take(pa.array(rows)) for name in names},
            "value_ppm": values.value[rows],
            "sigma_ppm": values.sigma[rows],
            "limit_ppm": values.limit[rows],
        },
    )
