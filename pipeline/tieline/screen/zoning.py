"""Test `zoned`: crystals whose composition changes with the distance from their edge, overlap set apart.

The score and its regression are in `tieline.statistics.zoning`. Techniques are tested separately; where one of them
finds a crystal phase of an experiment zoned, `represent` acts on all spots of that phase, for they lie in the same
crystals.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray, labels, numbers
from tieline.screen.findings import Findings, spot_findings
from tieline.screen.groups import CANNOT_TELL, FOUND, NOT_FOUND, TestResult, Verdict, remarks_by_phase
from tieline.screen.overlap import GLASS_OVERLAP, Scored
from tieline.screen.session import Session
from tieline.settings.screen import ZoningSettings
from tieline.statistics.zoning import ZoningScores, zoning_scores

# Below this many spots the regression has little power, whatever it finds.
FEW_SPOTS = 8

# A change as large as this distorts the clean level of the overlap test.
STRONG_CHANGE = 0.3

# Share of the variance of distance within grains below which grain and distance are not told apart.
CONFOUNDED = 0.2

_ZONES = {
    "rim": 0.0,
    "edge": 0.0,
    "r": 0.0,
    "mantle": 0.5,
    "m": 0.5,
    "core": 1.0,
    "centre": 1.0,
    "center": 1.0,
    "c": 1.0,
}


@dataclass(frozen=True)
class Places:
    """Where every spot lies in its crystal (spots,): distance in micrometres, or place between rim 0 and core 1."""

    distance_um: FloatArray
    zone: FloatArray
    grain: IntArray

    def known(self) -> BoolArray:
        return np.isfinite(self.distance_um) | np.isfinite(self.zone)

    def is_rim(self, rim_um: float) -> BoolArray:
        """Spots within `rim_um` of the edge; by their zone label where there is no distance."""
        by_distance = np.isfinite(self.distance_um)
        return np.where(by_distance, self.distance_um <= rim_um, self.zone == _ZONES["rim"])

    def is_core(self, rim_um: float) -> BoolArray:
        """Spots farther in; by their zone label where there is no distance."""
        by_distance = np.isfinite(self.distance_um)
        return np.where(by_distance, self.distance_um > rim_um, self.zone == _ZONES["core"])


@dataclass(frozen=True)
class _Zoned:
    """A group found zoned: relative change over its distances, p-value, technique."""

    change: float
    p_value: float
    technique: str


@dataclass(frozen=True)
class Zoning:
    """What the test says, and the (experiment, phase) whose crystals are zoned by any technique."""

    result: TestResult
    phases: frozenset[tuple[str | None, ...]]


def places_of(session: Session) -> Places:
    """Distances, zones and grains of all spots; a grain code is -1 where there is none."""
    keys = session.spots.keys
    zone = labels(keys, "zone")
    known = np.array([*(_ZONES.get(text.strip().casefold(), np.nan) for text in zone.texts), np.nan])
    return Places(numbers(keys, "distance_um"), known[zone.codes], labels(keys, "grain").codes)


NO_ZONING = Zoning(TestResult(), frozenset())


def zoning_result(session: Session, scored: Iterable[Scored], settings: ZoningSettings) -> Zoning:
    """Verdicts on every crystal group with known places, and findings on the spots of zoned ones.

    With `represent` rim or core the other spots of a zoned group are left out, and those of that zone have no finding;
    spots of unknown place, and all spots where none lies in the wanted zone, are only marked.
    """
    places = places_of(session)
    if not places.known().any():
        return NO_ZONING
    verdicts: list[Verdict] = []
    zoned: dict[int, _Zoned] = {}
    for part in scored:
        if part.code == GLASS_OVERLAP:
            _judge(session, part, places, settings, verdicts, zoned)
    findings = _findings(session, places, zoned, settings)
    remarks = remarks_by_phase("zoned crystals", zoned, session.spots)
    phases = frozenset(session.spots.groups.keys[group][:2] for group in zoned)
    return Zoning(TestResult((findings,), tuple(verdicts), tuple(remarks)), phases)


def _judge(
    session: Session,
    part: Scored,
    places: Places,
    settings: ZoningSettings,
    verdicts: list[Verdict],
    zoned: dict[int, _Zoned],
) -> None:
    """Adds the verdicts of one block, and its zoned groups."""
    spots = np.where(part.block.occupied, part.measured.spots[part.block.rows], -1)
    distance, zone, grain = (np.append(values, fill)[spots] for values, fill in _filled(places))
    by_distance = np.isfinite(distance).sum(axis=1) >= np.isfinite(zone).sum(axis=1)
    place = np.where(by_distance[:, None], distance, zone)
    scores = zoning_scores(
        part.block.of(part.tested.value),
        part.scores.level,
        part.contaminant_mean,
        part.scores.spot_variance,
        part.is_trace,
        place,
        grain.astype(np.int64),
        np.isfinite(part.scores.z) & ~part.scores.foreign,
        alpha=settings.p,
    )
    for at in np.flatnonzero(np.isfinite(place).any(axis=1)):
        group = int(part.block.groups[at])
        verdict = _verdict(group, scores, int(at), settings)
        verdicts.append(verdict)
        if verdict.verdict == FOUND:
            zoned[group] = _Zoned(
                float(scores.change[at]), float(scores.p_value[at]), part.measured.technique
            )


def _filled(places: Places) -> tuple[tuple[FloatArray | IntArray, float], ...]:
    return (places.distance_um, np.nan), (places.zone, np.nan), (places.grain, -1)


def _verdict(group: int, scores: ZoningScores, at: int, settings: ZoningSettings) -> Verdict:
    number, p_value = int(scores.number[at]), float(scores.p_value[at])
    if not np.isfinite(p_value):
        detail = "not tested: too few spots at different distances within grains"
        return Verdict(group, "zoned", number, CANNOT_TELL, detail)
    change, smallest = float(scores.change[at]), float(scores.smallest_change[at])
    texts = [
        f"{change:+.0%} \N{PLUS-MINUS SIGN} {scores.change_error[at]:.0%} from the lowest to the highest distance"
    ]
    if scores.zoned[at] and abs(change) < settings.least_change:
        word = NOT_FOUND
        texts.append(f"significant, but less than {settings.least_change:.0%}")
    elif scores.zoned[at]:
        word = FOUND
        if abs(change) > STRONG_CHANGE:
            texts.append("overlap findings of this group are provisional")
    elif smallest <= settings.visible:
        word = NOT_FOUND
    else:
        word = CANNOT_TELL
        texts.append("not enough spots to tell")
    texts.append(f"a change of {smallest:.0%} would have been seen")
    if number < FEW_SPOTS or scores.within_share[at] < CONFOUNDED:
        texts.append("cannot separate zoning from differences between grains")
    return Verdict(group, "zoned", number, word, "; ".join(texts), change, smallest, p_value)


def _findings(
    session: Session, places: Places, zoned: dict[int, _Zoned], settings: ZoningSettings
) -> Findings:
    spots_of_group = session.spots.groups.code
    phase_of_group = [key[:2] for key in session.spots.groups.keys]
    by_phase = {phase_of_group[group]: found for group, found in sorted(zoned.items(), reverse=True)}
    groups = [group for group, key in enumerate(phase_of_group) if key in by_phase]
    spots = np.flatnonzero(np.isin(spots_of_group, groups))
    spots = spots[~_representative(places, spots, settings)]
    found = [by_phase[phase_of_group[group]] for group in spots_of_group[spots]]
    dropped = _replaced(places, spots, spots_of_group, settings)
    base = spot_findings(
        "zoned",
        settings.action,
        spots,
        np.array([entry.change for entry in found]),
        settings.least_change,
        np.array([entry.p_value for entry in found]),
        [_detail(entry, settings, bool(drop)) for entry, drop in zip(found, dropped, strict=True)],
    )
    actions = ["drop" if drop else base.action[at] for at, drop in enumerate(dropped)]
    return Findings(
        base.code, base.spot, base.analyte, base.statistic, base.threshold, base.p_value, actions, base.detail
    )


def _representative(places: Places, spots: IntArray, settings: ZoningSettings) -> BoolArray:
    """Which of the spots lie in the zone that represents equilibrium, so that zoning is no finding on them."""
    if settings.represent == "all":
        return np.zeros(len(spots), dtype=np.bool_)
    choose = places.is_rim if settings.represent == "rim" else places.is_core
    return choose(settings.rim_um)[spots]


def _replaced(places: Places, spots: IntArray, group: IntArray, settings: ZoningSettings) -> BoolArray:
    """Which of these spots to leave out: of known place, in groups that have spots in the wanted zone."""
    everyone = np.arange(len(group))
    represented = np.unique(group[_representative(places, everyone, settings)])
    return np.asarray(places.known()[spots] & np.isin(group[spots], represented))


def _detail(found: _Zoned, settings: ZoningSettings, dropped: bool) -> str:
    text = (
        f"{found.technique}: {found.change:+.0%} from the lowest to the highest distance, overlap set apart"
    )
    return f"{text}; only the {settings.represent} represents equilibrium" if dropped else text
