"""Finds the pattern of combined labels such as `TX07-ol3-rim-2`: experiment, phase, grain and the rest."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence

from tieline.chemistry.phases import phase_name
from tieline.starting.label_columns import ZONE_WORDS

MOSTLY = 0.7
ZONED = 0.3  # glass has no rim and core, and may be most of the spots
_PHASE_TOKEN = re.compile(r"([A-Za-z]+)(\d*[a-z]?)")
_SEPARATORS = "-_. /"


def label_pattern(labels: Sequence[str]) -> str | None:
    """A regular expression with named groups that splits most labels, or None where no such order is seen.

    Looks for the separator and the place at which most labels carry a known phase, perhaps with a grain
    number behind it; what stands before is the experiment.
    """
    filled = [label for label in labels if label]
    for separator in _SEPARATORS:
        place = _phase_place(filled, separator)
        if place is None:
            continue
        gap = re.escape(separator)
        token = f"[^{gap}]+"
        before = gap.join([token] * place)
        rest = _rest(filled, separator, place)
        pattern = rf"(?P<spot>(?P<experiment>{before}){gap}(?P<phase>[A-Za-z]+?)(?P<grain>\d+[a-z]?)?{rest}(?:{gap}.*)?)"
        fitting = sum(re.fullmatch(pattern, label) is not None for label in filled)
        if fitting >= MOSTLY * len(filled):
            return pattern
    return None


def _rest(labels: Sequence[str], separator: str, place: int) -> str:
    """What follows the phase: the zone, where most labels of crystals say it, and all between."""
    places: Counter[int] = Counter()
    for label in labels:
        for position, token in enumerate(label.split(separator)[place + 1 :]):
            if token.casefold() in ZONE_WORDS:
                places[position] += 1
                break
    if not places or places.most_common(1)[0][1] < ZONED * len(labels):
        return ""
    gap = re.escape(separator)
    between = f"{gap}[^{gap}]+" * places.most_common(1)[0][0]
    return rf"(?:{between}{gap}(?P<zone>(?i:{'|'.join(ZONE_WORDS)})))?"


def _phase_place(labels: Sequence[str], separator: str) -> int | None:
    """The token position, not the first, at which most labels have a known phase."""
    places: Counter[int] = Counter()
    for label in labels:
        for position, token in enumerate(label.split(separator)):
            match = _PHASE_TOKEN.fullmatch(token)
            if position > 0 and match and phase_name(match[1]) is not None:
                places[position] += 1
                break
    if not places:
        return None
    place, count = places.most_common(1)[0]
    return place if count >= MOSTLY * len(labels) else None
