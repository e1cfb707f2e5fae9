"""Stage `pair`: the mean of every phase, element and batch of every experiment, and the pairs of phases.

The statistics of the means stand in `tieline.statistics.means` and, where values are known only as limits,
`tieline.statistics.censored`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    Groups,
    IntArray,
    Labels,
    flags,
    grain_codes,
    group_table,
    is_labelled,
    labels,
    numbers,
)
from tieline.columns import PAIR, PAIR_LIMITS
from tieline.correction import (
    SOURCE_KEYS,
    STANDARD_KEYS,
    Concentrations,
    calibrated,
    sequence_of,
    standard_row,
)
from tieline.pairing import phase_pairs, technique_differences, with_parts
from tieline.results import Ledger, StageResult
from tieline.settings.results import PairSettings
from tieline.spot_correlation import spot_correlations
from tieline.statistics.means import PhaseMeans, phase_means, pooled_sigmas
from tieline.statistics.mswd import mswd_interval
from tieline.statistics.threads import side_by_side
from tieline.tables import build

GROUP_COLUMNS = ("experiment", "phase", "element", "technique", "batch", "analyte")
GROUPS_AT_ONCE = 20_000


@dataclass(frozen=True)
class Used:
    """Which rows of `convert` enter the means: measured values, and values known only as a limit."""

    measured: BoolArray
    limit_only: BoolArray


def pair(
    convert: pa.Table,
    convert_standards: pa.Table,
    calibrate: pa.Table,
    screen: pa.Table,
    ingest_spots: pa.Table,
    *,
    settings: PairSettings,
) -> StageResult:
    """Phase means with their variance and its parts, and the alpha/beta pairs that can be formed."""
    concentrations, shared = _unmixed(calibrated(convert, calibrate, ingest_spots, convert_standards), screen)
    measured_phases = convert
    convert, wholes = with_parts(convert, settings)
    use = flags(screen, "use")
    unknown = is_labelled(convert, "experiment")
    measured = use & unknown & np.isfinite(concentrations.value)
    limit_only = use & unknown & ~measured & np.isfinite(concentrations.limit)
    used = Used(measured, limit_only)
    pairs, remarks = phase_pairs(convert, measured | limit_only, settings, wholes)
    groups = group_table(convert, GROUP_COLUMNS, unknown)
    means = _with_shared_error(
        _means(convert, concentrations, groups, used, settings), shared, groups, measured
    )
    context = {
        "mean_sequence": _mean_sequence(convert, calibrate, ingest_spots, groups, used),
        **_standard_columns(convert_standards, measured_phases, groups.first),
    }
    table = _pair_table(convert, concentrations, groups, used, means, context)
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
        "pair.correlations": spot_correlations(
            convert, concentrations.value, measured, settings.ratios, of_grains=settings.average == "grains"
        ),
        "pair.techniques": differences,
    }
    return StageResult(tables, Ledger("values", convert.num_rows, outcomes), (*remarks, *difference_remarks))


def _means(
    convert: pa.Table, values: Concentrations, groups: Groups, used: Used, settings: PairSettings
) -> PhaseMeans:
    """Means of the measured values; groups that also hold limits get theirs from the likelihood afterwards."""
    rows = np.flatnonzero(used.measured)
    rows = rows[np.argsort(groups.code[rows], kind="stable")]
    code = groups.code[rows]
    grains = grain_codes(convert) if settings.average == "grains" else None

    def of_groups(first: int) -> PhaseMeans:
        count = min(GROUPS_AT_ONCE, groups.count - first)
        own = slice(*np.searchsorted(code, [first, first + count]))
        chosen, group = rows[own], code[own] - first
        value = values.value[chosen]
        sigma = pooled_sigmas(value, values.sigma[chosen], group, count)
        grain = None if grains is None else grains[chosen]
        return phase_means(value, sigma, group, count, estimator=settings.mean, subgroup=grain)

    # Some groups at a time stay in the processor's cache, and all processors can take part.
    parts = side_by_side(of_groups, range(0, max(groups.count, 1), GROUPS_AT_ONCE))
    names = [field.name for field in fields(PhaseMeans)]
    return PhaseMeans(**{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})


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


def _mean_sequence(
    convert: pa.Table, calibrate: pa.Table, spots: pa.Table, groups: Groups, used: Used
) -> FloatArray:
    """Mean place of every group's spots in the run order; NaN where no drift stays in the values."""
    if not np.any(numbers(calibrate, "drift_left")):
        return np.full(groups.count, np.nan)
    rows = np.flatnonzero(used.measured | used.limit_only)
    total = np.bincount(groups.code[rows], weights=sequence_of(convert, spots, rows), minlength=groups.count)
    count = np.bincount(groups.code[rows], minlength=groups.count)
    return total / np.where(count > 0, count, np.nan)


def _standard_columns(standards: pa.Table, convert: pa.Table, first: IntArray) -> dict[str, Any]:
    """What `convert.standards` says of the internal standard of every group; first: a row of each in `convert`."""
    rows = standard_row(convert.select(STANDARD_KEYS).take(pa.array(first)), standards)

    def number(name: str) -> FloatArray:
        values: FloatArray = np.append(numbers(standards, name), np.nan)[rows]
        return values

    def text(name: str) -> Labels:
        known = labels(standards, name)
        return Labels(np.append(known.codes, -1)[rows], known.texts)

    return {
        "internal_standard": rows >= 0,
        "internal_standard_sd": number("relative_sd"),
        "internal_standard_dof": number("dof"),
        **{name: text(name).array() for name in SOURCE_KEYS},
    }


def _pair_table(
    convert: pa.Table,
    values: Concentrations,
    groups: Groups,
    used: Used,
    means: PhaseMeans,
    context: Mapping[str, Any],
) -> pa.Table:
    def count(rows: BoolArray) -> IntArray:
        return np.bincount(groups.code[rows], minlength=groups.count)

    taken = used.measured | used.limit_only
    n_limit_only = count(used.limit_only)
    below = flags(convert, "below_limit") & taken
    censored = n_limit_only > 0
    # The interval depends on the number of values alone.
    mswd_lo, mswd_hi = (bound[means.n] for bound in mswd_interval(np.arange(-1.0, means.n.max(initial=0))))
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
            "n_independent": np.where(censored, count(taken), means.n),
            **context,
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
    names = ("experiment", "phase", "element", "technique", "batch", "analyte")
    return build(
        PAIR_LIMITS,
        {
            **{name: convert.column(name).take(pa.array(rows)) for name in names},
            "value_ppm": values.value[rows],
            "sigma_ppm": values.sigma[rows],
            "limit_ppm": values.limit[rows],
        },
    )
