"""The data that the page's pictures and tables are drawn from, as one JSON-like structure."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from tieline.arrays import IntArray, flags, labels
from tieline.chemistry.elements import ATOMIC_NUMBER
from tieline.chemistry.phases import PHASES
from tieline.chemistry.radii import ionic_radius, usual_charges
from tieline.notation import written
from tieline.report.compact import coded, columns_of, finite, rounded
from tieline.report.evidence_data import balance_data, exchange_data, trend_data
from tieline.report.source import Source, optional_table
from tieline.report.spots import SpotUse
from tieline.report.sums import formula_sums

# Digits in pictures and in the list of one spot's values; the D's keep all of theirs.
VALUE_DIGITS, SIGMA_DIGITS = 5, 3
# Where a crystal's large site is not known, its trace cations are taken as six-coordinated.
USUAL_COORDINATION = 6


@dataclass(frozen=True)
class Curve:
    """A curve through D against ionic radius: `label`, radii in Å and D, with the ends of its band where known."""

    experiment: str
    alpha: str
    beta: str
    label: str
    radius: Sequence[float]
    D: Sequence[float]
    D_lo: Sequence[float] = ()
    D_hi: Sequence[float] = ()


def page_data(source: Source, spots: SpotUse, curves: Sequence[Curve] = ()) -> dict[str, Any]:
    """Everything the scripts of the page need; plain lists, texts and numbers."""
    classify = source.settings.classify
    return {
        "session": source.title,
        "confidence": source.confidence,
        "assessConfidence": source.settings.assess.confidence,
        "compatibleAbove": classify.compatible_above,
        "highlyBelow": classify.highly_incompatible_below,
        "spots": _spots(spots),
        **_values(source, spots),
        "findings": _findings(source, spots),
        "means": _means(source),
        "D": _partition(source),
        "sums": formula_sums(source, spots),
        "radii": _radii(source),
        "atomicNumber": _atomic_numbers(source),
        "materials": columns_of(
            source.table("calibrate.materials"),
            ["technique", "batch", "material", "element"],
            ["ratio", "ratio_se", "accepted_ppm", "n_spots"],
            SIGMA_DIGITS + 2,
        ),
        "tolerance": source.settings.calibrate.tolerance.relative,
        "checks": _checks(source),
        "curves": [_curve(curve) for curve in curves],
        "trends": trend_data(source),
        "exchange": exchange_data(source),
        "balance": balance_data(source),
        "rulings": [
            [one.spot, one.analyte, one.verdict, one.analyst, one.date, one.reason, one.table]
            for one in source.rulings
        ],
        "melt": source.settings.screen.overlap.melt_phase,
    }


def _spots(spots: SpotUse) -> dict[str, Any]:
    names = ("table", "technique", "batch", "experiment", "phase", "grain", "zone", "material")
    data: dict[str, Any] = {name: coded(spots.keys[name]) for name in names}
    data |= {"spot": spots.keys["spot"], "row": spots.keys["row"], "sequence": spots.keys["sequence"]}
    data["distance"] = rounded(spots.keys["distance_um"], VALUE_DIGITS)
    data["comment"] = [comment or "" for comment in spots.keys["comment"]]
    data["used"] = spots.n_used.tolist()
    data["values"] = spots.n_values.tolist()
    return data


def _values(source: Source, spots: SpotUse) -> dict[str, Any]:
    """One entry per technique and analyte; its lists run over the technique's spots, which stand together."""
    screen, made = source.table("screen"), source.concentrations()
    below = flags(source.table("convert"), "below_limit")
    analyte, element, why = (labels(screen, name) for name in ("analyte", "element", "why"))
    technique = labels(screen, "technique")
    names = spots.keys["technique"]
    known = list(dict.fromkeys(names))
    analytes: list[dict[str, Any]] = []
    for number, name in enumerate(known):
        start, size = names.index(name), names.count(name)
        rows_of_technique = np.flatnonzero(technique.is_one_of([name]))
        codes = analyte.codes[rows_of_technique]
        _, first = np.unique(codes, return_index=True)
        for code in codes[np.sort(first)].tolist():
            rows = rows_of_technique[codes == code]
            place = spots.of_row[rows] - start
            analytes.append(
                {
                    "name": analyte.texts[code],
                    "element": element.texts[element.codes[rows[0]]],
                    "technique": number,
                    "v": _spread(rounded(made.value[rows], VALUE_DIGITS), place, size),
                    "s": _spread(rounded(made.sigma[rows], SIGMA_DIGITS), place, size),
                    "l": _spread(rounded(made.limit[rows], SIGMA_DIGITS), place, size),
                    # Twice the code of why it was left out (0: used), plus one below the limit.
                    "w": _spread((2 * (why.codes[rows]) + below[rows]).tolist(), place, size),
                }
            )
    return {
        "techniques": [
            {"name": name, "start": names.index(name), "size": names.count(name)} for name in known
        ],
        "analytes": analytes,
        "whys": list(why.texts),
    }


