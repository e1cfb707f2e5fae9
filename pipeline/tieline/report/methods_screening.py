"""Sentences of the methods paragraph on what was tested and left out; a test that found nothing to test is not told."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable

import numpy as np

from tieline.arrays import labels, numbers
from tieline.report.conventions import percent
from tieline.report.left_out import by_person, by_test
from tieline.report.sentences import and_, count
from tieline.report.source import Source
from tieline.report.spots import SpotUse
from tieline.screen.findings import RULING

# Words that a verdict on a group starts with where the test could not be made.
NOT_TESTED = "not tested"
# Tests that leave a verdict on every group they judge, by the name of their settings.
WITH_VERDICTS = {
    "total": ("total",),
    "cations": ("cations",),
    "overlap": ("glass-overlap", "crystal-overlap"),
    "zoning": ("zoned",),
}
# What the test of identity needs: so many spots of each of two phases, and so many elements.
FEWEST_SPOTS, FEWEST_PHASES, FEWEST_ELEMENTS = 3, 2, 4

Group = tuple[str, str, str]


def screened(source: Source, spots: SpotUse) -> Iterable[str]:
    """What was tested, what that and persons left out, and what was set aside on reading."""
    done = tests_done(source, spots)
    described = [sentence for test, sentence in _tests(source, spots) if test in done]
    yield (
        f"Spots were tested for {and_(described)}."
        if described
        else "No test could be made on the spots, or none was wanted."
    )
    counts = by_test(spots)
    if counts:
        parts = [
            f"{reason.name} {count(reason.n_spots, 'spot')} ({count(reason.n_values, 'value')})"
            for reason in counts
        ]
        yield f"Left out by tests: {', '.join(parts)}; a spot may fail several."
    elif described:
        yield "No value was left out by a test."
    people = by_person(source, spots)
    if people:
        parts = [
            f"{reason.name} {count(reason.n_spots, 'spot')} ({count(reason.n_values, 'value')})"
            for reason in people
        ]
        yield f"Left out by hand, with a recorded reason: {', '.join(parts)}."
    kept = sum(ruling.verdict == "keep" for ruling in source.rulings)
    if kept:
        yield f"{count(kept, 'ruling')} kept values that a test would have left out, or that were in doubt."
    yield from _set_aside(source)


def _set_aside(source: Source) -> Iterable[str]:
    """Rows that are no analyses, such as averages pasted between them, and single cells, each with the reason."""
    reasons: dict[bool, Counter[str]] = {True: Counter(), False: Counter()}
    for line in source.table("ingest.set_aside").to_pylist():
        reasons[line["column"] is None][line["reason"]] += 1
    for is_row, what in ((True, "row"), (False, "cell")):
        found = reasons[is_row].most_common()
        if found:
            words = ", ".join(f"{reason} ({number})" for reason, number in found)
            number = sum(number for _, number in found)
            yield f"{count(number, what)} of the tables {'was' if number == 1 else 'were'} set aside on reading: {words}."


def tests_done(source: Source, spots: SpotUse) -> set[str]:
    """Tests, by the name of their settings, that are enabled and found something to test."""
    groups = source.table("screen.groups")
    judged = {
        test
        for test, detail in zip(
            groups.column("test").to_pylist(), groups.column("detail").to_pylist(), strict=True
        )
        if not detail.startswith(NOT_TESTED)
    }
    done = {name for name, tests in WITH_VERDICTS.items() if judged & set(tests)}
    if _identity_was_testable(source, spots):
        done.add("identity")
    if _outliers_were_testable(source, spots):
        done.add("outlier")
    if np.isfinite(numbers(source.table("convert"), "sigma_ppm")).any():
        done.add("imprecise")
    settings = source.settings.screen
    return {test for test in done if getattr(settings, test).enabled}


def _unknowns(spots: SpotUse) -> Iterable[tuple[int, Group]]:
    """Every spot on an unknown, with its experiment, phase and technique."""
    keys = spots.keys
    for place in np.flatnonzero(spots.n_values > 0).tolist():
        if keys["material"][place] is None:
            yield place, (keys["experiment"][place], keys["phase"][place], keys["technique"][place])


def _identity_was_testable(source: Source, spots: SpotUse) -> bool:
    convert = source.table("convert")
    of_technique = zip(
        labels(convert, "technique").text().tolist(), labels(convert, "element").text().tolist(), strict=True
    )
    n_elements = Counter(technique for technique, _ in set(of_technique))
    sizes = Counter((phase, technique) for _, (_, phase, technique) in _unknowns(spots))
    n_phases = Counter(technique for (_, technique), size in sizes.items() if size >= FEWEST_SPOTS)
    return any(
        number >= FEWEST_PHASES and n_elements[technique] >= FEWEST_ELEMENTS
        for technique, number in n_phases.items()
    )


def _outliers_were_testable(source: Source, spots: SpotUse) -> bool:
    """Whether any group has enough spots that the tests before have left."""
    dropped = {
        (finding["table"], finding["row"])
        for finding in source.table("screen.findings").select(["table", "row", "analyte", "code", "action"]).to_pylist()
        if finding["action"] == "drop"
        and finding["analyte"] is None
        and finding["code"] not in (RULING, "outlier", "imprecise")
    }  # fmt: skip
    tables, rows = spots.keys["table"], spots.keys["row"]
    sizes = Counter(group for place, group in _unknowns(spots) if (tables[place], rows[place]) not in dropped)
    return max(sizes.values(), default=0) >= source.settings.screen.outlier.min_spots


def _tests(source: Source, spots: SpotUse) -> Iterable[tuple[str, str]]:
    settings = source.settings.screen
    ferric = (
        ", with ferric iron from charge balance where the phase takes it [[droop1987]]"
        if settings.cations.ferric
        else ""
    )
    yield (
        "total",
        (
            f"oxide totals outside the range of their phase by more than {settings.total.sigmas:g} standard uncertainties "
            f"({_does(settings.total.action)})"
        ),
    )
    yield (
        "cations",
        (
            f"cation sums that do not fit the formula{ferric} ({settings.cations.sigmas:g} standard uncertainties; "
            f"{_does(settings.cations.action)})"
        ),
    )
    yield (
        "identity",
        (
            f"compositions at least {settings.identity.ratio:g} times nearer to another phase ({_does(settings.identity.action)})"
        ),
    )
    overlap = {
        "drop": _does(settings.overlap.action),
        "mark": "marked only",
        "unmix": "removed by calculation",
    }
    yield (
        "overlap",
        (
            f"admixed {settings.overlap.melt_phase} in crystals and crystal in {settings.overlap.melt_phase}, as the weighted "
            f"projection of every analysis on the mixing line, at z > {settings.overlap.z:g} ({overlap[settings.overlap.use]})"
        ),
    )
    yield "zoning", _zoning(source, spots)
    single = {
        "off": "",
        "grubbs": f", and single analytes by Grubbs's test at {settings.outlier.alpha:g} [[grubbs1969]]",
        "esd": f", and single analytes by the generalized ESD test at {settings.outlier.alpha:g} [[rosner1983]]",
        "modified-z": f", and single analytes by modified z > {settings.outlier.threshold:g} [[iglewicz1993]]",
    }[settings.outlier.per_analyte]
    yield (
        "outlier",
        (
            f"outliers in many analytes together (p < {settings.outlier.p:g}; {_does(settings.outlier.action)}){single}"
        ),
    )
    yield (
        "imprecise",
        (
            f"relative uncertainties above {percent(settings.imprecise.relative_sigma)} ({_does(settings.imprecise.action)})"
        ),
    )


def _zoning(source: Source, spots: SpotUse) -> str:
    """By what the places of the spots were known, and in how many groups of crystals, where not in all."""
    settings = source.settings.screen
    table = source.table("ingest.spots")
    by_distance = bool(np.isfinite(numbers(table, "distance_um")).any())
    by_zone = any(text is not None for text in spots.keys["zone"])
    ways = (("with distance from the rim", by_distance), ("between zones of the crystal", by_zone))
    place = " and ".join(way for way, known in ways if known)
    crystals = {group for _, group in _unknowns(spots) if group[1] != settings.overlap.melt_phase}
    tested = {
        (row["experiment"], row["phase"], row["technique"])
        for row in source.table("screen.groups").to_pylist()
        if row["test"] == "zoned" and not row["detail"].startswith(NOT_TESTED)
    }
    extent = (
        ""
        if len(tested) >= len(crystals)
        else f", in {len(tested)} of {count(len(crystals), 'group')} of crystal spots"
    )
    represent = {"all": "all spots represent the crystal", "rim": "only rims represent equilibrium",
                 "core": "only cores represent equilibrium"}[settings.zoning.represent]  # fmt: skip
    return f"zoning {place}{extent} (p < {settings.zoning.p:g}; in zoned crystals {represent})"


def _does(action: str) -> str:
    return {"drop": "left out", "mark": "marked only"}[action]
