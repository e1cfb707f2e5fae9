"""From the number in the cell to the concentration: units, oxide factor, internal standard."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import numbers
from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.chemistry.oxides import parse_oxide
from tieline.correction import CALIBRATION_KEYS
from tieline.settings.chemistry import ConvertSettings, InternalStandard
from tieline.tracing.cells import Spot
from tieline.tracing.means import mean_account, with_constant
from tieline.tracing.rows import chosen_rows, rows_of

Row = Mapping[str, Any]

FACTOR = "factor = actual / assumed, its relative sd that of the actual value; shared by all elements"
PER_SPOT = (
    "factor of a spot = actual / assumed, assumed being that spot's own cell of the internal standard; its "
    "relative sd is that of the actual value, shared by all elements and spots"
)
MEASURED = (
    "actual: Huber mean of the phase's values by the other technique, in the batch with most spots; "
    "relative sd = the larger of se and counting se / m"
)
COUNTING = "counting se² = e · mean(σ²) / n, e the constant for n (1 for two values and below)"


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
    tables: Mapping[str, pa.Table], key: Row, settings: ConvertSettings
) -> dict[str, Any] | None:
    """Factor actual/assumed of one phase of one experiment with its source values; None where none applied.

    key: experiment, phase, technique. Where every spot has an assumed value of its own, `factor` and
    `assumed_ppm` are None; see `assumed_by_spot`.
    """
    recorded = rows_of(tables["convert.standards"], key)
    if not recorded:
        return None
    row = recorded[0]
    standard = _setting(row, settings.internal_standard)
    source = parse_oxide(standard.element)
    scale = source.element_fraction * PPM_PER_UNIT[standard.unit]
    assumed = None
    if standard.assumed_from == "settings":
        assumed = standard.assumed.get(str(key["phase"]), standard.assumed.get("*"))
    account: dict[str, Any] = {
        "element": standard.element,
        "unit": standard.unit,
        "ppm_per_unit": scale,
        "assumed_from": standard.assumed_from,
        "assumed_ppm": None if assumed is None else assumed * scale,
        "actual_ppm": row["actual_ppm"],
        "relative_sd": row["relative_sd"],
        "dof": row["dof"],
        "factor": None if assumed is None else row["actual_ppm"] / (assumed * scale),
        "how": [PER_SPOT if assumed is None else FACTOR],
    }
    if row["source_technique"] is None:
        return account | {"source": "configured", "source_key": None}
    own = {name: row[f"source_{name}"] for name in CALIBRATION_KEYS}
    account |= {"source": f"{own['technique']} mean, batch {own['batch']}", "source_key": own}
    account["how"].append(MEASURED)
    return account | _measured(tables, {**key, **own, "element": source.element})


def _setting(row: Row, standards: Sequence[InternalStandard]) -> InternalStandard:
    """The standard of the settings that a row of `convert.standards` was made by."""
    own = [one for one in standards if (one.technique, one.element) == (row["technique"], row["analyte"])]
    named = [one for one in own if row["phase"] in one.assumed]
    return (named or [one for one in own if "*" in one.assumed] or own)[0]


def _measured(tables: Mapping[str, pa.Table], key: Row) -> dict[str, Any]:
    """The values behind a measured actual concentration and their mean."""
    chosen = chosen_rows(tables["convert"], key) & np.isfinite(numbers(tables["convert"], "value_ppm"))
    table, cells = (tables[name].filter(pa.array(chosen)) for name in ("convert", "ingest"))
    value, sigma = numbers(table, "value_ppm"), numbers(table, "sigma_ppm")
    account = with_constant(mean_account(value, sigma, estimator="huber", pooled=False))
    if account["counting_se_ppm"] is not None and account["counting_se_ppm"] > 0:
        variances = sigma[np.isfinite(sigma)] ** 2
        account["counting_constant"] = account["counting_se_ppm"] ** 2 * len(value) / float(variances.mean())
    account["how"].append(COUNTING)
    rows = table.select(["table", "row", "spot", "value_ppm", "sigma_ppm"]).to_pylist()
    raw = cells.select(["analyte", "raw", "unit"]).to_pylist()
    return {"mean": account, "spots": [row | cell for row, cell in zip(rows, raw, strict=True)]}


def assumed_by_spot(
    tables: Mapping[str, pa.Table], key: Row, standard: Row | None
) -> dict[Spot, dict[str, Any]]:
    """(table, row) -> the internal-standard cell a spot was made with: analyte, raw, unit, ppm of the element.

    key: experiment, phase, technique. Empty where the settings give the assumed value.
    """
    if standard is None or standard["assumed_from"] == "settings":
        return {}
    # The technique's own column as it stands in the table, before any rescaling.
    element = parse_oxide(standard["element"]).element
    found: dict[Spot, dict[str, Any]] = {}
    chosen = chosen_rows(tables["convert"], {**key, "element": element})
    for row in tables["ingest"].filter(pa.array(chosen)).to_pylist():
        if row["value"] is None:
            continue
        units = unit_account(row["analyte"], row["unit"])
        ppm = row["value"] * units["ppm_per_unit"] * units["element_fraction"]
        found[row["table"], row["row"]] = {
            **{name: row[name] for name in ("analyte", "raw", "unit")},
            "ppm": ppm,
        }
    return found