def _spread(values: Sequence[Any], place: IntArray, size: int) -> list[Any]:
    column: list[Any] = [None] * size
    for position, value in zip(place.tolist(), values, strict=True):
        column[position] = value
    return column


def _findings(source: Source, spots: SpotUse) -> list[list[Any]]:
    place = {key: spot for spot, key in enumerate(zip(spots.keys["table"], spots.keys["row"], strict=True))}
    return [
        [
            place[row["table"], row["row"]],
            row["analyte"],
            row["code"],
            *rounded([row["statistic"], row["threshold"], row["p_value"]], SIGMA_DIGITS),
            row["action"],
            row["detail"],
        ]
        for row in source.table("screen.findings").to_pylist()
    ]


def _means(source: Source) -> dict[str, Any]:
    return columns_of(
        source.table("pair"),
        ["experiment", "phase", "element", "technique", "batch", "analyte"],
        [
            "n_used",
            "n_left_out",
            "mean_ppm",
            "se_ppm",
            "counting_sd_ppm",
            "spread_sd_ppm",
            "mswd",
            "mswd_lo",
            "mswd_hi",
        ],
        VALUE_DIGITS,
    )


def _partition(source: Source) -> dict[str, Any]:
    table = source.table("classify")
    shares = ["share_counting", "share_spread", "share_calibration", "share_internal_standard"]
    data = columns_of(table, ["experiment", "alpha", "beta", "element", "kind", "class", "reason"], [], None)
    data["technique"] = coded(
        [
            a if a == b else f"{a} / {b}"
            for a, b in zip(
                table["technique_alpha"].to_pylist(), table["technique_beta"].to_pylist(), strict=True
            )
        ]
    )
    data |= {name: finite(table.column(name).to_pylist()) for name in ("D", "D_sd", "D_lo", "D_hi")}
    data |= {
        name: rounded(table.column(name).to_pylist(), 4)
        for name in (*shares, "D_overlap_lo", "overlap_bound")
    }
    probabilities = ("p_compatible", "p_incompatible", "p_highly_incompatible")
    data |= {name: rounded(table.column(name).to_pylist(), 4) for name in probabilities}
    data |= {name: table.column(name).to_pylist() for name in ("n_alpha", "n_beta")}
    data["written"] = [
        written(row) for row in table.select(["D", "D_sd", "D_lo", "D_hi", "kind"]).to_pylist()
    ]
    return data


def _radii(source: Source) -> dict[str, Any]:
    """Charge and radius in Å of every element of D in every crystal, for one coordination of each crystal."""
    table = source.table("classify")
    elements = sorted(set(table.column("element").to_pylist()))
    made = {}
    for phase in sorted(set(table.column("alpha").to_pylist())):
        facts = PHASES.get(phase)
        coordination = (facts.large_site if facts else None) or USUAL_COORDINATION
        radii = {}
        for element in elements:
            charges = usual_charges(element) if element in ATOMIC_NUMBER else ()
            if charges and np.isfinite(radius := ionic_radius(element, charges[0], coordination)):
                radii[element] = [charges[0], radius]
        made[phase] = {"coordination": coordination, "of": radii}
    return made


def _atomic_numbers(source: Source) -> dict[str, int]:
    elements = set(source.table("screen").column("element").to_pylist())
    return {element: ATOMIC_NUMBER[element] for element in sorted(elements) if element in ATOMIC_NUMBER}


def _checks(source: Source) -> list[dict[str, Any]]:
    table = optional_table(source, "assess")
    if table is None:
        return []
    numbers = ("value", "sd", "expected_lo", "expected_hi")
    rows = table.to_pylist()
    columns = {name: finite([row[name] for row in rows]) for name in numbers}
    return [row | {name: columns[name][place] for name in numbers} for place, row in enumerate(rows)]


def _curve(curve: Curve) -> dict[str, Any]:
    data: dict[str, Any] = {name: getattr(curve, name) for name in ("experiment", "alpha", "beta", "label")}
    data |= {name: rounded(getattr(curve, name), VALUE_DIGITS) for name in ("radius", "D", "D_lo", "D_hi")}
    return data
