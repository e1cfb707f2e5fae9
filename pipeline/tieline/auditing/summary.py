"""What a lab manager asks of a reduction: what was left out, by whom, which settings, did the references pass."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import flags, is_labelled, labels, numbers
from tieline.auditing.folder import RunFolder
from tieline.chemistry.phases import PHASES
from tieline.ruled_spots import reference_rows_ruled_out
from tieline.rulings_effect import NEEDED, leaning_remarks
from tieline.screen.counting import counts_by_test
from tieline.screen.findings import RULING
from tieline.stages import STAGES

# The form that the stage `screen` gives the detail of a ruling.
RULING_DETAIL = re.compile(r"(?P<reason>.*) \((?P<analyst>.*), (?P<date>[^,()]+)\)", re.DOTALL)


def account(folder: RunFolder) -> list[dict[str, Any]]:
    """What entered every stage and what became of it, as the stages recorded it."""
    rows = []
    for stage in STAGES:
        file = folder.files.get(stage.name)
        if file is not None and file.record is not None:
            rows.append({"stage": stage.name, **file.record["ledger"]})
    return rows


def left_out(folder: RunFolder) -> dict[str, Any]:
    """Counts by test, every ruling, and what `ingest` set aside."""
    screen, findings = folder.table("screen"), folder.table("screen.findings")
    if screen is None or findings is None:
        return {"tests": [], "rulings": [], "set_aside": _set_aside(folder)}
    values = _values_by_code(screen)
    tests = [
        {
            "test": count.code,
            "spots_found": count.caught,
            "spots_only_by_this": count.only_caught,
            "spots_left_out": count.left_out,
            "values_left_out": values.get(count.code, 0),
        }
        for count in counts_by_test(screen, findings)
    ]
    return {
        "tests": tests,
        "rulings": rulings(findings, folder.table("ingest.spots")),
        "set_aside": _set_aside(folder),
    }


def _values_by_code(screen: pa.Table) -> dict[str, int]:
    why = labels(screen, "why")
    number = np.bincount(why.codes[why.codes >= 0], minlength=len(why.texts))
    values: dict[str, int] = {}
    for text, count in zip(why.texts, number.tolist(), strict=True):
        for code in text.split(", "):
            values[code] = values.get(code, 0) + count
    return values


def rulings(findings: pa.Table, spots: pa.Table | None = None) -> list[dict[str, Any]]:
    """Every ruling with spot, verdict, person, date and reason; and the reference material that the spot is on."""
    rows = findings.filter(pa.array(labels(findings, "code").is_one_of((RULING,)))).to_pylist()
    material = _materials_of_spots(spots) if rows and spots is not None else {}
    return [ruling_parts(row) | {"material": material.get((row["table"], row["row"]))} for row in rows]


def _materials_of_spots(spots: pa.Table) -> dict[tuple[str, int], str]:
    of_materials = spots.filter(pa.array(is_labelled(spots, "material"))).select(["table", "row", "material"])
    return {(row["table"], row["row"]): row["material"] for row in of_materials.to_pylist()}


def ruling_parts(finding: Mapping[str, Any]) -> dict[str, Any]:
    """A ruling's finding with person, date and reason told apart."""
    parts = RULING_DETAIL.fullmatch(finding["detail"])
    who = parts.groupdict() if parts else {"reason": finding["detail"], "analyst": None, "date": None}
    names = ("spot", "table", "row", "experiment", "phase", "analyte")
    return {name: finding[name] for name in names} | {"verdict": finding["action"], **who}


def _set_aside(folder: RunFolder) -> list[dict[str, Any]]:
    table = folder.table("ingest.set_aside")
    reasons: dict[tuple[str, str], dict[str, Any]] = {}
    for row in table.to_pylist() if table is not None else []:
        key = row["table"], row["reason"]
        entry = reasons.setdefault(
            key, {"table": key[0], "reason": key[1], "lines": 0, "cells": 0, "first_row": row["row"]}
        )
        entry["lines"] += 1
        entry["cells"] += row["cells"]
    return list(reasons.values())


