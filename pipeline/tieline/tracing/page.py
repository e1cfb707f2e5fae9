"""The page of one D: result, budget, and for both phases the mean, its spots and where their values come from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, flags, labels, numbers, spot_codes
from tieline.auditing.summary import ruling_parts
from tieline.correction import calibrated, sequence_of
from tieline.errors import InputError, Problem, nearest
from tieline.notation import written
from tieline.reading.input_file import InputFile
from tieline.screen.findings import RULING
from tieline.settings import SessionSettings
from tieline.tracing.cells import sigma_rule, source_cells, table_settings
from tieline.tracing.factors import calibration_account, internal_standard_account, unit_account
from tieline.tracing.interval import class_account, interval_account
from tieline.tracing.means import mean_account, with_constant

Row = Mapping[str, Any]
KEYS = ("experiment", "alpha", "beta", "element")
GROUP = ("experiment", "phase", "element", "technique", "batch", "analyte")
SAME = 1e-9


@dataclass(frozen=True)
class Source:
    """What a page is made from: all stage tables by name, the settings in effect and the input files."""

    tables: Mapping[str, pa.Table]
    settings: SessionSettings
    files: Mapping[str, InputFile]


def trace(source: Source, experiment: str, alpha: str, beta: str, element: str) -> dict[str, Any]:
    """The page of one D as a tree of plain data. Raises InputError where there is no such D, naming what there is."""
    row = _find(source.tables["classify"], experiment, alpha, beta, element)
    sides = {"alpha": alpha, "beta": beta}
    groups = {
        side: {"experiment": experiment, "phase": phase, "element": element}
        | {name: row[f"{name}_{side}"] for name in ("technique", "batch", "analyte")}
        for side, phase in sides.items()
    }
    same_batch = groups["alpha"]["batch"] == groups["beta"]["batch"]
    pair_rows = {side: _rows(source.tables["pair"], groups[side])[0] for side in sides}
    limits = {side: _limit_rows(source.tables["pair.limits"], groups[side]) for side in sides}
    interval = interval_account(row, pair_rows, limits)
    phases = {side: _phase(source, groups[side], pair_rows[side], same_batch) for side in sides}
    return {
        **{name: row[name] for name in KEYS},
        "result": _result(row),
        "budget": _budget(row, phases, same_batch),
        "interval": interval,
        "classification": class_account(row, interval, source.settings),
        **{f"{side}_phase": phase for side, phase in phases.items()},
        "alternatives": _alternatives(source.tables["partition.alternatives"], row),
    }


def _find(classify: pa.Table, experiment: str, alpha: str, beta: str, element: str) -> Row:
    wanted = dict(zip(KEYS, (experiment, alpha, beta, element), strict=True))
    rows = classify.to_pylist()
    for name in KEYS:
        known = list(dict.fromkeys(row[name] for row in rows))
        rows = [row for row in rows if row[name] == wanted[name]]
        if not rows:
            what = {"alpha": "numerator phase", "beta": "denominator phase"}.get(name, name)
            remedy = nearest(str(wanted[name]), known) or f"There are: {', '.join(known)}."
            raise InputError(Problem(f'no D with the {what} "{wanted[name]}" here.', remedy=remedy))
    found: Row = rows[0]
    return found


def _rows(table: pa.Table, where: Row) -> list[dict[str, Any]]:
    rows: list[dict[str, Any]] = table.filter(pa.array(_chosen(table, where))).to_pylist()
    return rows


def _chosen(table: pa.Table, where: Row) -> BoolArray:
    chosen = np.ones(table.num_rows, dtype=np.bool_)
    for name, text in where.items():
        chosen &= labels(table, name).is_one_of((str(text),))
    return chosen


def _limit_rows(limits: pa.Table, key: Row) -> pa.Table:
    """The rows of `pair.limits` that belong to one mean."""
    names = ("experiment", "phase", "element", "batch", "analyte")
    return limits.filter(pa.array(_chosen(limits, {name: key[name] for name in names})))


def _result(row: Row) -> dict[str, Any]:
    names = ("D", "D_sd", "D_lo", "D_hi", "confidence", "kind", "reason", "n_alpha", "n_beta")
    how = ["D = mean of alpha / mean of beta", "D_sd = |D| · √(sum of the squares in the budget)"]
    return {"written": written(row), **{name: row[name] for name in names}, "how": how}


def _budget(row: Row, phases: Mapping[str, Row], same_batch: bool) -> list[dict[str, Any]]:
    """Relative standard uncertainty of both means by source, whether it cancels, and its share of D_sd squared."""
    parts = {side: _relative_parts(row, side, phases[side]) for side in ("alpha", "beta")}
    lines: list[dict[str, Any]] = []
    for name in parts["alpha"]:
        first, second = parts["alpha"][name], parts["beta"][name]
        cancels = name == "calibration" and same_batch
        squared = 0.0 if cancels else (first or 0.0) ** 2 + (second or 0.0) ** 2
        lines.append({"source": name, "alpha": first, "beta": second, "cancels": cancels, "squared": squared})
    total = sum(line["squared"] for line in lines)
    known = row["share_counting"] is not None and total > 0
    return [line | {"share": line["squared"] / total if known else None} for line in lines]


def _relative_parts(row: Row, side: str, phase: Row) -> dict[str, float | None]:
    mean, se, counting = (row[f"{name}_{side}_ppm"] for name in ("mean", "se", "counting_se"))
    if not mean or se is None:
        own: dict[str, float | None] = {"counting": None, "spread": None}
    else:
        # What counting alone would give can exceed what the scatter shows; D_sd is that of the scatter.
        part = min(counting, se) if counting is not None else 0.0
        own = {"counting": part / abs(mean), "spread": max(se**2 - part**2, 0.0) ** 0.5 / abs(mean)}
    calibration, standard = phase["calibration"], phase["internal_standard"]
    return own | {
        "calibration": None if calibration is None else calibration["relative_sd"],
        "matrix": None if calibration is None else calibration["matrix_sd"],
        "internal standard": None if standard is None else standard["relative_sd"],
    }


def _phase(source: Source, key: Row, pair_row: Row, calibration_cancels: bool) -> dict[str, Any]:
    """One phase mean with its spots and everything that made their values."""
    tables = source.tables
    chosen = _chosen(tables["convert"], key)
    at = np.flatnonzero(chosen)
    convert, ingest, screen = (
        tables[name].filter(pa.array(chosen)) for name in ("convert", "ingest", "screen")
    )
    calibrate_key = {name: key[name] for name in ("batch", "element")}
    unit = str(ingest.column("unit")[0].as_py())
    standard = internal_standard_account(
        tables["convert"], tables["ingest"],
        {name: key[name] for name in ("experiment", "phase", "technique")},
        source.settings.convert.internal_standard,
    )  # fmt: skip
    units = unit_account(str(key["analyte"]), unit)
    spots = _spots(source, (convert, ingest, screen), key, units, standard)
    used = [spot for spot in spots if spot["use"]]
    measured = [spot for spot in used if spot["value_ppm"] is not None]
    account = _mean(source, measured, np.flatnonzero(flags(screen, "use")), at, pair_row)
    per_spot = ("sigma_used_ppm",) if account.get("units") else ("sigma_used_ppm", "weights")
    for name in per_spot:
        for spot, number in zip(measured, account.pop(name, ()), strict=False):
            spot[name.removesuffix("s")] = number
    table = table_settings(source.settings.ingest, str(used[0]["table"] if used else spots[0]["table"]))
    return {
        **{name: key[name] for name in ("phase", "technique", "batch", "analyte")},
        "mean": account,
        "units": units | {"sigma": sigma_rule(table, unit)},
        "internal_standard": standard,
        "calibration": calibration_account(
            tables, calibrate_key, source.settings.calibrate, cancels=calibration_cancels
        ),
        "spots_used": [_without(spot, "use") for spot in used],
        "spots_left_out": [_without(spot, "use") for spot in spots if not spot["use"]],
    }  # fmt: skip


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
        grain=_grains(source.tables["convert"], at[used_at]) if settings.average == "grains" else None,
        common_ppm=float(shared.sum() / max(len(shared), 1)),
    )  # fmt: skip
    account = with_constant(account)
    account["agrees"] = all(
        _close(account[name], pair_row[name]) for name in ("mean_ppm", "se_ppm", "counting_se_ppm", "dof")
    )
    return recorded | account


def _grains(convert: pa.Table, rows: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    grain = labels(convert, "grain")
    spot, _ = spot_codes(convert)
    return np.asarray(np.where(grain.codes >= 0, grain.codes, len(grain.texts) + spot)[rows])


def _close(one: float | None, two: float | None) -> bool:
    return one is two if one is None or two is None else abs(one - two) <= SAME * max(abs(one), abs(two))


def _spots(
    source: Source, parts: tuple[pa.Table, pa.Table, pa.Table], key: Row, units: Row, standard: Row | None
) -> list[dict[str, Any]]:
    """Every spot of the group: value with its factors and cells, and what tests and people said of it."""
    convert, ingest, screen = (part.to_pylist() for part in parts)
    values = calibrated(
        parts[0], source.tables["calibrate"], source.tables["ingest.spots"], source.tables["convert.standards"]
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
        spot |= _factors(raw, row, units, standard)
        spot["sequence"] = int(sequence[place])
        for name in ("value", "sigma", "limit"):
            number = float(getattr(values, name)[place])
            spot[f"{name}_ppm"] = number if np.isfinite(number) else None
        if row["value_ppm"] and spot["value_ppm"] is not None:
            spot["calibration_factor"] = row["value_ppm"] / spot["value_ppm"]
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


def _factors(raw: Row, row: Row, units: Row, standard: Row | None) -> dict[str, Any]:
    """What is left of value_ppm / value after units and internal standard: normalisation, or iron added up."""
    if not raw["value"] or row["value_ppm"] is None:
        return {}
    plain = raw["value"] * units["ppm_per_unit"] * units["element_fraction"]
    factor = row["value_ppm"] / plain / (standard["factor"] if standard is not None else 1.0)
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
    found = _rows(alternatives, {name: row[name] for name in KEYS})
    return [{name: one[name] for name in names} for one in found]
