"""What the overlap scores say of single spots: findings, with the fraction and what it would do to D."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.findings import WHOLE_SPOT, Findings, no_findings
from tieline.screen.overlap import GLASS_OVERLAP, Scored
from tieline.screen.session import Session
from tieline.settings.screen import OverlapSettings

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

    def flagged(self) -> BoolArray:
        return np.asarray(self.kind != _CLEAN)


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
    session: Session, parts: Sequence[Scored], verdicts: SpotVerdicts, code: str, settings: OverlapSettings
) -> Findings:
    """Findings on the spots that contain something, or are something else than this mixture.

    With `use = "unmix"` an overlapped spot is only marked, for its overlap is taken out; something else is never
    unmixed.
    """
    chosen = np.flatnonzero(verdicts.flagged())
    if not len(chosen):
        return no_findings(code)
    drop = settings.action if settings.use != "mark" else "mark"
    columns: dict[str, list[float]] = {"statistic": [], "threshold": [], "p_value": []}
    actions, details = [], []
    for at in chosen:
        part = parts[verdicts.part[at]]
        place = int(verdicts.group[at]), int(verdicts.spot[at])
        if verdicts.kind[at] == _FOREIGN:
            statistic, threshold, p_value = _residual(part, place, settings.something_else_p)
            actions.append(drop)
            details.append(_something_else(session, part, place))
        else:
            statistic, threshold = float(part.scores.z[place]), settings.z
            p_value = _upper_tail(statistic)
            actions.append("mark" if settings.use == "unmix" else drop)
            details.append(_contains(session, part, place))
        for name, value in zip(columns, (statistic, threshold, p_value), strict=True):
            columns[name].append(value)
    spots = parts[0].measured.spots[verdicts.row[chosen]]
    numbers = {name: np.array(values) for name, values in columns.items()}
    return Findings(code, spots, np.full(len(spots), WHOLE_SPOT), **numbers, action=actions, detail=details)


def _upper_tail(z: float) -> float:
    from scipy.special import ndtr

    return float(ndtr(-z))


def _residual(part: Scored, place: tuple[int, int], p_limit: float) -> tuple[float, float, float]:
    """Reduced chi-square of what mixing does not explain, its limit, and its p-value."""
    from scipy.special import chdtri

    scores = part.scores
    degrees = max(float(scores.residual_dof[place]), 1.0)
    limit = float(chdtri(degrees, p_limit)) / degrees
    return float(scores.residual_chi2[place]) / degrees, limit, float(scores.residual_p[place])


def phases_of(session: Session, part: Scored, group: int) -> tuple[str, str]:
    """Host and contaminant of one group of a part."""
    host = session.spots.group_key(int(part.block.groups[group]))[1]
    return host, session.spots.group_key(int(part.contaminant[group]))[1]


def _contains(session: Session, part: Scored, place: tuple[int, int]) -> str:
    scores = part.scores
    fraction, sd = float(scores.fraction[place]), float(scores.sd_fraction[place])
    host, contaminant = phases_of(session, part, place[0])
    return f"{percent(fraction, sd)} {contaminant} in {host}; {_effects(part, place[0], fraction)}"


def _something_else(session: Session, part: Scored, place: tuple[int, int]) -> str:
    host, contaminant = phases_of(session, part, place[0])
    odd = _odd_elements(part, place)
    return (
        f"something else than {host} with {contaminant} in it: another phase, an inclusion or a wrong label; "
        f"farthest off: {', '.join(odd)}"
    )


def percent(fraction: float, sd: float) -> str:
    """A fraction and its standard uncertainty in per cent, to the uncertainty's second digit."""
    digits = int(np.clip(1 - np.floor(np.log10(100.0 * sd)), 0, 6)) if sd > 0 else 2
    return f"{100 * fraction:.{digits}f} \N{PLUS-MINUS SIGN} {100 * sd:.{digits}f} %"


def _effects(part: Scored, group: int, fraction: float) -> str:
    """The elements whose D this spot alone would change most, and how."""
    clean, apparent = apparent_coefficients(part, group, fraction)
    with np.errstate(divide="ignore", invalid="ignore"):
        change = np.abs(np.log(apparent / clean))
    change = np.where(np.isfinite(change), change, -np.inf)
    order = np.argsort(-change, kind="stable")[:NAMED_ELEMENTS]
    named = [
        f"{part.measured.analytes[at]} {clean[at]:.2g} to {apparent[at]:.2g}"
        for at in order
        if np.isfinite(change[at])
    ]
    return f"D of this spot alone: {', '.join(named)}" if named else "no D to compare"


def apparent_coefficients(part: Scored, group: int, fraction: float) -> tuple[FloatArray, FloatArray]:
    """Crystal over melt (p,), clean and with this fraction in the spot; NaN where it is not known.

    A clean level that is not above zero by two standard errors is replaced by them, for D cannot be less than seen.
    """
    scores = part.scores
    seen = 2.0 * np.sqrt(scores.level_variance[group])
    level = np.fmax(scores.level[group], seen)
    other = part.contaminant_mean[group]
    fraction = float(np.clip(fraction, 0.0, 1.0))
    mixed = (1.0 - fraction) * level + fraction * other
    with np.errstate(divide="ignore", invalid="ignore"):
        if part.code == GLASS_OVERLAP:
            return level / other, mixed / other
        return other / level, other / mixed


def _odd_elements(part: Scored, place: tuple[int, int]) -> list[str]:
    """The elements farthest from the fitted mixture, in standard deviations of a clean spot."""
    group, spot = place
    scores = part.scores
    mixture = scores.level[group] + np.nan_to_num(scores.fraction[place]) * scores.contrast[group]
    harmless = scores.nuisance[group] @ np.nan_to_num(scores.nuisance_amplitude[place])
    off = (part.values[group, spot] - mixture - harmless) / np.sqrt(scores.spot_variance[group])
    off = np.where(np.isfinite(off), off, 0.0)
    order = np.argsort(-np.abs(off), kind="stable")[:NAMED_ELEMENTS]
    return [f"{part.measured.analytes[at]} {off[at]:+.1f} sd" for at in order]
