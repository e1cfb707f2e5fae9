"""From the number in the cell to the concentration in the mean: units, oxide factor, internal standard, calibration."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import labels, numbers
from tieline.chemistry.oxides import parse_oxide
from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.correction import sequence_of
from tieline.settings.chemistry import CalibrateSettings, InternalStandard
from tieline.tracing.means import mean_account, with_constant

Row = Mapping[str, Any]


def unit_account(analyte: str, unit: str) -> dict[str, Any]:
    """ppm per unit and the element's mass fraction in what the column reports."""
    name = analyte.removesuffix("T") if analyte in ("FeOT", "Fe2O3T") else analyte
    formula = name.rstrip("0123456789") if "O" not in name[1:] else name
    return {
        "unit": unit,
        "ppm_per_unit": PPM_PER_UNIT[unit],
        "element_fraction": parse_oxide(formula).element_fraction,
    }


def internal_standard_account(
    convert: pa.Table, ingest: pa.Table, key: Row, standards: Sequence[InternalStandard]
) -> dict[str, Any] | None:
    """Factor actual/assumed of one phase of one experiment with its source values; None where none applies.

    convert, ingest: whole tables in one order of rows; key: experiment, phase, technique.
    """
    standard = next((one for one in standards if one.technique == key["technique"]), None)
    if standard is None:
        return None
    source = parse_oxide(standard.element)
    scale = source.element_fraction * {"wt%": 1e4, "ppm": 1.0}[standard.unit]
    account: dict[str, Any] = {
        "element": standard.element,
        "unit": standard.unit,
        "ppm_per_unit": scale,
        "assumed_from": standard.assumed_from,
        "assumed_ppm": _assumed(convert, ingest, key, standard, scale, source.element),
        "how": [
            "factor = actual / assumed, its relative uncertainty that of the actual value; shared by all elements"
        ],
    }
    if standard.actual == "probe-mean":
        account |= _probe_mean(convert, ingest, key, standard, source.element)
        account["how"].append("actual: Huber mean of the phase's values by the other technique")
    else:
        given = standard.actual.get(str(key["phase"]))
        account |= {
            "source": "configured",
            "actual_ppm": None if given is None else given.value * scale,
            "actual_sd_ppm": None if given is None else given.sd * scale,
        }
    actual, assumed = account["actual_ppm"], account["assumed_ppm"]
    if actual is None or assumed is None:
        return account | {"factor": 1.0, "relative_sd": None}
    return account | {"factor": actual / assumed, "relative_sd": account["actual_sd_ppm"] / actual}


def _assumed(
    convert: pa.Table, ingest: pa.Table, key: Row, standard: InternalStandard, scale: float, element: str
) -> float | None:
    if standard.assumed_from == "settings":
        value = standard.assumed.get(str(key["phase"]), standard.assumed.get("*"))
        return None if value is None else value * scale
    # The technique's own column as it stands in the table, before any rescaling.
    rows = ingest.filter(pa.array(_rows(convert, {**key, "element": element}))).to_pylist()
    values = [
        row["value"] * units["ppm_per_unit"] * units["element_fraction"]
        for row in rows
        if row["value"] is not None and (units := unit_account(row["analyte"], row["unit"]))
    ]
    return float(np.mean(values)) if values else None


def _probe_mean(
    convert: pa.Table, ingest: pa.Table, key: Row, standard: InternalStandard, element: str
) -> dict[str, Any]:
    chosen = _rows(convert, {**key, "technique": standard.source_technique, "element": element})
    chosen &= np.isfinite(numbers(convert, "value_ppm"))
    table, cells = (one.filter(pa.array(chosen)) for one in (convert, ingest))
    value, sigma = numbers(table, "value_ppm"), numbers(table, "sigma_ppm")
    account = with_constant(mean_account(value, sigma, estimator="huber", pooled=False))
    rows = table.select(["table", "row", "spot", "value_ppm"]).to_pylist()
    raw = cells.select(["analyte", "raw", "unit"]).to_pylist()
    return {
        "source": f"{standard.source_technique} mean",
        "actual_ppm": account["mean_ppm"],
        "actual_sd_ppm": account["se_ppm"],
        "mean": account,
        "spots": [row | cell for row, cell in zip(rows, raw, strict=True)],
    }


