"""What the overlap scores say of whole groups: what could be seen, and where they cannot tell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import FloatArray, IntArray
from tieline.screen.groups import CANNOT_TELL, FOUND, NOT_FOUND, TestResult, Verdict, remarks_by_phase
from tieline.screen.overlap import CRYSTAL_OVERLAP, GLASS_OVERLAP, Overlap, Scored
from tieline.screen.overlap_findings import (
    SpotVerdicts,
    apparent_coefficients,
    overlap_findings,
    phases_of,
    spot_verdicts,
)
from tieline.screen.session import Session
from tieline.settings.screen import OverlapSettings

Entry = tuple[Scored, int]  # a part and the place of a group in it

# Fewer clean spots than this do not establish the clean level.
FEWEST_CLEAN = 3

# Scatter over the stated sigmas, squared, beyond which the sigmas are doubted: sigma off by a factor of 2 or 1.5, where
# simulations showed more false alarms, or fewer spots found.
UNDERSTATED, OVERSTATED = 4.0, 0.44
_SCATTER_P = 0.01


@dataclass(frozen=True)
class _Counts:
    """Of one group: spots judged, containing the contaminant, being something else."""

    judged: int
    overlapped: int
    foreign: int

    @property
    def clean(self) -> int:
        return self.judged - self.overlapped - self.foreign


def overlap_result(session: Session, overlap: Overlap, settings: OverlapSettings) -> TestResult:
    """Findings on spots, verdicts on every group that was or could not be tested, and what a person must know."""
    findings, verdicts, doubts = [], [], []
    for code in (GLASS_OVERLAP, CRYSTAL_OVERLAP):
        parts = [part for part in overlap.scored if part.code == code]
        spots = spot_verdicts(parts)
        findings.append(overlap_findings(session, parts, spots, code, settings))
        for group, entries in _entries(parts).items():
            counts = _counts(spots, overlap.measured.group, group)
            verdict, doubt = _verdict(session, group, counts, entries, settings)
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


def _entries(parts: Sequence[Scored]) -> dict[int, list[Entry]]:
    """group -> what it was scored against."""
    entries: dict[int, list[Entry]] = {}
    for part in parts:
        for place, group in enumerate(part.block.groups.tolist()):
            entries.setdefault(group, []).append((part, place))
    return entries


def _counts(verdicts: SpotVerdicts, group_of_row: IntArray, group: int) -> _Counts:
    first, last = np.searchsorted(group_of_row[verdicts.row], [group, group + 1])
    kinds = verdicts.kind[first:last]
    return _Counts(len(kinds), int(np.sum(kinds == 0)), int(np.sum(kinds == 2)))


def _verdict(
    session: Session, group: int, counts: _Counts, entries: Sequence[Entry], settings: OverlapSettings
) -> tuple[Verdict, list[str]]:
    part, place = entries[0]
    code = part.code
    visible = [(entry, float(entry[0].scores.detectable_fraction[entry[1]])) for entry in entries]
    visible = [(entry, fraction) for entry, fraction in visible if np.isfinite(fraction)]
    if not counts.judged or not visible:
        size = int(np.sum(np.isfinite(part.values[place]).any(axis=1)))
        reason = (
            "fewer than 3 spots"
            if size < FEWEST_CLEAN
            else "no uncertainties, or no element measured in both phases"
        )
        return Verdict(group, code, size, CANNOT_TELL, f"not tested: {reason}"), []
    names = [f"{100 * fraction:.2g} % {phases_of(session, *entry)[1]}" for entry, fraction in visible]
    texts = [_summary(counts), f"smallest fraction visible {', '.join(names)}"]
    doubts: list[str] = []
    word = FOUND if counts.overlapped or counts.foreign else NOT_FOUND
    p_value = None
    if code == GLASS_OVERLAP:
        p_value, bias = _clean_scatter(part, place)
        if counts.clean < FEWEST_CLEAN:
            word = CANNOT_TELL
            texts.append("clean level not established: D of incompatible elements are upper limits")
            doubts.append("fewer than 3 clean spots: the clean level is not established")
        elif p_value is not None and p_value < settings.scatter_p:
            texts.append(f"the unflagged spots scatter toward the {settings.melt_phase}: {bias}")
            doubts.append(f"unflagged spots scatter toward the {settings.melt_phase}: all may contain some")
        if not part.is_trace[part.scores.used[place]].any():
            texts.append("majors only: D of incompatible elements below that fraction are upper limits")
    texts += _sigma_doubts(part, place)
    detail = "; ".join(texts)
    return Verdict(
        group, code, counts.judged, word, detail, max(fraction for _, fraction in visible), None, p_value
    ), doubts


def _summary(counts: _Counts) -> str:
    text = f"{counts.overlapped} of {counts.judged} spots overlap"
    return f"{text}, {counts.foreign} are something else" if counts.foreign else text


def _clean_scatter(part: Scored, place: int) -> tuple[float | None, str]:
    """p-value of the scatter of the unflagged spots along the mixing line, and the bias it may mean."""
    from scipy.special import chdtrc

    scores = part.scores
    clean = scores.clean[place] & (scores.sd_fraction[place] > 0)
    if clean.sum() < FEWEST_CLEAN:
        return None, ""
    fraction, sd = scores.fraction[place][clean], scores.sd_fraction[place][clean]
    weight = 1.0 / sd**2
    mean = float(np.sum(weight * fraction) / np.sum(weight))
    chi2 = float(np.sum(weight * (fraction - mean) ** 2))
    above_lowest = float(np.mean(fraction) - np.min(fraction))
    lowest, biased = apparent_coefficients(part, place, above_lowest)
    known = np.flatnonzero(np.isfinite(lowest))
    at = known[np.argmin(lowest[known])] if len(known) else None
    bias = ""
    if at is not None:
        bias = f"D of {part.measured.analytes[at]} may be {lowest[at]:.2g} instead of {biased[at]:.2g}"
    return float(chdtrc(clean.sum() - 1, chi2)), bias


def _sigma_doubts(part: Scored, place: int) -> list[str]:
    """Scatter that the stated sigmas do not explain, or that they exceed, for majors and for traces."""
    from scipy.special import chdtr, chdtrc

    texts = []
    mswd: FloatArray = part.scores.mswd[place]
    for name, value, degrees in zip(("majors", "traces"), mswd, part.scores.mswd_dof[place], strict=True):
        if not np.isfinite(value) or degrees < 1:
            continue
        root = float(np.sqrt(value))
        if value > UNDERSTATED and chdtrc(degrees, value * degrees) < _SCATTER_P:
            texts.append(
                f"{name} scatter {root:.1f} times their stated sigma: real spread, or sigma understated"
            )
        elif value < OVERSTATED and chdtr(degrees, value * degrees) < _SCATTER_P:
            texts.append(
                f"{name} scatter only {root:.2f} times their stated sigma: overstated, so that less is seen"
            )
    return texts
