"""What the overlap scores say of single spots: findings, with the fraction and what it would do to D."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.findings import Findings, joined, spot_findings
from tieline.screen.overlap import GLASS_OVERLAP, Scored, provisional_groups
from tieline.screen.padding import column_medians
from tieline.screen.session import Session
from tieline.settings.screen import OverlapSettings

Places = tuple[IntArray, IntArray]  # groups and spots within the arrays of one part
Chosen = tuple[IntArray, Places]

PROVISIONAL = "; provisional: the crystals are zoned, which majors cannot tell from overlap"

# How many of the most affected elements a finding names.
NAMED_ELEMENTS = 3

_EXPLAINED_OVERLAP, _CLEAN, _FOREIGN = 0, 1, 2


@dataclass(frozen=True)
class SpotVerdicts:
    """The entry that speaks for each scored spot: row of `Measured`, part and place in it, and what it says.

    A spot scored against several contaminants is something else only if none of them explains it, and contains one of
    them if any does; the best fitting one is named.
    """

    row: IntArray
    part: IntArray
    group: IntArray
    spot: IntArray
    kind: IntArray

    def within(self, part: int, groups: BoolArray) -> BoolArray:
        """Spots of some groups (G,) of one part."""
        inside = np.asarray(self.part == part)
        inside[inside] = groups[self.group[inside]]
        return np.asarray(inside)

    def at(self, chosen: BoolArray) -> Chosen:
        """Rows of `Measured` of the chosen spots, and their places in their part."""
        return self.row[chosen], (self.group[chosen], self.spot[chosen])

    def overlapped(self) -> BoolArray:
        """Spots that contain some of a contaminant and nothing else."""
        return np.asarray(self.kind == _EXPLAINED_OVERLAP)


def spot_verdicts(parts: Sequence[Scored]) -> SpotVerdicts:
    """One verdict per scored spot from all parts of one code."""
    entries: list[tuple[IntArray, ...]] = []
    fits = []
    for number, part in enumerate(parts):
        scores = part.scores
        judged = np.isfinite(scores.z) | scores.foreign
        group, spot = np.nonzero(judged)
        kind = np.where(scores.foreign, _FOREIGN, np.where(scores.overlapped, _EXPLAINED_OVERLAP, _CLEAN))[
            judged
        ]
        entries.append((part.block.rows[judged], np.full(len(group), number), group, spot, kind))
        fits.append(np.nan_to_num(scores.residual_chi2[judged], nan=np.inf))
    if not entries:
        nothing = np.empty(0, dtype=np.int64)
        return SpotVerdicts(nothing, nothing, nothing, nothing, nothing)
    row, number_of_part, group, spot, kind = (np.concatenate(column) for column in zip(*entries, strict=True))
    order = np.lexsort((number_of_part, np.concatenate(fits), kind, row))
    first = np.unique(row[order], return_index=True)[1]
    best = order[first]
    return SpotVerdicts(row[best], number_of_part[best], group[best], spot[best], kind[best])


def overlap_findings(
    session: Session,
    parts: Sequence[Scored],
    verdicts: SpotVerdicts,
    settings: OverlapSettings,
    zoned: frozenset[tuple[str | None, ...]],
) -> Findings:
    """Findings on the spots that contain something, or are something else than this mixture.

    With `use = "unmix"` an overlapped spot is only marked, for its overlap is taken out; something else is never
    unmixed. `zoned`: experiments and phases whose crystals are zoned; where only majors were measured there, findings
    are provisional and only mark.
    """
    code = parts[0].code if parts else GLASS_OVERLAP
    drop = settings.action if settings.use != "mark" else "mark"
    taken_out = "mark" if settings.use == "unmix" else drop
    found: list[Findings] = []
    for number, part in enumerate(parts):
        doubtful = provisional_groups(session, part, zoned)
        provisional, certain = verdicts.within(number, doubtful), verdicts.within(number, ~doubtful)
        foreign, overlapped = verdicts.kind == _FOREIGN, verdicts.overlapped()
        found += [
            _foreign_findings(session, part, verdicts.at(certain & foreign), drop, settings, ""),
            _foreign_findings(
                session, part, verdicts.at(provisional & foreign), "mark", settings, PROVISIONAL
            ),
            _overlap_findings(session, part, verdicts.at(certain & overlapped), taken_out, settings, ""),
            _overlap_findings(
                session, part, verdicts.at(provisional & overlapped), "mark", settings, PROVISIONAL
            ),
        ]
    return joined(code, found)


def _foreign_findings(
    session: Session, part: Scored, chosen: Chosen, action: str, settings: OverlapSettings, more: str
) -> Findings:
    rows, at = chosen
    statistic, limit, p_value = _residuals(part, at, settings.something_else_p)
    texts = [text + more for text in _something_else(session, part, at)]
    return spot_findings(part.code, action, part.measured.spots[rows], statistic, limit, p_value, texts)


def _overlap_findings(
    session: Session, part: Scored, chosen: Chosen, action: str, settings: OverlapSettings, more: str
) -> Findings:
    rows, at = chosen
    z = part.scores.z[at]
    texts = [text + more for text in _contains(session, part, at)]
    return spot_findings(part.code, action, part.measured.spots[rows], z, settings.z, _upper_tail(z), texts)


def _upper_tail(z: FloatArray) -> FloatArray:
    from scipy.special import ndtr

    return np.asarray(ndtr(-z))


def _residuals(part: Scored, at: Places, p_limit: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Reduced chi-squares of what mixing does not explain, their limits, and p-values."""
    from scipy.special import chdtri

    scores = part.scores
    degrees = np.maximum(scores.residual_dof[at], 1.0)
    limit = chdtri(degrees, np.full(len(degrees), p_limit)) / degrees
    return scores.residual_chi2[at] / degrees, limit, scores.residual_p[at]


