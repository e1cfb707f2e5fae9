"""The page of one D: result, budget, and for both phases the mean, its spots and where their values come from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import flags, grain_codes, numbers
from tieline.auditing.summary import ruling_parts
from tieline.correction import CALIBRATION_KEYS, STANDARD_KEYS, calibrated, sequence_of
from tieline.notation import written
from tieline.pairing import with_parts
from tieline.reading.input_file import InputFile
from tieline.screen.findings import RULING
from tieline.settings import SessionSettings
from tieline.tracing.budget import budget_lines
from tieline.tracing.calibration import calibration_account
from tieline.tracing.cells import Spot, sigma_rule, source_cells, table_settings
from tieline.tracing.factors import assumed_by_spot, internal_standard_account, unit_account
from tieline.tracing.finding import find_coefficient
from tieline.tracing.interval import class_account, interval_account
from tieline.tracing.means import mean_account, with_constant
from tieline.tracing.rows import chosen_rows, rows_of

Row = Mapping[str, Any]
KEYS = ("experiment", "alpha", "beta", "element")
GROUP = ("experiment", "phase", "element", "technique", "batch", "analyte")
SAME = 1e-9
D_SD = "D_sd = |D| · √(sum of the squares in the budget); the interval takes each factor times w"


@dataclass(frozen=True)
class Source:
    """What a page is made from: all stage tables by name, the settings in effect and the input files."""

    tables: Mapping[str, pa.Table]
    settings: SessionSettings
    files: Mapping[str, InputFile]


def trace(source: Source, experiment: str, alpha: str, beta: str, element: str) -> dict[str, Any]:
    """The page of one D as a tree of plain data. Raises InputError where there is no such D, naming what there is."""
    spellings = source.settings.ingest.phases
    row = find_coefficient(source.tables["classify"], experiment, alpha, beta, element, spellings)
    sides = {"alpha": alpha, "beta": beta}
    groups = {
        side: {"experiment": experiment, "phase": phase, "element": element}
        | {name: row[f"{name}_{side}"] for name in ("technique", "batch", "analyte")}
        for side, phase in sides.items()
    }
    same = all(groups["alpha"][name] == groups["beta"][name] for name in CALIBRATION_KEYS)
    pair_rows = {side: rows_of(source.tables["pair"], groups[side])[0] for side in sides}
    limits = {side: _limit_rows(source.tables["pair.limits"], groups[side]) for side in sides}
    interval = interval_account(row, pair_rows, limits, source.settings.partition)
    phases = {side: _phase(source, groups[side], pair_rows[side], same) for side in sides}
    _add_standard_calibrations(source, phases)
    return {
        **{name: row[name] for name in KEYS},
        "result": _result(row),
        "budget": budget_lines(row, phases),
        "interval": interval,
        "classification": class_account(row, interval, source.settings),
        **{f"{side}_phase": phase for side, phase in phases.items()},
        "alternatives": _alternatives(source.tables["partition.alternatives"], row),
    }


def _limit_rows(limits: pa.Table, key: Row) -> pa.Table:
    """The rows of `pair.limits` that belong to one mean."""
    return limits.filter(pa.array(chosen_rows(limits, {name: key[name] for name in GROUP})))


def _result(row: Row) -> dict[str, Any]:
    names = (
        "D", "D_sd", "D_lo", "D_hi", "confidence", "kind", "reason", "complete",
        "n_alpha", "n_beta", "n_independent_alpha", "n_independent_beta",
    )  # fmt: skip
    how = ["D = mean of alpha / mean of beta"]
    how += [] if row["interval"] == "likelihood" else [D_SD]
    return {"written": written(row), **{name: row[name] for name in names}, "how": how}


def _phase(source: Source, key: Row, pair_row: Row, calibration_cancels: bool) -> dict[str, Any]:
    """One phase mean with its spots and everything that made their values."""
    tables = source.tables
    # A part of a phase, such as its rims, is named by the settings; its standard is that of the whole phase.
    split, wholes = with_parts(tables["convert"], source.settings.pair)
    chosen = chosen_rows(split, key)
    at = np.flatnonzero(chosen)
    convert, ingest, screen = (
        tables[name].filter(pa.array(chosen)) for name in ("convert", "ingest", "screen")
    )
    unit = str(ingest.column("unit")[0].as_py())
    standard_key = {name: key[name] for name in STANDARD_KEYS} | {"phase": wholes[str(key["phase"])]}
    standard = internal_standard_account(tables, standard_key, source.settings.convert)
    assumed = assumed_by_spot(tables, standard_key, standard)
    units = unit_account(str(key["analyte"]), unit)
    spots = _spots(source, (convert, ingest, screen), key, units, standard, assumed)
    used = [spot for spot in spots if spot["use"]]
    measured = [spot for spot in used if spot["value_ppm"] is not None]
    account = _mean(source, measured, np.flatnonzero(flags(screen, "use")), at, pair_row)
    per_spot = ("sigma_used_ppm",) if account.get("units") else ("sigma_used_ppm", "weights")
    for name in per_spot:
        for spot, number in zip(measured, account.pop(name, ()), strict=False):
            spot[name.removesuffix("s")] = number
    calibration_key = {name: key[name] for name in CALIBRATION_KEYS}
    calibration = calibration_account(
        tables, calibration_key, source.settings.calibrate, cancels=calibration_cancels
    )
    table = table_settings(source.settings.ingest, str(used[0]["table"] if used else spots[0]["table"]))
    return {
        **{name: key[name] for name in ("phase", "technique", "batch", "analyte")},
        "calibration_key": calibration_key,
        "mean": account,
        "units": units | {"sigma": sigma_rule(table, unit)},
        "internal_standard": standard,
        "calibration": calibration,
        "drift": _drift(calibration, pair_row),
        "spots_used": [_without(spot, "use") for spot in used],
        "spots_left_out": [_without(spot, "use") for spot in spots if not spot["use"]],
    }  # fmt: skip


def _drift(calibration: Row | None, pair_row: Row) -> dict[str, Any] | None:
    """What a drift that stays in the values shifts a mean by; None where there is none."""
    if calibration is None or not calibration["drift_left"]:
        return None
    place, centre = pair_row["mean_sequence"], calibration["drift_centre"]
    shift = 0.0 if place is None or centre is None else calibration["drift_left"] * (place - centre)
    return {"mean_place": place, "centre": centre, "per_place": calibration["drift_left"], "shift": shift}


def _add_standard_calibrations(source: Source, phases: Mapping[str, dict[str, Any]]) -> None:
    """Beside every measured internal standard the calibration of its measurement, which both phases may share."""
    standards = [phase["internal_standard"] for phase in phases.values()]
    keys = [None if one is None else one["source_key"] for one in standards]
    for standard, key in zip(standards, keys, strict=True):
        if key is not None:
            standard["calibration"] = calibration_account(
                source.tables, key, source.settings.calibrate, cancels=keys[0] == keys[1]
            )


def _without(spot: dict[str, Any], name: str) -> dict[str, Any]:
    return {key: value for key, value in spot.items() if key != name}


def _mean(
    source: Source,
    measured: Sequence[Row],
    used_at: np.ndarray[Any, Any],
    at: np.ndarray[Any, Any],
    pair_row: Row,
) -> dict[str, Any]:
    """The account of the mean, and whether it agrees with the one of `pair`."""
    recorded = {name: pair_row[name] for name in ("n_used", "n_left_out", "n_below_limit", "n_limit_only")}
    if pair_row["n_limit_only"]:
        how = ["some values are known only as limits: no plain mean; see the limits under the interval"]
        return recorded | {
            "estimator": "likelihood",
            "mean_ppm": None,
            "se_ppm": None,
            "how": how,
            "agrees": True,
        }
    value, sigma = (
        np.array([np.nan if spot[name] is None else spot[name] for spot in measured], dtype=np.float64)
        for name in ("value_ppm", "sigma_ppm")
    )
    settings = source.settings.pair
    shared = np.array([spot.get("unmixed_shared_ppm") or 0.0 for spot in measured])
    account = mean_account(
        value, sigma, estimator=settings.mean,
        grain=grain_codes(source.tables["convert"])[at[used_at]] if settings.average == "grains" else None,
        common_ppm=float(shared.sum() / max(len(shared), 1)),
    )  # fmt: skip
    account = with_constant(account)
    account["agrees"] = all(
        _close(account[name], pair_row[name]) for name in ("mean_ppm", "se_ppm", "counting_se_ppm", "dof")
    )
    return recorded | account


def _close(one: float | None, two: float | None) -> bool:
    return one is two if one is None or two is None else abs(one - two) <= SAME * max(abs(one), abs(two))


def _spots(
    source: Source,
    parts: tuple[pa.Table, pa.Table, pa.Table],
    key: Row,
    units: Row,
    standard: Row | None,
    assumed: Mapping[Spot, Row],
) -> list[dict[str, Any]]:
    """Every spot of the group: value with its factors and cells, and what tests and people said of it."""
    convert, ingest, screen = (part.to_pylist() for part in parts)
    values = calibrated(
        parts[0],
        source.tables["calibrate"],
        source.tables["ingest.spots"],
        source.tables["convert.standards"],
    )
    sequence = sequence_of(parts[0], source.tables["ingest.spots"])
    remarks = _findings(source.tables["screen.findings"])
    cells = source_cells(
        source.files,
        source.settings.ingest,
        [(row["table"], row["row"]) for row in ingest],
        str(key["analyte"]),
    )
    unmixed = (
        numbers(parts[2], "unmixed_ppm")
        if "unmixed_ppm" in parts[2].column_names
        else np.full(len(ingest), np.nan)
    )
    spots = []
    for place, (raw, row, use) in enumerate(zip(ingest, convert, screen, strict=True)):
        spot = {name: raw[name] for name in ("spot", "table", "row", "grain", "zone", "distance_um")}
        spot |= {"use": use["use"], "cells": cells.get((raw["table"], raw["row"])), "raw": raw["raw"]}
        spot |= {name: raw[name] for name in ("value", "sigma", "limit", "below_limit")}
        standard_factor = 1.0 if standard is None else standard["factor"]
        if (raw["table"], raw["row"]) in assumed and standard is not None:
            spot["assumed"] = assumed[raw["table"], raw["row"]]
            standard_factor = standard["actual_ppm"] / spot["assumed"]["ppm"]
            spot["standard_factor"] = standard_factor
        spot |= _factors(raw, row, units, standard_factor)
        spot["sequence"] = int(sequence[place])
        for name in ("value", "sigma", "limit"):
            number = float(getattr(values, name)[place])
            spot[f"{name}_ppm"] = number if np.isfinite(number) else None
        # What is known only as a limit has no value to tell it.
        told = "value_ppm" if row["value_ppm"] and spot["value_ppm"] is not None else "limit_ppm"
        if row[told] and spot[told] is not None:
            spot["calibration_factor"] = row[told] / spot[told]
        if np.isfinite(unmixed[place]):
            spot |= {"measured_ppm": spot["value_ppm"], "value_ppm": float(unmixed[place])}
            spot |= {"sigma_ppm": use["unmixed_sigma_ppm"], "unmixed_shared_ppm": use["unmixed_shared_ppm"]}
        spot["why"] = use["why"]
        spot["findings"] = [
            finding
            for finding in remarks.get((raw["table"], raw["row"]), ())
            if finding["analyte"] is None or finding["analyte"] == raw["analyte"]
        ]
        spots.append(spot)
    return spots


def _factors(raw: Row, row: Row, units: Row, standard_factor: float | None) -> dict[str, Any]:
    """What is left of value_ppm / value after units and internal standard: normalisation, or iron added up."""
    if not raw["value"] or row["value_ppm"] is None:
        return {}
    plain = raw["value"] * units["ppm_per_unit"] * units["element_fraction"]
    factor = row["value_ppm"] / plain / (standard_factor or 1.0)
    return {} if abs(factor - 1.0) < SAME else {"other_factor": factor}


def _findings(findings: pa.Table) -> dict[tuple[str, int], list[dict[str, Any]]]:
    names = ("code", "analyte", "statistic", "threshold", "p_value", "action", "detail")
    by_spot: dict[tuple[str, int], list[dict[str, Any]]] = {}
    for row in findings.to_pylist():
        entry = {name: row[name] for name in names}
        if row["code"] == RULING:
            parts = ruling_parts(row)
            entry |= {name: parts[name] for name in ("analyst", "date", "reason")}
        by_spot.setdefault((row["table"], row["row"]), []).append(entry)
    return by_spot


def _alternatives(alternatives: pa.Table, row: Row) -> list[dict[str, Any]]:
    # Without their numbers: this page holds the values of the chosen means only.
    names = ("batch_alpha", "batch_beta", "analyte_alpha", "analyte_beta", "reason")
    found = rows_of(alternatives, {name: row[name] for name in KEYS})
    return [{name: one[name] for name in names} for one in found]
