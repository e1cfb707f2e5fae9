"""What `calibrate` says of one calibration, followed to the spots on reference materials."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import numbers
from tieline.auditing.summary import ruling_parts
from tieline.calibrate import MOST_RELATIVE_SE
from tieline.correction import sequence_of
from tieline.ruled_spots import RULING, reference_rows_ruled_out
from tieline.settings.chemistry import CalibrateSettings
from tieline.statistics.means import paule_mandel
from tieline.tracing.means import mean_account
from tieline.tracing.rows import chosen_rows, rows_of

Row = Mapping[str, Any]

RATIO = (
    "ratio = measured / accepted, ratio se² = (measured se / accepted)² + (ratio · accepted sd / accepted)²"
)
REMOVED = "relative sd = bias se / bias, the bias being divided out"
LEFT_IN = "relative sd = √((bias − 1)² + bias se²), the bias being left in"
BIAS = (
    "bias = Σ p ratio, bias se² = Σ p² (ratio se² + τ²), p ∝ 1 / (ratio se² + τ²); "
    "τ: Σ (ratio − bias)² / (ratio se² + τ²) = materials − 1, or 0"
)
LEFT_OUT = f"left out: materials whose ratio se / ratio exceeds {MOST_RELATIVE_SE:g} and 3 × that of the best"
DOF = (
    "dof of relative sd = bias se⁴ / Σ (p measured se / accepted)⁴ / (spots − 1), "
    "where τ > 0 at most materials − 1"
)
DRIFT = (
    "drift: least-squares slope of x / material mean − 1 on the place in the run, both centred per material"
)


def calibration_account(
    tables: Mapping[str, pa.Table], key: Row, settings: CalibrateSettings, *, cancels: bool
) -> dict[str, Any] | None:
    """What `calibrate` says of one calibration, and the reference spots behind it where it matters for D.

    key: technique, batch and analyte. None where `calibrate` has no such row. Where the calibration cancels,
    nothing was corrected and nothing drifts, its numbers have no part in D and are not given.
    """
    rows = rows_of(tables["calibrate"], key)
    if not rows:
        return None
    row = rows[0]
    names = ("origin", "factor", "drift_applied", "drift_left", "drift_centre", "matrix_sd")
    account: dict[str, Any] = {name: row[name] for name in names} | {"cancels": cancels}
    account |= {"materials": [], "ruled_out": [], "how": []}
    drifts = bool(row["drift_applied"] or row["drift_left"])
    if cancels and row["factor"] == 1.0 and not drifts:
        return account | dict.fromkeys(("relative_sd", "relative_dof", "bias", "bias_se"))
    account |= {name: row[name] for name in ("relative_sd", "relative_dof", "bias", "bias_se")}
    account["ruled_out"] = _ruled_out(tables, key)
    if row["origin"] != "reference materials" and not drifts:
        return account
    return account | _behind(tables, key, row, settings)


def _behind(
    tables: Mapping[str, pa.Table], key: Row, row: Row, settings: CalibrateSettings
) -> dict[str, Any]:
    """The reference materials of one calibration with their spots, and how the bias follows from them."""
    names = (
        "material", "n_spots", "measured_ppm", "measured_se_ppm", "accepted_ppm", "accepted_sd_ppm", "ratio",
        "ratio_se", "source",
    )  # fmt: skip
    found = rows_of(tables["calibrate.materials"], key)
    weights, between_sd = _weights(found)
    materials = [
        {name: one[name] for name in names}
        | {"weight": weight}
        | _reference_spots(tables, {**key, "material": one["material"]})
        for one, weight in zip(found, weights, strict=True)
    ]
    how = [LEFT_IN if settings.correct is False else REMOVED, RATIO]
    if sum(weight is not None for weight in weights) > 1:
        how.append(BIAS)
    if any(one["ratio"] is not None and weight is None for one, weight in zip(found, weights, strict=True)):
        how.append(LEFT_OUT)
    if row["relative_dof"] is not None:
        how.append(DOF)
    if row["drift_applied"] or row["drift_left"]:
        how.append(DRIFT)
    return {"materials": materials, "between_sd": between_sd, "how": how}


def _weights(materials: Sequence[Row]) -> tuple[list[float | None], float]:
    """Normalised weights of the materials in the bias, None where one has no part, and the sd between them."""
    ratio, se = (
        np.array([np.nan if one[name] is None else one[name] for one in materials], dtype=np.float64)
        for name in ("ratio", "ratio_se")
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = se / np.abs(ratio)
    best = np.fmin.reduce(relative, initial=np.inf)
    kept = np.flatnonzero(np.isfinite(ratio) & ~(relative > np.fmax(MOST_RELATIVE_SE, 3.0 * best)))
    own = np.nan_to_num(se[kept] ** 2)
    if not len(kept):
        return [None] * len(materials), 0.0
    between = float(paule_mandel(ratio[kept], own, np.zeros(len(kept), dtype=np.int64), 1)[0])
    weight = np.where(np.isfinite(se[kept]), 1.0 / np.fmax(own + between, 1e-12), 1.0)
    weights: list[float | None] = [None] * len(materials)
    for place, share in zip(kept, weight / weight.sum(), strict=True):
        weights[place] = float(share)
    return weights, float(np.sqrt(between))


def _ruled_out(tables: Mapping[str, pa.Table], key: Row) -> list[dict[str, Any]]:
    """Values of reference materials that a person left out of one calibration, with who decided, when and why."""
    table = _measured(tables["convert"], key)
    findings = tables["screen.findings"]
    table = table.filter(pa.array(reference_rows_ruled_out(table, findings)))
    if not table.num_rows:
        return []
    ruled: dict[tuple[str, int], Row] = {}
    # One on the analyte goes before one on the whole spot.
    for finding in sorted(rows_of(findings, {"code": RULING}), key=lambda one: one["analyte"] is not None):
        if finding["analyte"] in (None, key["analyte"]):
            ruled[finding["table"], finding["row"]] = ruling_parts(finding)
    names = ("material", "spot", "table", "row", "value_ppm")
    return [
        one | {name: ruled[one["table"], one["row"]][name] for name in ("analyst", "date", "reason")}
        for one in table.select(names).to_pylist()
    ]


def _measured(convert: pa.Table, key: Row) -> pa.Table:
    """The rows of `convert` with these labels that have a value."""
    return convert.filter(pa.array(chosen_rows(convert, key) & np.isfinite(numbers(convert, "value_ppm"))))


def _reference_spots(tables: Mapping[str, pa.Table], key: Row) -> dict[str, Any]:
    """Values of one material in one calibration, and their mean."""
    table = _measured(tables["convert"], key)
    table = table.filter(pa.array(~reference_rows_ruled_out(table, tables["screen.findings"])))
    value, sigma = numbers(table, "value_ppm"), numbers(table, "sigma_ppm")
    account = mean_account(value, sigma, estimator="random-effects", pooled=False)
    rows = table.select(["spot", "table", "row"]).to_pylist()
    columns = {
        "place": sequence_of(table, tables["ingest.spots"]), "value_ppm": value, "sigma_ppm": sigma,
    }  # fmt: skip
    spots = [
        one | {name: float(column[at]) for name, column in columns.items() if np.isfinite(column[at])}
        for at, one in enumerate(rows)
    ]
    return {"spots": spots, "mean": account}