def leaning(folder: RunFolder) -> list[str]:
    """Where hand exclusions lean one way."""
    tables = {name: folder.table(name) for name in NEEDED}
    known = {name: table for name, table in tables.items() if table is not None}
    return leaning_remarks(known) if len(known) == len(tables) else []


def reference_materials(folder: RunFolder) -> list[dict[str, Any]]:
    """Per batch and material: elements that pass the laboratory's limit, and each that does not; and how many
    values and spots of it a person ruled out."""
    table = folder.table("calibrate.materials")
    groups: dict[tuple[str, str, str], dict[str, Any]] = {}

    def entry_of(row: Mapping[str, Any]) -> dict[str, Any]:
        names = ("technique", "batch", "material")
        new = {"n_spots": 0, "passed": 0, "failed": [], "without_accepted_value": 0}
        new |= {"values_ruled_out": 0, "spots_ruled_out": 0}
        return groups.setdefault(
            (row[names[0]], row[names[1]], row[names[2]]), {**{name: row[name] for name in names}, **new}
        )

    for row in table.to_pylist() if table is not None else []:
        entry = entry_of(row)
        entry["n_spots"] = max(entry["n_spots"], row["n_spots"])
        if row["passed"] is None:
            entry["without_accepted_value"] += 1
        elif row["passed"]:
            entry["passed"] += 1
        else:
            entry["failed"].append({name: row[name] for name in ("element", "ratio", "ratio_se")})
    seen = set()
    for row in values_ruled_out(folder):
        entry = entry_of(row)
        entry["values_ruled_out"] += 1
        entry["spots_ruled_out"] += (row["table"], row["row"]) not in seen
        seen.add((row["table"], row["row"]))
    return list(groups.values())


def values_ruled_out(folder: RunFolder) -> list[dict[str, Any]]:
    """Measured values of reference materials that a ruling keeps out of the calibration, by their labels."""
    convert, findings = folder.table("convert"), folder.table("screen.findings")
    if convert is None or findings is None:
        return []
    ruled = reference_rows_ruled_out(convert, findings) & np.isfinite(numbers(convert, "value_ppm"))
    names = ["technique", "batch", "material", "table", "row"]
    rows: list[dict[str, Any]] = convert.select(names).filter(pa.array(ruled)).to_pylist()
    return rows


def unmatched_labels(folder: RunFolder) -> list[str]:
    """Labels that nothing else knows: phases, experiments without conditions, conditions without spots."""
    spots, conditions = folder.table("ingest.spots"), folder.table("ingest.experiments")
    if spots is None or folder.settings is None:
        return []
    ingest = folder.settings.ingest
    unknown = spots.filter(pa.array(labels(spots, "material").codes < 0))
    phases, experiments = labels(unknown, "phase"), labels(unknown, "experiment")
    known = {*PHASES, *ingest.phases}
    lines = [f'phase "{name}" is not a known phase' for name in phases.texts if name not in known]
    if conditions is not None and ingest.experiments is not None:
        described = labels(conditions, "experiment").texts
        lines += [
            f'experiment "{name}" has no conditions in {ingest.experiments.path}'
            for name in experiments.texts
            if name not in described
        ]
        lines += [
            f'experiment "{name}" of {ingest.experiments.path} has no spots'
            for name in described
            if name not in experiments.texts
        ]
    measured = labels(spots, "material").texts
    lines += [
        f'reference material "{name}" has no spots'
        for name in ingest.reference_materials.names
        if name not in measured
    ]
    return lines


def remarks(folder: RunFolder) -> list[str]:
    """What the stages remarked, as they recorded it."""
    lines = []
    for stage in STAGES:
        file = folder.files.get(stage.name)
        for remark in (file.record or {}).get("remarks", []) if file is not None else []:
            place = f"{remark['place']}: " if remark["place"] else ""
            text = f"{place}{remark['message']}"
            lines.append(text if text.startswith(f"{stage.name}: ") else f"{stage.name}: {text}")
    return lines


def used_values(folder: RunFolder) -> dict[str, int] | None:
    """Values of unknowns, and how many of them are used."""
    screen = folder.table("screen")
    if screen is None:
        return None
    unknown = labels(screen, "material").codes < 0
    return {"of_unknowns": int(unknown.sum()), "used": int((flags(screen, "use") & unknown).sum())}
