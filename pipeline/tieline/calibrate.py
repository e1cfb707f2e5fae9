"""Stage `calibrate`: what reference materials say about each batch and element.

A calibration error is shared by every spot of a batch and cancels in a D whose phases come from one
batch. A matrix term is not shared between phases and never cancels.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from scipy import special

from tieline.accepted import AcceptedValue, read_accepted_values
from tieline.arrays import BoolArray, FloatArray, Groups, IntArray, TextArray, group_table, labels, numbers
from tieline.columns import CALIBRATE, CALIBRATE_MATERIALS
from tieline.correction import sequence_of
from tieline.errors import InputError, Problem
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, Remark, StageResult
from tieline.ruled_spots import dropped_rows
from tieline.rulings import rulings_as_written
from tieline.settings.chemistry import CalibrateSettings
from tieline.statistics.means import paule_mandel, phase_means
from tieline.statistics.outliers import holm
from tieline.tables import build

__all__ = ["calibrate", "read_accepted_values"]


@dataclass(frozen=True)
class Reference:
    """Usable reference-material values: ratio to the accepted value and its counting sigma, shape (rows,)."""

    ratio: FloatArray
    sigma: FloatArray
    sequence: FloatArray
    material_group: Groups
    batch_group: IntArray


# A reference material whose mean is less sure than this is left out where a surer one is there; own choice.
MOST_RELATIVE_SE = 0.1


@dataclass(frozen=True)
class Materials:
    """Batch x material x element: mean ratio, its variance, and the accepted value's part of it, shape (M,)."""

    groups: Groups
    count: IntArray
    mean_ppm: FloatArray
    mean_variance: FloatArray
    ratio: FloatArray
    variance: FloatArray
    accepted_variance: FloatArray
    spread: FloatArray
    accepted: list[AcceptedValue | None]


@dataclass(frozen=True)
class Drift:
    """Relative slope per place in the run order, its p-value and centre, shape (B,); NaN where not tested."""

    slope: FloatArray
    p: FloatArray
    centre: FloatArray


def calibrate(
    convert: pa.Table,
    ingest_spots: pa.Table,
    *,
    files: Mapping[str, InputFile],
    rulings: Mapping[str, InputFile] | None = None,
    settings: CalibrateSettings,
) -> StageResult:
    """Bias, reproducibility, drift and calibration uncertainty of every batch and element.

    Values of reference materials that a ruling drops have no part in it. Raises InputError for accepted values
    and rulings that cannot be used.
    """
    accepted, ruled = _read(files, rulings or {}, convert)
    batches = group_table(convert, ("technique", "batch", "element", "analyte"))
    value, sigma = numbers(convert, "value_ppm"), numbers(convert, "sigma_ppm")
    is_reference = labels(convert, "material").codes >= 0
    measured = is_reference & np.isfinite(value)
    n_measured = int(measured.sum())
    n_ruled, ruled_materials = 0, set[str]()
    if ruled is not None:
        ruled &= measured
        measured &= ~ruled
        n_ruled, ruled_materials = int(ruled.sum()), _materials_of(convert, ruled)
    groups = group_table(convert, ("technique", "batch", "material", "element", "analyte"), measured)
    materials = _materials(groups, value, sigma, accepted)
    known = np.array([item is not None for item in materials.accepted], dtype=np.bool_)
    batch_of = _batch_of(groups, batches)
    bias = _bias(materials, known, batch_of, batches.count)
    usable = measured & np.append(known, False)[groups.code]
    rows = np.flatnonzero(usable)
    sequence = sequence_of(convert, ingest_spots, rows)
    drift = _drift(rows, value[rows], sequence, materials, batches, batch_of, settings)
    columns = _columns(batches, bias, drift, settings)
    n_spots = np.bincount(batches.code[usable], minlength=batches.count)
    table = build(CALIBRATE, {**columns, "n_spots": n_spots, "n_materials": bias.n_materials})
    by_material = _material_table(materials, settings)
    outcomes = {
        "reference values with an accepted value": int(usable.sum()),
        "reference values without one": int((measured & ~usable).sum()),
        "reference values not measured": int(is_reference.sum()) - n_measured,
        "values of unknowns": int((~is_reference).sum()),
    }
    if n_ruled:
        outcomes["reference values ruled out"] = n_ruled
    ledger = Ledger("values", convert.num_rows, outcomes)
    return StageResult(
        {"calibrate": table, "calibrate.materials": by_material},
        ledger,
        _remarks(table, accepted, groups, ruled_materials, settings),
    )


