"""What the overlap scores say of whole groups: what could be seen, and where they cannot tell."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.groups import CANNOT_TELL, FOUND, NOT_FOUND, TestResult, Verdict, remarks_by_phase
from tieline.screen.overlap import (
    CRYSTAL_OVERLAP,
    GLASS_OVERLAP,
    Overlap,
    Scored,
    majors_decide,
    provisional_groups,
)
from tieline.screen.overlap_findings import (
    SpotVerdicts,
    apparent_coefficients,
    overlap_findings,
    phases_of,
    spot_verdicts,
)
from tieline.screen.session import Session
from tieline.settings.screen import OverlapSettings

# Fewer clean spots than this do not establish the clean level.
FEWEST_CLEAN = 3

# Scatter over the stated sigmas, squared, beyond which the sigmas are doubted: sigma off by a factor of 2 or 1.5, where
# simulations showed more false alarms, or fewer spots found.
UNDERSTATED, OVERSTATED = 4.0, 0.44
_SCATTER_P = 0.01


@dataclass(frozen=True)
class _Facts:
    """Of one part, per group (G,): what could be seen, scatter of the clean spots, and of classes (G, 2) against sigma."""

    visible: FloatArray
    scatter_p: FloatArray
    above_lowest: FloatArray
    majors_decide: BoolArray
    understated: BoolArray
    overstated: BoolArray
    provisional: BoolArray


def overlap_result(
    session: Session, overlap: Overlap, settings: OverlapSettings, zoned: frozenset[tuple[str | None, ...]]
) -> TestResult:
    """Findings on spots, verdicts on every group that was or could not be tested, and what a person must know."""
    findings, verdicts = [], []
    doubts: list[tuple[str, int]] = []
    for code in (GLASS_OVERLAP, CRYSTAL_OVERLAP):
        parts = [part for part in overlap.scored if part.code == code]
        spots = spot_verdicts(parts)
        findings.append(overlap_findings(session, parts, spots, settings, zoned))
        counts = _counts(spots, overlap.measured.group, session.spots.groups.count)
        facts = [_facts(part, provisional_groups(session, part, zoned)) for part in parts]
        for group, entries in _entries(parts).items():
            verdict, doubt = _verdict(session, group, counts[group], parts, facts, entries, settings)
            verdicts.append(verdict)
            doubts += [(message, group) for message in doubt]
    for group, (code, reason) in overlap.unscored.items():
        rows = overlap.measured.of_group(group)
        verdicts.append(Verdict(group, code, rows.stop - rows.start, CANNOT_TELL, f"not tested: {reason}"))
        if code == GLASS_OVERLAP:
            doubts.append(("overlap not tested: no melt measured by the same technique", group))
    remarks = [
        remark
        for message in sorted({message for message, _ in doubts})
        for remark in remarks_by_phase(
            message, [group for text, group in doubts if text == message], session.spots
        )
    ]
    return TestResult(tuple(findings), tuple(verdicts), tuple(remarks))


def _entries(parts: Sequence[Scored]) -> dict[int, list[tuple[int, int]]]:
    """group -> (part, place in it) of everything it was scored against."""
    entries: dict[int, list[tuple[int, int]]] = {}
    for number, part in enumerate(parts):
        for place, group in enumerate(part.block.groups.tolist()):
            entries.setdefault(group, []).append((number, place))
    return entries


def _counts(spots: SpotVerdicts, group_of_row: IntArray, n_groups: int) -> list[list[int]]:
    """Per group the spots that contain the contaminant, are clean, are something else."""
    counts = np.zeros((n_groups, 3), dtype=np.int64)
    np.add.at(counts, (group_of_row[spots.row], spots.kind), 1)
    return [list(row) for row in counts.tolist()]


def _facts(part: Scored, provisional: BoolArray) -> _Facts:
    from scipy.special import chdtr, chdtrc

    scores = part.scores
    clean = scores.clean & (scores.sd_fraction > 0)
    weight = np.where(clean, 1.0 / np.where(clean, scores.sd_fraction, 1.0) ** 2, 0.0)
    fraction = np.where(clean, scores.fraction, 0.0)
    number = clean.sum(axis=1)
    mean = np.sum(weight * fraction, axis=1) / np.maximum(weight.sum(axis=1), np.finfo(float).tiny)
    chi2 = np.sum(weight * (fraction - mean[:, None]) ** 2, axis=1)
    lowest = np.min(np.where(clean, fraction, np.inf), axis=1)
    mswd, degrees = np.nan_to_num(scores.mswd, nan=1.0), np.maximum(np.nan_to_num(scores.mswd_dof), 1.0)
    enough = number >= FEWEST_CLEAN
    return _Facts(
        scores.detectable_fraction,
        np.where(enough, chdtrc(np.maximum(number - 1.0, 1.0), chi2), np.nan),
        np.where(enough, fraction.sum(axis=1) / np.maximum(number, 1) - lowest, 0.0),
        majors_decide(part),
        (mswd > UNDERSTATED) & (chdtrc(degrees, mswd * degrees) < _SCATTER_P),
        (mswd < OVERSTATED) & (chdtr(degrees, mswd * degrees) < _SCATTER_P),
        provisional,
    )


def _verdict(
    session: Session,
    group: int,
    counts: Sequence[int],
    parts: Sequence[Scored],
    facts: Sequence[_Facts],
    entries: Sequence[tuple[int, int]],
    settings: OverlapSettings,
) -> tuple[Verdict, list[str]]:
    overlapped, clean, foreign = counts
    judged = sum(counts)
    first, place = entries[0]
    part, fact = parts[first], facts[first]
    visible = {entry: float(facts[entry[0]].visible[entry[1]]) for entry in entries}
    visible = {entry: fraction for entry, fraction in visible.items() if math.isfinite(fraction)}
    if not judged or not visible:
        rows = part.block.rows[place]
        size = int(np.isfinite(part.tested.value[rows[rows >= 0]]).any(axis=1).sum())
        reason = (
            "fewer than 3 spots"
            if size < FEWEST_CLEAN
            else "no uncertainties, or no element measured in both phases"
        )
        return Verdict(group, part.code, size, CANNOT_TELL, f"not tested: {reason}"), []
    names = [
        f"{100 * fraction:.2g} % {phases_of(session, parts[number], at)[1]}"
        for (number, at), fraction in visible.items()
    ]
    texts = [_summary(overlapped, judged, foreign), f"smallest fraction visible {', '.join(names)}"]
    doubts: list[str] = []
    word = FOUND if overlapped or foreign else NOT_FOUND
    p_value = None
    if part.code == GLASS_OVERLAP:
        p_value = float(fact.scatter_p[place])
        if clean < FEWEST_CLEAN:
            word = CANNOT_TELL
            texts.append("clean level not established: D of incompatible elements are upper limits")
            doubts.append("fewer than 3 clean spots: the clean level is not established")
        elif p_value < settings.scatter_p:
            texts.append(
                f"the unflagged spots scatter toward the {settings.melt_phase}{_bias(part, fact, place)}"
            )
            doubts.append(
                f"unflagged spots scatter toward the {settings.melt_phase}: all may contain some, or be zoned"
            )
        if fact.provisional[place]:
            texts.append(
                "findings provisional: the crystals are zoned, which majors cannot tell from overlap"
            )
        if fact.majors_decide[place]:
            texts.append("majors decide: D of incompatible elements below that fraction are upper limits")
    texts += _sigma_doubts(part, fact, place)
    return Verdict(
        group, part.code, judged, word, "; ".join(texts), max(visible.values()), None, p_value
    ), doubts


def _summary(overlapped: int, judged: int, foreign: int) -> str:
    text = f"{overlapped} of {judged} spots overlap"
    return f"{text}, {foreign} are something else" if foreign else text


def _bias(part: Scored, fact: _Facts, place: int) -> str:
    """What the lowest D would be if the lowest unflagged spot were the clean level, and not their mean."""
    at = np.array([place])
    lowest, biased = apparent_coefficients(part, at, fact.above_lowest[at])
    if not np.isfinite(lowest).any():
        return ""
    column = int(np.nanargmin(lowest[0]))
    return f": D of {part.measured.analytes[column]} may be {lowest[0, column]:.2g} instead of {biased[0, column]:.2g}"


def _sigma_doubts(part: Scored, fact: _Facts, place: int) -> list[str]:
    """Scatter that the stated sigmas do not explain, or that they exceed, for majors and for traces."""
    texts = []
    for name, mswd, understated, overstated in zip(
        ("majors", "traces"),
        part.scores.mswd[place],
        fact.understated[place],
        fact.overstated[place],
        strict=True,
    ):
        if understated:
            texts.append(
                f"{name} scatter {math.sqrt(mswd):.1f} times their stated sigma: real spread, or sigma understated"
            )
        elif overstated:
            texts.append(
                f"{name} scatter only {math.sqrt(mswd):.2f} times their stated sigma: overstated, so that less is seen"
            )
    return texts
