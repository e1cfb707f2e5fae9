"""What differs between two reductions: settings, spots used and by which rule, D in units of its σ, classes.

Runs of other versions are compared as far as they go: a column that one of them lacks counts as empty.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from tieline.errors import InputError, Problem
from tieline.manifest import EFFECTIVE, read_manifest
from tieline.plan import settings_differences, table_path
from tieline.ruled_spots import RULING
from tieline.run_folders import run_folder_problem

KEYS = ("experiment", "alpha", "beta", "element")
READ = {
    "classify": (*KEYS, "D", "D_sd", "D_lo", "D_hi", "kind", "confidence", "class", "n_alpha", "n_beta"),
    "screen": ("table", "spot", "analyte", "experiment", "phase", "material", "use", "why"),
    "screen.findings": ("table", "spot", "analyte", "code", "detail", "action"),
}
# What names a run and its places, and says nothing of how it was reduced.
NAMES_AND_PLACES = ("session", "out", "report", "about")
LAST_DIGITS = 1e-9


@dataclass(frozen=True)
class Reduction:
    """One run folder: settings in effect, manifest, and the rows of its tables with the columns of `READ`."""

    path: str
    settings: Mapping[str, Any]
    manifest: Mapping[str, Any]
    rows: Mapping[str, list[dict[str, Any]]]


def read_reductions(*run_folders: Path) -> list[Reduction]:
    """All of them, or one InputError with what is wrong with any."""
    read: list[Reduction] = []
    problems: list[Problem] = []
    for run_folder in run_folders:
        try:
            read.append(read_reduction(run_folder))
        except InputError as error:
            problems += error.problems
    if problems:
        raise InputError(dict.fromkeys(problems))
    return read


def read_reduction(run_folder: Path) -> Reduction:
    """Raises InputError where it is no run folder, lacks a stage file or its settings, or they cannot be read."""
    problem = run_folder_problem(run_folder)
    if problem is not None:
        raise InputError(problem)
    problems, rows = [], {}
    for name, columns in READ.items():
        try:
            rows[name] = _rows(pq.read_table(table_path(run_folder, name)), columns)
        except (OSError, ValueError, pa.ArrowException) as error:
            problems.append(_unreadable(table_path(run_folder, name), error))
    try:
        settings = tomllib.loads((run_folder / EFFECTIVE).read_bytes().decode())
    except (OSError, ValueError) as error:
        problems.append(_unreadable(run_folder / EFFECTIVE, error))
    if problems:
        raise InputError(problems)
    return Reduction(str(run_folder), settings, read_manifest(run_folder), rows)


def _unreadable(path: Path, error: Exception) -> Problem:
    missing = isinstance(error, FileNotFoundError)
    own = error.strerror if isinstance(error, OSError) else None
    what = (own or str(error).strip() or type(error).__name__).splitlines()[0]
    reason = "no such file" if missing else f"cannot be read ({what})"
    return Problem(f"{reason}.", str(path), remedy="Name folders of complete runs, such as <out>/<session>.")


def _rows(table: pa.Table, columns: Iterable[str]) -> list[dict[str, Any]]:
    present = [name for name in columns if name in table.column_names]
    absent = dict.fromkeys(name for name in columns if name not in table.column_names)
    return [{**absent, **row} for row in table.select(present).to_pylist()]


def compare(a: Reduction, b: Reduction) -> dict[str, Any]:
    """Everything that differs, as plain data; `a` is what the changes are counted from."""
    D = changed_coefficients(a.rows["classify"], b.rows["classify"])
    return {
        "a": a.path,
        "b": b.path,
        "versions": version_differences(a.manifest, b.manifest),
        "settings": settings_differences(_of_reduction(a), _of_reduction(b), longest=None),
        "inputs": input_differences(a.manifest, b.manifest),
        "spots": changed_use(a, b),
        "D": D,
        "D_compared": len(
            {_key(row) for row in a.rows["classify"]} & {_key(row) for row in b.rows["classify"]}
        ),
        "classes": changed_classes(a.rows["classify"], b.rows["classify"]),
    }


def _of_reduction(run: Reduction) -> dict[str, Any]:
    return {key: value for key, value in run.settings.items() if key not in NAMES_AND_PLACES}


def version_differences(a: Mapping[str, Any], b: Mapping[str, Any]) -> list[str]:
    """Program version and stage revisions that differ."""
    lines = settings_differences({"tieline": a.get("tieline")}, {"tieline": b.get("tieline")})
    one, two = (
        {name: stage.get("revision") for name, stage in manifest.get("stages", {}).items()}
        for manifest in (a, b)
    )
    return [*lines, *settings_differences(one, two, "revision of")] if one and two else lines


def input_differences(a: Mapping[str, Any], b: Mapping[str, Any]) -> list[str]:
    """Input files that one run has and the other has not, or has with other contents."""
    one, two = a.get("inputs", {}), b.get("inputs", {})
    lines = []
    for path in sorted({*one, *two}):
        if path not in one or path not in two:
            lines.append(f"{path} is only in {'B' if path in two else 'A'}")
        elif one[path] != two[path]:
            lines.append(f"{path} has other contents")
    return lines


def changed_use(a: Reduction, b: Reduction) -> list[dict[str, Any]]:
    """Spots with values used in one run and not in the other, and the rule that left them out.

    A value of a reference material is used where no ruling keeps it out of the calibration.
    One entry per spot, run and rule, with the analytes it holds for; `rule` is a finding's code, `ruling`,
    or `absent` where the other run has no such value.
    """
    keys = _spot_keys(a.rows["screen"], b.rows["screen"])
    one, two = ({keys(row): row for row in run.rows["screen"] if not row["material"]} for run in (a, b))
    ruled = [_ruled_references(run, keys) for run in (a, b)]
    for rows, run, own in zip((one, two), (a, b), ruled, strict=True):
        rows |= {
            keys(row): {**row, "use": keys(row) not in own, "why": RULING if keys(row) in own else ""}
            for row in run.rows["screen"]
            if row["material"] and keys(row) in ruled[0] | ruled[1]
        }
    details = {"A": _details(a, keys), "B": _details(b, keys)}
    entries: dict[tuple[Any, ...], dict[str, Any]] = {}
    for key in [*one, *(key for key in two if key not in one)]:
        first, second = one.get(key), two.get(key)
        used = [row is not None and bool(row["use"]) for row in (first, second)]
        if used[0] == used[1]:
            continue
        where, present = ("A", first) if used[0] else ("B", second)
        other, absent_in = (second, "B") if used[0] else (first, "A")
        assert present is not None
        rule = "absent" if other is None else other["why"] or "not known"
        entry = entries.setdefault(
            (key[:-1], where, rule),
            {name: present[name] for name in ("spot", "table", "experiment", "phase", "material")}
            | {"used_in": where, "rule": rule, "detail": "", "analytes": []},
        )
        entry["analytes"].append(present["analyte"])
        entry["detail"] = entry["detail"] or details[absent_in].get((key, rule.split(", ")[0]), "")
    return list(entries.values())


def _ruled_references(run: Reduction, keys: Any) -> set[Any]:
    """Values of reference materials that a ruling drops; one on an analyte goes before one on its whole spot."""
    rulings: dict[Any, dict[str | None, str]] = {}
    for finding in run.rows["screen.findings"]:
        if finding["code"] == RULING:
            rulings.setdefault(keys(finding)[:-1], {})[finding["analyte"]] = finding["action"]
    dropped = set()
    for row in run.rows["screen"] if rulings else ():
        own = rulings.get(keys(row)[:-1], {}) if row["material"] else {}
        if own.get(row["analyte"], own.get(None)) == "drop":
            dropped.add(keys(row))
    return dropped


def _spot_keys(one: list[dict[str, Any]], two: list[dict[str, Any]]) -> Any:
    """How values of two runs are matched: by table, spot and analyte; without the table where paths differ."""
    tables = [{row["table"] for row in rows} for rows in (one, two)]
    unique = all(len({(row["spot"], row["analyte"]) for row in rows}) == len(rows) for rows in (one, two))
    names = ("spot", "analyte") if not tables[0] & tables[1] and unique else ("table", "spot", "analyte")
    return lambda row: tuple(row[name] for name in names)


def _details(run: Reduction, keys: Any) -> dict[tuple[Any, str], str]:
    """Words of the finding for every value and code; one on a whole spot holds for all its analytes."""
    by_spot: dict[Any, list[dict[str, Any]]] = {}
    for finding in run.rows["screen.findings"]:
        by_spot.setdefault(keys(finding)[:-1], []).append(finding)
    return {
        (keys(row), finding["code"]): finding["detail"]
        for row in run.rows["screen"]
        for finding in by_spot.get(keys(row)[:-1], ())
        if finding["analyte"] is None or finding["analyte"] == row["analyte"]
    }


def changed_coefficients(one: list[dict[str, Any]], two: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """D's that changed by more than the last digits, largest change first, then changes of kind.

    `change_in_sigma`: (D of B − D of A) over the smaller of their standard uncertainties; None where one of
    them is a limit or missing. A D with the same value and another uncertainty is listed with change 0.
    """
    a, b = ({_key(row): row for row in rows} for rows in (one, two))
    entries = []
    for key in [*a, *(key for key in b if key not in a)]:
        first, second = a.get(key), b.get(key)
        if first is not None and second is not None and _same(first, second):
            continue
        entries.append(
            dict(zip(KEYS, key, strict=True))
            | {"a": _result(first), "b": _result(second), "change_in_sigma": _change(first, second)}
        )

    def order(entry: dict[str, Any]) -> tuple[float, tuple[str, ...]]:
        change = entry["change_in_sigma"]
        return (math.inf if change is None else -abs(change), tuple(str(entry[name]) for name in KEYS))

    return sorted(entries, key=order)


def changed_classes(one: list[dict[str, Any]], two: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """D's of both runs whose class differs."""
    other = {_key(row): row["class"] for row in two}
    return [
        dict(zip(KEYS, key, strict=True)) | {"a": row["class"], "b": other[key]}
        for row in one
        if (key := _key(row)) in other and other[key] != row["class"]
    ]


def _key(row: Mapping[str, Any]) -> tuple[Any, ...]:
    return tuple(row[name] for name in KEYS)


def _result(row: Mapping[str, Any] | None) -> dict[str, Any] | None:
    return None if row is None else {name: value for name, value in row.items() if name not in KEYS}


def _same(one: Mapping[str, Any], two: Mapping[str, Any]) -> bool:
    if one["kind"] != two["kind"]:
        return False
    return all(_close(one[name], two[name]) for name in ("D", "D_sd", "D_lo", "D_hi"))


def _close(one: float | None, two: float | None) -> bool:
    if one is None or two is None:
        return one is two
    return math.isclose(one, two, rel_tol=LAST_DIGITS)


def _change(one: Mapping[str, Any] | None, two: Mapping[str, Any] | None) -> float | None:
    if one is None or two is None or one["D"] is None or two["D"] is None:
        return None
    known = [row["D_sd"] for row in (one, two) if row["D_sd"]]
    return (two["D"] - one["D"]) / min(known) if known else None
