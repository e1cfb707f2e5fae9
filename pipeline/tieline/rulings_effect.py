"""What a person's rulings do to the results: every D with and without them, and whether they lean one way.

No test sees a ruling on an unknown, so the use of the values without rulings follows from the findings alone; only
the experiments that a ruling touches are reduced again. A reference value that was ruled out may shift every value of
its batch, before any test: then the chain is computed again from the calibration on.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, Groups, counts, flags, group_rows, is_labelled, labels
from tieline.correction import calibrated
from tieline.reading.input_file import InputFile
from tieline.ruled_spots import reference_rows_ruled_out
from tieline.screen.findings import RULING
from tieline.settings import SessionSettings
from tieline.stages import NAMES, STAGES
from tieline.statistics.groups import divide, group_count, group_mean, group_sum

KEYS = ("experiment", "alpha", "beta", "element")
GROUP = ("experiment", "phase", "element", "technique", "batch", "analyte")
NEEDED = (
    "convert",
    "convert.standards",
    "calibrate",
    "screen",
    "screen.findings",
    "ingest.spots",
    "partition",
)

# Below three exclusions "all on one side" says nothing: two are on one side half of the time.
FEWEST_EXCLUSIONS = 3
FEWEST_FOR_SPREAD = 3
SHRUNK_TO = 0.5


@dataclass(frozen=True)
class RulingEffect:
    """One D with and without the rulings, as rows of `partition` (None: no such D).

    `change` is the difference in units of the smaller of the two standard uncertainties; None for limits.
    """

    with_rulings: Mapping[str, Any] | None
    without: Mapping[str, Any] | None
    change: float | None

    @property
    def key(self) -> tuple[str, ...]:
        row = self.with_rulings or self.without or {}
        return tuple(str(row[name]) for name in KEYS)


def has_rulings(findings: pa.Table) -> bool:
    """Whether any ruling was made."""
    return RULING in labels(findings, "code").texts


def ruling_effects(
    tables: Mapping[str, pa.Table],
    settings: SessionSettings,
    *,
    accepted: Mapping[str, InputFile],
    least_change: float = 1.0,
) -> list[RulingEffect]:
    """D's that the rulings change by more than `least_change` standard uncertainties, largest change first.

    tables: stage tables by name, those of `NEEDED` and whatever else `pair` and `partition` read; accepted: the
    file of accepted values. A D whose kind changes (value, limit, none) always counts.
    """
    findings = tables["screen.findings"]
    if not has_rulings(findings):
        return []
    if reference_rows_ruled_out(tables["convert"], findings).any():
        experiments = labels(tables["convert"], "experiment").texts
        without = _from_calibration(tables, settings, accepted)
    else:
        ruled = findings.filter(pa.array(labels(findings, "code").is_one_of((RULING,))))
        experiments = labels(ruled, "experiment").texts
        screen = without_rulings(tables["screen"], findings)
        if np.array_equal(flags(screen, "use"), flags(tables["screen"], "use")):
            return []
        without = _partition(tables, screen, experiments, settings)
    rows = _by_key(tables["partition"], experiments), _by_key(without, experiments)
    effects = [_effect(rows[0].get(key), rows[1].get(key)) for key in sorted({*rows[0], *rows[1]})]
    kept = [effect for effect in effects if effect is not None and _matters(effect, least_change)]
    return sorted(kept, key=lambda effect: -abs(effect.change) if effect.change is not None else -np.inf)


def without_rulings(screen: pa.Table, findings: pa.Table) -> pa.Table:
    """`screen` with `use` and `why` as the tests alone would have it."""
    rows = findings.to_pylist()
    ruled = {(row["table"], row["row"]) for row in rows if row["code"] == RULING}
    dropped: dict[tuple[str, int], list[tuple[str, str | None]]] = {}
    for row in rows:
        spot = (row["table"], row["row"])
        if spot in ruled and row["code"] != RULING and row["action"] == "drop":
            dropped.setdefault(spot, []).append((row["code"], row["analyte"]))
    table, row_number = labels(screen, "table"), counts(screen, "row")
    analyte = labels(screen, "analyte")
    use, why = flags(screen, "use").copy(), labels(screen, "why").text()
    touched = np.zeros(screen.num_rows, dtype=np.bool_)
    for path, row in ruled:
        touched |= (row_number == row) & table.is_one_of((path,))
    for place in np.flatnonzero(touched):
        if why[place] in ("not-measured", "reference-material"):
            continue
        spot = (table.texts[table.codes[place]], int(row_number[place]))
        name = analyte.texts[analyte.codes[place]]
        codes = [code for code, only in dropped.get(spot, []) if only is None or only == name]
        why[place] = ", ".join(dict.fromkeys(codes))
        use[place] = not codes
    for name, column in (("use", pa.array(use)), ("why", pa.array(why).dictionary_encode())):
        screen = screen.set_column(screen.column_names.index(name), screen.schema.field(name), [column])
    return screen


def _partition(
    tables: Mapping[str, pa.Table], screen: pa.Table, experiments: Sequence[str], settings: SessionSettings
) -> pa.Table:
    """`partition` of some experiments with another `screen`."""
    chosen = pa.array(labels(tables["convert"], "experiment").is_one_of(experiments))
    local = {**tables, "convert": tables["convert"].filter(chosen), "screen": screen.filter(chosen)}
    settings = _with_pairs_that_exist(settings, local["convert"])
    for name in ("pair", "partition"):
        local |= _computed(name, local, settings)
    return local["partition"]


def _from_calibration(
    tables: Mapping[str, pa.Table], settings: SessionSettings, accepted: Mapping[str, InputFile]
) -> pa.Table:
    """`partition` as it is where nobody ruled on anything."""
    local = dict(tables)
    files: dict[str, Mapping[str, InputFile]] = {"calibrate": accepted, "screen": {}}
    for name in ("calibrate", "screen", "pair", "partition"):
        local |= _computed(name, local, settings, **({"files": files[name]} if name in files else {}))
    return local["partition"]


def _computed(
    name: str, tables: Mapping[str, pa.Table], settings: SessionSettings, **files: Mapping[str, InputFile]
) -> Mapping[str, pa.Table]:
    """The tables of one stage, from those before it."""
    stage = STAGES[NAMES.index(name)]
    inputs = {table.replace(".", "_"): tables[table] for table in stage.inputs}
    return stage.function()(**inputs, **files, settings=stage.settings(settings)).tables


def _with_pairs_that_exist(settings: SessionSettings, convert: pa.Table) -> SessionSettings:
    """The configured pairs that can occur in a part of the session: `pair` refuses unknown phases."""
    if settings.pair.pairs is None:
        return settings
    phases = labels(convert, "phase").texts
    pairs = tuple(pair for pair in settings.pair.pairs if all(phase in phases for phase in pair))
    return settings.model_copy(update={"pair": settings.pair.model_copy(update={"pairs": pairs})})


def _by_key(table: pa.Table, experiments: Sequence[str]) -> dict[tuple[str, ...], dict[str, Any]]:
    chosen = table.filter(pa.array(labels(table, "experiment").is_one_of(experiments)))
    return {tuple(row[name] for name in KEYS): row for row in chosen.to_pylist()}


def _effect(one: dict[str, Any] | None, other: dict[str, Any] | None) -> RulingEffect | None:
    if one is None or other is None or one["D"] is None or other["D"] is None:
        return RulingEffect(one, other, None)
    known = [row["D_sd"] for row in (one, other) if row["D_sd"]]
    return RulingEffect(one, other, (one["D"] - other["D"]) / min(known) if known else None)


def _matters(effect: RulingEffect, least_change: float) -> bool:
    if effect.change is not None:
        return abs(effect.change) > least_change
    kinds = [None if row is None else row["kind"] for row in (effect.with_rulings, effect.without)]
    return kinds[0] != kinds[1]


def leaning_remarks(tables: Mapping[str, pa.Table]) -> list[str]:
    """Where hand exclusions all lie on one side of the mean, or shrink the spread by more than half.

    Only values that a ruling alone leaves out count. The side is taken from the mean of the values used, by
    phase, or reference material, and analyte over all experiments, with at least three exclusions; the spread is the standard
    deviation of at least three values used, with and without the excluded ones.
    """
    if not has_rulings(tables["screen.findings"]):
        return []
    convert, screen = tables["convert"], tables["screen"]
    value = calibrated(
        convert, tables["calibrate"], tables["ingest.spots"], tables["convert.standards"]
    ).value
    measured = np.isfinite(value)
    references = reference_rows_ruled_out(convert, tables["screen.findings"]) & measured
    parts = (
        ("phase", labels(screen, "why").is_one_of((RULING,)) & measured, flags(screen, "use") & measured),
        ("material", references, is_labelled(convert, "material") & measured & ~references),
    )
    return [
        line
        for name, excluded, used in parts
        if excluded.any()
        for line in _leaning(convert, name, value, used, excluded)
    ]


def _leaning(
    convert: pa.Table, name: str, value: FloatArray, used: BoolArray, excluded: BoolArray
) -> list[str]:
    """The remarks on exclusions from phases or, by the column `name`, from reference materials."""
    columns = [labels(convert, name if column == "phase" else column) for column in GROUP]
    groups = group_rows(columns, used | excluded)
    code, size = groups.code, groups.count
    mean = group_mean(value[used], code[used], size)
    side = np.sign(value[excluded] - mean[code[excluded]])
    return [
        *_one_sided(groups, code[excluded], side),
        *_shrunk(groups, value, used, excluded),
    ]


def _one_sided(groups: Groups, code: np.ndarray[Any, Any], side: FloatArray) -> list[str]:
    sides: dict[tuple[str, str], list[float]] = {}
    for group, sign in zip(code, side, strict=True):
        if np.isfinite(sign):
            sides.setdefault((str(groups.keys[group][1]), str(groups.keys[group][5])), []).append(float(sign))
    lines = []
    for word, sign in (("above", 1.0), ("below", -1.0)):
        by_phase: dict[str, list[str]] = {}
        for (phase, analyte), signs in sorted(sides.items()):
            if len(signs) >= FEWEST_EXCLUSIONS and all(one == sign for one in signs):
                by_phase.setdefault(phase, []).append(f"{analyte} ({len(signs)})")
        lines += [
            f"hand exclusions of {phase} all lie {word} the mean: {', '.join(names)}"
            for phase, names in by_phase.items()
        ]
    return lines


def _shrunk(groups: Groups, value: FloatArray, used: BoolArray, excluded: BoolArray) -> list[str]:
    with_them = _deviation(groups, value, used | excluded)
    left = _deviation(groups, value, used)
    n_used = group_count(groups.code[used], groups.count)
    touched = group_count(groups.code[excluded], groups.count) > 0
    shrunk = touched & (n_used >= FEWEST_FOR_SPREAD) & (left < SHRUNK_TO * with_them)
    by_phase: dict[tuple[str, str], list[str]] = {}
    for group in np.flatnonzero(shrunk):
        key = groups.keys[group]
        # Spots on reference materials belong to no experiment, but to a batch.
        by_phase.setdefault((str(key[0] or key[4]), str(key[1])), []).append(str(key[5]))
    return [
        f"hand exclusions shrink the spread by more than half in {phase} of {experiment}: {', '.join(names)}"
        for (experiment, phase), names in sorted(by_phase.items())
    ]


def _deviation(groups: Groups, value: FloatArray, rows: BoolArray) -> FloatArray:
    """Standard deviation of every group over the chosen rows."""
    code, size = groups.code[rows], groups.count
    centred = value[rows] - group_mean(value[rows], code, size)[code]
    return np.sqrt(divide(group_sum(centred**2, code, size), np.maximum(group_count(code, size) - 1, 0)))
