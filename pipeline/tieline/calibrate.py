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
from tieline.arrays import BoolArray, FloatArray, Groups, IntArray, TextArray, group_rows, labels, numbers
from tieline.columns import CALIBRATE, CALIBRATE_MATERIALS
from tieline.correction import sequence_of
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, Remark, StageResult
from tieline.settings.chemistry import CalibrateSettings
from tieline.statistics.means import phase_means
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
    convert: pa.Table, ingest_spots: pa.Table, *, files: Mapping[str, InputFile], settings: CalibrateSettings
) -> StageResult:
    """Bias, reproducibility, drift and calibration uncertainty of every batch and element.

    Raises InputError for accepted values that cannot be used.
    """
    accepted = read_accepted_values(files)
    batches = group_rows([labels(convert, name) for name in ("technique", "batch", "element")])
    value, sigma = numbers(convert, "value_ppm"), numbers(convert, "sigma_ppm")
    is_reference = labels(convert, "material").codes >= 0
    measured = is_reference & np.isfinite(value)
    groups = group_rows(
        [labels(convert, name) for name in ("technique", "batch", "material", "element")], measured
    )
    materials = _materials(groups, value, sigma, accepted)
    known = np.array([item is not None for item in materials.accepted], dtype=np.bool_)
    batch_of = _batch_of(groups, batches)
    bias, bias_se, spread, n_materials = _bias(materials, known, batch_of, batches.count)
    usable = measured & np.append(known, False)[groups.code]
    rows = np.flatnonzero(usable)
    sequence = sequence_of(convert, ingest_spots, rows)
    drift = _drift(rows, value[rows], sequence, materials, batches, batch_of, settings)
    columns = _columns(batches, (bias, bias_se, spread), drift, settings)
    n_spots = np.bincount(batches.code[usable], minlength=batches.count)
    table = build(CALIBRATE, {**columns, "n_spots": n_spots, "n_materials": n_materials})
    by_material = _material_table(materials, settings)
    outcomes = {
        "reference values with an accepted value": int(usable.sum()),
        "reference values without one": int((measured & ~usable).sum()),
        "reference values not measured": int((is_reference & ~measured).sum()),
        "values of unknowns": int((~is_reference).sum()),
    }
    ledger = Ledger("values", convert.num_rows, outcomes)
    return StageResult(
        {"calibrate": table, "calibrate.materials": by_material}, ledger, _remarks(table, accepted, groups)
    )


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
    return np.array([position[(key[0], key[1], key[3])] for key in groups.keys], dtype=np.int64)


def _bias(
    materials: Materials, known: BoolArray, batch_of: IntArray, n_batches: int
) -> tuple[FloatArray, FloatArray, FloatArray, IntArray]:
    """Mean ratio over the materials, its standard error, the spread within materials, and how many there are."""
    total = np.sqrt(materials.variance + materials.accepted_variance)[known]
    means = phase_means(materials.ratio[known], total, batch_of[known], n_batches)
    # Two or three materials rarely show less scatter than their own errors for a good reason.
    variance = np.fmax(means.variance, np.nan_to_num(means.counting_variance))
    squares = np.where(np.isfinite(materials.spread), materials.spread, 0.0)[known] ** 2
    weights = materials.count[known].astype(np.float64)
    total_weight = np.bincount(batch_of[known], weights=weights, minlength=n_batches)
    pooled = np.bincount(batch_of[known], weights=weights * squares, minlength=n_batches)
    spread = np.sqrt(pooled / np.where(total_weight > 0, total_weight, np.nan))
    return means.mean, np.sqrt(variance), spread, means.n


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
        p = np.where(testable & np.isfinite(t), 2.0 * special.stdtr(np.where(testable, dof, 1), -t), np.nan)
        centre = np.where(n > 0, total(sequence) / np.maximum(n, 1), np.nan)
    return Drift(slope, p, centre)


def _columns(
    batches: Groups,
    bias: tuple[FloatArray, FloatArray, FloatArray],
    drift: Drift,
    settings: CalibrateSettings,
) -> dict[str, object]:
    ratio, ratio_se, spread = bias
    measured = np.isfinite(ratio)
    techniques = batches.key(0)
    configured = np.array(
        [settings.relative_sd.get(str(name), np.nan) for name in techniques], dtype=np.float64
    )
    matrix = np.array([settings.matrix_sd.get(str(name), 0.0) for name in techniques], dtype=np.float64)
    corrects = settings.correct is not False
    factor = np.where(measured & corrects, ratio, 1.0)
    # An uncorrected bias is itself the error the values carry; a corrected one leaves its own uncertainty.
    left = ratio_se / ratio if corrects else np.hypot(ratio - 1.0, ratio_se)
    supported = (settings.correct == "bias+drift") & (np.nan_to_num(drift.p, nan=1.0) < settings.drift_p)
    within = np.abs(ratio - 1.0) <= np.fmax(settings.tolerance.relative, settings.tolerance.sigmas * ratio_se)
    origin = np.where(
        measured, "reference materials", np.where(np.isfinite(configured), "configured", "unknown")
    )
    return {
        "technique": techniques,
        "batch": batches.key(1),
        "element": batches.key(2),
        "bias": ratio,
        "bias_se": ratio_se,
        "reproducibility_sd": spread,
        "drift_per_spot": drift.slope,
        "drift_p": drift.p,
        "drift_centre": np.where(np.isfinite(drift.slope), drift.centre, np.nan),
        "factor": factor,
        "drift_applied": np.where(supported, drift.slope, 0.0),
        "relative_sd": np.where(measured, left, configured),
        "matrix_sd": matrix,
        "origin": origin.astype(object),
        "passed": _or_null(within, measured),
    }


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
    table: pa.Table, accepted: Mapping[tuple[str, str], AcceptedValue], groups: Groups
) -> tuple[Remark, ...]:
    remarks = []
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
        drifting = [row for row in rows if (row["drift_p"] or 1.0) < 0.001]
        if drifting:
            named = ", ".join(row["element"] for row in drifting)
            remarks.append(
                Remark(f"the reference materials drift with the run order (p < 0.001): {named}", batch)
            )
    measured = {key[2] for key in groups.keys}
    unmeasured = sorted({material for material, _ in accepted} - measured)
    remarks += [Remark("accepted values given, but no spot of it was measured", name) for name in unmeasured]
    return tuple(remarks)