def _read(
    files: Mapping[str, InputFile], rulings: Mapping[str, InputFile], convert: pa.Table
) -> tuple[dict[tuple[str, str], AcceptedValue], BoolArray | None]:
    """The accepted values, and the rows of `convert` that a ruling drops, None where nobody ruled.

    Raises InputError with what is wrong with either.
    """
    problems: list[Problem] = []
    accepted, ruled = {}, None
    try:
        accepted = read_accepted_values(files)
    except InputError as error:
        problems += error.problems
    try:
        ruled = dropped_rows(convert, *rulings_as_written(rulings))
    except InputError as error:
        problems += error.problems
    if problems:
        raise InputError(problems)
    return accepted, ruled


def _materials_of(convert: pa.Table, rows: BoolArray) -> set[str]:
    material = labels(convert, "material")
    return {material.texts[code] for code in np.unique(material.codes[rows])}


def _materials(
    groups: Groups, value: FloatArray, sigma: FloatArray, accepted: Mapping[tuple[str, str], AcceptedValue]
) -> Materials:
    rows = groups.code >= 0
    means = phase_means(value[rows], sigma[rows], groups.code[rows], groups.count)
    values = [accepted.get((str(key[2]), str(key[3]))) for key in groups.keys]
    reference = np.array([item.value_ppm if item else np.nan for item in values], dtype=np.float64)
    reference_sd = np.array([item.sd_ppm if item else np.nan for item in values], dtype=np.float64)
    ratio = means.mean / reference
    return Materials(
        groups,
        means.n_values,
        means.mean,
        means.variance,
        ratio,
        means.variance / reference**2,
        (ratio * reference_sd / reference) ** 2,
        means.spread_sd / np.abs(means.mean),
        values,
    )


def _batch_of(groups: Groups, batches: Groups) -> IntArray:
    """For every batch x material x element its batch x element."""
    position = {key: code for code, key in enumerate(batches.keys)}
    return np.array([position[(key[0], key[1], key[3], key[4])] for key in groups.keys], dtype=np.int64)


@dataclass(frozen=True)
class Bias:
    """Measured over accepted of every batch and analyte, shape (B,); NaN where no reference material tells."""

    ratio: FloatArray
    se: FloatArray
    dof: FloatArray
    spread: FloatArray
    n_materials: IntArray