def _rows(table: pa.Table, where: Row) -> np.ndarray[Any, np.dtype[np.bool_]]:
    chosen = np.ones(table.num_rows, dtype=np.bool_)
    for name, text in where.items():
        chosen &= labels(table, name).is_one_of((str(text),))
    return chosen


def calibration_account(
    tables: Mapping[str, pa.Table], key: Row, settings: CalibrateSettings, *, cancels: bool
) -> dict[str, Any] | None:
    """What `calibrate` says of one batch and element, and the reference spots behind it where it matters for D.

    key: batch and element. None where the batch and element have no row. Where the calibration cancels and
    nothing was corrected, its numbers have no part in D and are not given.
    """
    rows = tables["calibrate"].filter(pa.array(_rows(tables["calibrate"], key))).to_pylist()
    if not rows:
        return None
    row = rows[0]
    names = ("origin", "factor", "drift_applied", "drift_centre", "matrix_sd")
    account: dict[str, Any] = {name: row[name] for name in names} | {"cancels": cancels}
    if cancels and row["factor"] == 1.0 and not row["drift_applied"]:
        return account | {"relative_sd": None, "bias": None, "bias_se": None, "materials": [], "how": []}
    account |= {name: row[name] for name in ("relative_sd", "bias", "bias_se")}
    account |= {"materials": [], "how": []}
    return (
        account if row["origin"] != "reference materials" else account | _behind(tables, key, row, settings)
    )


def _behind(
    tables: Mapping[str, pa.Table], key: Row, row: Row, settings: CalibrateSettings
) -> dict[str, Any]:
    """The reference materials of one batch and element with their spots, and how the bias follows from them."""
    names = (
        "material", "measured_ppm", "measured_se_ppm", "accepted_ppm", "accepted_sd_ppm", "ratio", "ratio_se", "source",
    )  # fmt: skip
    found = (
        tables["calibrate.materials"].filter(pa.array(_rows(tables["calibrate.materials"], key))).to_pylist()
    )
    materials = [
        {name: one[name] for name in names} | _reference_spots(tables, {**key, "material": one["material"]})
        for one in found
    ]
    how = [
        "relative sd = bias se / bias, the bias being divided out"
        if settings.correct is not False
        else "relative sd = √((bias − 1)² + bias se²), the bias being left in",
        "ratio = measured / accepted, ratio se² = (measured se / accepted)² + (ratio · accepted sd / accepted)²",
    ]
    known = [one for one in materials if one["ratio"] is not None]
    how.append(
        "bias: the ratio of the one material"
        if len(known) == 1
        else "bias: weighted mean of the ratios as of x; its se the larger of scatter and counting"
    )
    if row["drift_applied"]:
        how.append(
            "drift: least-squares slope of x / material mean − 1 on the place in the run, centred per material"
        )
    return {"materials": materials, "how": how}


def _reference_spots(tables: Mapping[str, pa.Table], key: Row) -> dict[str, Any]:
    """Values of one material in one batch, and their mean."""
    chosen = _rows(tables["convert"], key)
    place = sequence_of(tables["convert"], tables["ingest.spots"])[chosen]
    table = tables["convert"].filter(pa.array(chosen))
    value, sigma = numbers(table, "value_ppm"), numbers(table, "sigma_ppm")
    measured = np.isfinite(value)
    account = mean_account(value[measured], sigma[measured], estimator="random-effects", pooled=False)
    rows = table.select(["spot", "table", "row"]).filter(pa.array(measured)).to_pylist()
    columns = {"place": place[measured], "value_ppm": value[measured], "sigma_ppm": sigma[measured]}
    spots = [
        one | {name: float(column[at]) for name, column in columns.items() if np.isfinite(column[at])}
        for at, one in enumerate(rows)
    ]
    return {"spots": spots, "mean": account}