def phases_of(session: Session, part: Scored, group: int) -> tuple[str, str]:
    """Host and contaminant of one group of a part."""
    host = session.spots.group_key(int(part.block.groups[group]))[1]
    return host, session.spots.group_key(int(part.contaminant[group]))[1]


def _contains(session: Session, part: Scored, at: Places) -> list[str]:
    fraction = part.scores.fraction[at]
    # What differs from spot to spot in the contaminant itself makes the fraction uncertain in proportion.
    sd = np.hypot(part.scores.sd_fraction[at], fraction * _contaminant_spread(part)[at[0]])
    effects = _effects(part, at[0], fraction)
    texts = []
    for group, value, uncertainty, effect in zip(at[0], fraction, sd, effects, strict=True):
        host, contaminant = phases_of(session, part, int(group))
        texts.append(f"{percent(value, uncertainty)} {contaminant} in {host}; {effect}")
    return texts


def _contaminant_spread(part: Scored) -> FloatArray:
    """Typical relative standard deviation of one local composition of the contaminant (G,), 0 where not known."""
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.sqrt(part.contaminant_variance) / np.abs(part.contaminant_mean)
    relative = np.where(part.scores.used & np.isfinite(relative), relative, np.nan)
    return np.nan_to_num(column_medians(relative[:, :, None])[:, 0])


def percent(fraction: float, sd: float) -> str:
    """A fraction and its standard uncertainty in per cent, to the uncertainty's second digit."""
    digits = max(0, min(6, 1 - math.floor(math.log10(100.0 * sd)))) if sd > 0 else 2
    return f"{100 * fraction:.{digits}f} \N{PLUS-MINUS SIGN} {100 * sd:.{digits}f} %"


def _effects(part: Scored, groups: IntArray, fraction: FloatArray) -> list[str]:
    """For each spot, the elements whose D it alone would change most, and how."""
    clean, apparent = apparent_coefficients(part, groups, fraction)
    with np.errstate(divide="ignore", invalid="ignore"):
        change = np.abs(np.log(apparent / clean))
    change = np.where(np.isfinite(change), change, -np.inf)
    most = np.argsort(-change, axis=1, kind="stable")[:, :NAMED_ELEMENTS]
    texts = []
    for row, columns in enumerate(most.tolist()):
        named = [
            f"{part.measured.analytes[at]} {clean[row, at]:.2g} to {apparent[row, at]:.2g}"
            for at in columns
            if change[row, at] >= 0
        ]
        texts.append(f"D of this spot alone: {', '.join(named)}" if named else "no D to compare")
    return texts


def apparent_coefficients(
    part: Scored, groups: IntArray, fraction: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Crystal over melt (k, p), clean and with these fractions (k,) in a spot of these groups; NaN: not known.

    A clean level that is not above zero by two standard errors is replaced by them, for D cannot be less than seen.
    """
    scores = part.scores
    level = np.fmax(scores.level[groups], 2.0 * np.sqrt(scores.level_variance[groups]))
    other = part.contaminant_mean[groups]
    share = np.clip(fraction, 0.0, 1.0)[:, None]
    mixed = (1.0 - share) * level + share * other
    with np.errstate(divide="ignore", invalid="ignore"):
        if part.code == GLASS_OVERLAP:
            return level / other, mixed / other
        return other / level, other / mixed


def _something_else(session: Session, part: Scored, at: Places) -> list[str]:
    """For each spot, the elements farthest from the fitted mixture, in standard deviations of a clean spot."""
    groups, scores = at[0], part.scores
    mixture = scores.level[groups] + np.nan_to_num(scores.fraction[at])[:, None] * scores.contrast[groups]
    harmless = np.einsum("kpi,ki->kp", scores.nuisance[groups], np.nan_to_num(scores.nuisance_amplitude[at]))
    off = (part.tested.value[part.block.rows[at]] - mixture - harmless) / np.sqrt(
        scores.spot_variance[groups]
    )
    off = np.where(np.isfinite(off), off, 0.0)
    most = np.argsort(-np.abs(off), axis=1, kind="stable")[:, :NAMED_ELEMENTS]
    texts = []
    for row, columns in enumerate(most.tolist()):
        host, contaminant = phases_of(session, part, int(groups[row]))
        odd = ", ".join(f"{part.measured.analytes[at]} {off[row, at]:+.1f} sd" for at in columns)
        texts.append(
            f"something else than {host} with {contaminant} in it: another phase, an inclusion or a wrong label; "
            f"farthest off: {odd}"
        )
    return texts