def _bias(materials: Materials, known: BoolArray, batch_of: IntArray, n_batches: int) -> Bias:
    """Mean of the materials' ratios with weights 1/(variance + spread between materials).

    A material near its detection limit says nothing of the calibration and is left out where a better one is there.
    No bias is given where the ratio is not significantly above zero.
    """
    variance = materials.variance + materials.accepted_variance
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.sqrt(variance) / np.abs(materials.ratio)
    best = np.full(n_batches, np.inf)
    np.fmin.at(best, batch_of[known], relative[known])
    enough = np.fmax(MOST_RELATIVE_SE, 3.0 * best)[batch_of]
    kept = np.flatnonzero(known & (~(relative > enough)))
    batch, ratio = batch_of[kept], materials.ratio[kept]

    def total(x: FloatArray) -> FloatArray:
        return np.bincount(batch, weights=x, minlength=n_batches).astype(np.float64)

    own = variance[kept]
    between = paule_mandel(ratio, np.nan_to_num(own), batch, n_batches)
    weight = 1.0 / np.fmax(own + between[batch], 1e-12)
    weight = np.where(np.isfinite(weight), weight, 1.0)  # an unknown variance makes the whole unknown, below
    whole = total(weight)
    safe = np.where(whole > 0, whole, np.nan)
    mean = total(weight * ratio) / safe
    parts = (weight / safe[batch]) ** 2 * (own + between[batch])
    squared = total(parts)
    # Welch-Satterthwaite; the accepted value's part and the counting of a single spot have no degrees of freedom to lose.
    count = materials.count[kept]
    measured_part = (weight / safe[batch]) ** 2 * materials.variance[kept]
    lost = total(np.where(count > 1, measured_part**2 / np.maximum(count - 1, 1), 0.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        dof = squared**2 / lost
    n_materials = np.bincount(batch, minlength=n_batches)
    dof = np.where(between > 0, np.fmin(dof, n_materials - 1), dof)
    se = np.sqrt(squared)
    defined = ~(mean - 2.0 * np.nan_to_num(se) <= 0)
    spread = _pooled_spread(materials, known, batch_of, n_batches)
    return Bias(np.where(defined, mean, np.nan), np.where(defined, se, np.nan), dof, spread, n_materials)


def _pooled_spread(materials: Materials, known: BoolArray, batch_of: IntArray, n_batches: int) -> FloatArray:
    squares = np.where(np.isfinite(materials.spread), materials.spread, 0.0)[known] ** 2
    weights = materials.count[known].astype(np.float64)
    total_weight = np.bincount(batch_of[known], weights=weights, minlength=n_batches)
    pooled = np.bincount(batch_of[known], weights=weights * squares, minlength=n_batches)
    return np.sqrt(pooled / np.where(total_weight > 0, total_weight, np.nan))


def _drift(
    rows: IntArray,
    value: FloatArray,
    sequence: FloatArray,
    materials: Materials,
    batches: Groups,
    batch_of: IntArray,
    settings: CalibrateSettings,
) -> Drift:
    """Straight line of the relative deviations on the run order, one level per material, by least squares.

    rows: the usable rows of `convert`, with their values in ppm and places in the run order.
    With a level per material both variables are taken relative to the material's mean; the slope's t has
    n - materials - 1 degrees of freedom.
    """
    material, batch = materials.groups.code[rows], batches.code[rows]
    count = np.bincount(material, minlength=materials.groups.count)

    def centred(x: FloatArray) -> FloatArray:
        mean = np.bincount(material, weights=x, minlength=len(count)) / np.maximum(count, 1)
        return np.asarray(x - mean[material])

    reference_mean = np.bincount(material, weights=value, minlength=len(count)) / np.maximum(count, 1)
    deviation = centred(value / np.where(reference_mean == 0, np.nan, reference_mean)[material])
    place = centred(sequence)
    n_batches = batches.count

    def total(x: FloatArray) -> FloatArray:
        return np.bincount(batch, weights=x, minlength=n_batches).astype(np.float64)

    sxx, sxy, syy = total(place**2), total(place * deviation), total(deviation**2)
    n = np.bincount(batch, minlength=n_batches)
    levels = np.bincount(batch_of[count > 0], minlength=n_batches)
    dof = n - levels - 1
    testable = (n >= settings.min_spots_for_drift) & (dof > 0) & (sxx > 0) & np.isfinite(syy)
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = np.where(testable, sxy / sxx, np.nan)
        residual = np.maximum(syy - slope * sxy, 0.0) / np.where(testable, dof, 1)
        t = np.abs(slope) / np.sqrt(residual / sxx)
        # No residual at all: a drift without doubt, or none.
        t = np.where(testable & (residual == 0), np.where(slope == 0, 0.0, np.inf), t)
        p = np.where(testable, 2.0 * special.stdtr(np.where(testable, dof, 1), -t), np.nan)
        centre = np.where(n > 0, total(sequence) / np.maximum(n, 1), np.nan)
    return Drift(slope, p, centre)


def _columns(batches: Groups, bias: Bias, drift: Drift, settings: CalibrateSettings) -> dict[str, object]:
    ratio, se = bias.ratio, bias.se
    measured = np.isfinite(ratio)
    techniques = batches.key(0)
    configured = np.array(
        [settings.relative_sd.get(str(name), np.nan) for name in techniques], dtype=np.float64
    )
    matrix = np.array([settings.matrix_sd.get(str(name), 0.0) for name in techniques], dtype=np.float64)
    corrects = settings.correct is not False
    # An uncorrected bias is itself the error the values carry; a corrected one leaves its own uncertainty.
    left = se / ratio if corrects else np.hypot(ratio - 1.0, se)
    supported = _supported(drift, batches) < settings.drift_p
    removed = supported & (settings.correct == "bias+drift")
    within = np.abs(ratio - 1.0) <= np.fmax(settings.tolerance.relative, settings.tolerance.sigmas * se)
    origin = np.where(
        measured, "reference materials", np.where(np.isfinite(configured), "configured", "unknown")
    )
    slope = np.nan_to_num(drift.slope)
    return {
        "technique": techniques,
        "batch": batches.key(1),
        "element": batches.key(2),
        "analyte": batches.key(3),
        "bias": ratio,
        "bias_se": se,
        "reproducibility_sd": bias.spread,
        "drift_per_spot": drift.slope,
        "drift_p": drift.p,
        "drift_centre": np.where(np.isfinite(drift.slope), drift.centre, np.nan),
        "factor": np.where(measured & corrects, ratio, 1.0),
        "drift_applied": np.where(removed, slope, 0.0),
        "drift_left": np.where(supported & ~removed, slope, 0.0),
        "relative_sd": np.where(measured, left, configured),
        "relative_dof": np.where(measured & corrects & np.isfinite(bias.dof), bias.dof, np.nan),
        "matrix_sd": matrix,
        "origin": origin.astype(object),
        "passed": _or_null(within, measured),
    }


def _supported(drift: Drift, batches: Groups) -> FloatArray:
    """p-values of the drift, corrected by Holm for the number of analytes tested in the batch; 1 where not tested."""
    adjusted = np.ones(batches.count)
    batch_of = [key[:2] for key in batches.keys]
    for batch in dict.fromkeys(batch_of):
        rows = [row for row, own in enumerate(batch_of) if own == batch]
        adjusted[rows] = np.nan_to_num(holm(drift.p[rows]), nan=1.0)
    return adjusted


def _or_null(flag: BoolArray, known: BoolArray) -> TextArray:
    values: TextArray = flag.astype(object)
    values[~known] = None
    return values


def _material_table(materials: Materials, settings: CalibrateSettings) -> pa.Table:
    items = materials.accepted
    reference = np.array([item.value_ppm if item else np.nan for item in items], dtype=np.float64)
    ratio_se = np.sqrt(materials.variance + materials.accepted_variance)
    tolerance = np.fmax(settings.tolerance.relative, settings.tolerance.sigmas * ratio_se)
    within = np.abs(materials.ratio - 1.0) <= tolerance
    return build(
        CALIBRATE_MATERIALS,
        {
            "technique": materials.groups.key(0),
            "batch": materials.groups.key(1),
            "material": materials.groups.key(2),
            "element": materials.groups.key(3),
            "analyte": materials.groups.key(4),
            "n_spots": materials.count,
            "measured_ppm": materials.mean_ppm,
            "measured_se_ppm": np.sqrt(materials.mean_variance),
            "accepted_ppm": reference,
            "accepted_sd_ppm": np.array(
                [item.sd_ppm if item else np.nan for item in items], dtype=np.float64
            ),
            "ratio": materials.ratio,
            "ratio_se": ratio_se,
            "source": [item.source if item else None for item in items],
            "passed": _or_null(within, np.isfinite(materials.ratio)),
        },
    )


def _remarks(
    table: pa.Table,
    accepted: Mapping[tuple[str, str], AcceptedValue],
    groups: Groups,
    ruled_out: set[str],
    settings: CalibrateSettings,
) -> tuple[Remark, ...]:
    techniques = set(table.column("technique").to_pylist())
    remarks = [
        Remark(
            f'no table has the technique "{name}" that calibrate names; found: {", ".join(sorted(techniques))}'
        )
        for name in sorted({*settings.relative_sd, *settings.matrix_sd} - techniques)
    ]
    by_batch: dict[str, list[dict[str, Any]]] = {}
    for row in table.to_pylist():
        by_batch.setdefault(row["batch"], []).append(row)
    for batch, rows in sorted(by_batch.items()):
        failed = [row for row in rows if row["passed"] is False]
        if failed:
            worst = ", ".join(f"{row['element']} {row['bias']:.3f}" for row in failed)
            remarks.append(
                Remark(f"reference materials outside the laboratory's limit: {worst} of accepted", batch)
            )
        drifting = [row for row in rows if row["drift_left"]]
        if drifting:
            named = ", ".join(row["element"] for row in drifting)
            text = f"the reference materials drift with the run order, and the drift stays in the values: {named}"
            remarks.append(Remark(text, batch))
    measured = {key[2] for key in groups.keys}
    unmeasured = sorted({material for material, _ in accepted} - measured - ruled_out)
    remarks += [Remark("accepted values given, but no spot of it was measured", name) for name in unmeasured]
    remarks += [
        Remark("every measured value of it was ruled out", name) for name in sorted(ruled_out - measured)
    ]
    return tuple(remarks)
