"""The words of a column header that are not the analyte: units, uncertainties, limits, totals, intensities.

Each pattern is cut out of the header where it is found; what is left must be the analyte and nothing else
(see ``names``), so that no word of a header is passed over in silence.
"""

import re
import unicodedata
from dataclasses import dataclass
from typing import Literal

Unit = Literal["wt%", "ppm", "ppb", "at%", "mol%"]
Role = Literal["value", "sigma", "limit", "total", "ratio", "intensity", "cations", "correction"]
Statistic = Literal["SD", "SE"]

PPM_PER_UNIT: dict[str, float] = {"wt%": 1.0e4, "ppm": 1.0, "ppb": 1.0e-3}
"""Factors to ppm by mass; at% and mol% are recognised, and have none."""

_LOOK_ALIKES = dict.fromkeys(map(ord, "‐‑‒–—−"), "-") | {ord("∑"): "Σ", ord("⋅"): "·"}

_NO_LETTER_BEFORE = r"(?<![^\W\d_])"  # a digit may stand before a unit: SiO2wt%
_START = r"(?<![^\W_])"
_END = r"(?![^\W_])"

_PERCENT = rf"(?:%|(?:pct|per\s?cent){_END})"
_PER_GRAM = rf"(?:\s?/\s?g|[\s.·*]?\s?g\s?\^?-1){_END}"
_PER_KILOGRAM = rf"(?:\s?/\s?kg|[\s.·*]?\s?kg\s?\^?-1){_END}"
_BY_WEIGHT = rf"w?{_END}(?:[\s_\-]*(?:by[\s_])?(?:wt|weight|mass){_END})?"
_WEIGHT_PREFIX = r"(?:(?:wt|mass)\.?[\s_\-]?)?"
_UNIT_SPELLINGS: tuple[tuple[Unit, str], ...] = (
    ("at%", rf"at(?:om(?:ic|s)?)?[\s._\-]*{_PERCENT}"),
    ("mol%", rf"mol(?:es?|ar)?[\s._\-]*{_PERCENT}"),
    (
        "wt%",
        rf"(?:wt|weight|mass)[\s._\-]*{_PERCENT}|%\s?\(?[mw]/[mw]{_END}\)?"
        rf"|%\s?(?:wt|weight|mass){_END}|g/100\s?g{_END}",
    ),
    ("ppm", rf"{_WEIGHT_PREFIX}ppm{_BY_WEIGHT}|(?:μ|u|mc)g{_PER_GRAM}|mg{_PER_KILOGRAM}|g\s?/\s?t{_END}"),
    ("ppb", rf"{_WEIGHT_PREFIX}ppb{_BY_WEIGHT}|ng{_PER_GRAM}|(?:μ|u|mc)g{_PER_KILOGRAM}"),
)
_UNITS = tuple(
    (unit, re.compile(rf"(?i:{_NO_LETTER_BEFORE}(?:{spelling}))")) for unit, spelling in _UNIT_SPELLINGS
)
_BARE_PERCENT = re.compile(rf"%|(?i:{_START}(?:pct|per\s?cent){_END})")

_LIMIT = re.compile(
    rf"(?i:{_START}(?:(?:min(?:imum|\.)?|lower)[\s_])?(?:limit[\s_]of[\s_]detection"
    rf"|det(?:ection|\.)?[\s_]?lim(?:its?|\.)?|LLD|LOD|MDL|DL|L\.O\.D\.?|D\.L\.?){_END})"
)


def _sigma_pattern(words: str) -> re.Pattern[str]:
    """An uncertainty word with its level before it (2SE) and per cent signs touching it (%RSD, 1s%)."""
    return re.compile(
        rf"(?P<before>%)?{_START}(?:(?P<level>[123])(?:[\s_\-]|\.0\s?)?)?(?:{words}){_END}(?P<after>\s?%)?"
    )


# ``Se`` is selenium and ``S`` sulfur: SE and SD in capitals, in small letters or with dots only, and a lone s
# only behind its level.
_RELATIVE_SD = _sigma_pattern(r"%?(?:RSD|rsd|R\.S\.D\.?)")
_RELATIVE_SE = _sigma_pattern(r"%?(?:RSE|rse|R\.S\.E\.?)")
_STANDARD_ERROR = _sigma_pattern(
    r"SEM?|sem?|S\.E\.(?:M\.?)?|s\.e\.(?:m\.?)?|(?i:st(?:andar)?d?\.?[\s_]?err(?:or|\.)?)"
)
_STANDARD_DEVIATION = _sigma_pattern(r"SD|sd|S\.D\.?|s\.d\.?|(?i:st(?:andar)?d?\.?[\s_]?dev(?:iation|\.)?)")
_SIGMA = re.compile(
    rf"(?P<before>%)?{_START}(?:(?P<level>[123])[\s_\-]?)?(?:σ|(?i:sig(?:ma)?){_END})(?P<after>\s?%)?"
)
_LONE_S = re.compile(rf"(?P<before>%)?{_START}(?P<level>[123])\s?s{_END}(?P<after>\s?%)?")
_ERROR = re.compile(
    rf"(?P<before>%\s?)?(?:±|\+/-|\+-|{_START}(?i:err(?:ors?|\.)?|unc(?:ert(?:aint(?:y|ies)|\.)?|\.)?){_END})"
    rf"(?P<after>\s?%)?"
)
_RELATIVE = re.compile(rf"(?i:{_PERCENT}?\s?{_START}rel(?:ative|\.)?{_END}(?:\s?{_PERCENT})?)")
_ABSOLUTE = re.compile(rf"(?i:{_START}abs(?:olute|\.)?{_END})")
_SIGMA_WORDS: tuple[tuple[re.Pattern[str], Statistic | None, bool | None], ...] = (
    (_RELATIVE_SD, "SD", True),
    (_RELATIVE_SE, "SE", True),
    (_STANDARD_ERROR, "SE", None),
    (_STANDARD_DEVIATION, "SD", None),
    (_SIGMA, None, None),
    (_LONE_S, None, None),
    (_ERROR, None, None),
)

_INTENSITY = re.compile(
    rf"(?i:{_START}(?:cps|counts?|cts|c/s|net|peak|bkg|background|intensity|k[\s_\-]?ratio){_END})"
)
_CATIONS = re.compile(
    rf"(?i:{_START}(?:a\.?p\.?f\.?u\.?|p\.?f\.?u\.?|cations?|cat\.?|formula[\s_]units?|atoms|moles?|mol){_END})"
)
_TOTAL = re.compile(rf"(?i:{_START}(?:total|tot\.?|sum|all){_END})|Σ")
_IDLE = re.compile(rf"(?i:{_START}(?:conc(?:entration|\.)?|content|oxides?|elemental){_END})")


@dataclass
class HeaderWords:
    """What the words of one header say, and the ``rest`` of it, which should be the analyte."""

    rest: str
    unit: Unit | None = None
    role: Role = "value"
    level: int | None = None
    relative: bool | None = None
    statistic: Statistic | None = None
    total: bool = False
    contradictory: bool = False


def normalise_header(text: str) -> str:
    """One code point per meaning: subscripts become digits, both µ one, dashes ``-``, odd blanks a blank."""
    plain = unicodedata.normalize("NFKC", text).translate(_LOOK_ALIKES)
    visible = "".join(" " if unicodedata.category(c) in ("Cc", "Zs") else c for c in plain)
    return " ".join("".join(c for c in visible if unicodedata.category(c) != "Cf").split())


def read_words(header: str) -> HeaderWords:
    """Cut units and role words out of a normalised header. Never raises; contradictions are marked."""
    words = HeaderWords(rest=header)
    _take_unit(words)
    is_limit = _take(words, _LIMIT) is not None
    is_sigma = _take_sigma(words)
    if is_limit:
        words.role = "limit"
    elif is_sigma:
        words.role = "sigma"
    elif _take(words, _INTENSITY):
        words.role = "intensity"
        while _take(words, _INTENSITY):
            pass
    elif _take(words, _CATIONS):
        words.role = "cations"
    words.total = _take(words, _TOTAL) is not None
    while _take(words, _IDLE):
        pass
    _take_bare_percent(words)
    return words


def _take(words: HeaderWords, pattern: re.Pattern[str]) -> re.Match[str] | None:
    match = pattern.search(words.rest)
    if match is not None:
        words.rest = f"{words.rest[: match.start()]} {words.rest[match.end() :]}"
    return match


def _take_unit(words: HeaderWords) -> None:
    for unit, pattern in _UNITS:
        if _take(words, pattern):
            words.contradictory |= words.unit is not None
            words.unit = unit


def _take_sigma(words: HeaderWords) -> bool:
    found = False
    for pattern, statistic, relative in _SIGMA_WORDS:
        match = _take(words, pattern)
        if match is None:
            continue
        found = True
        parts = match.groupdict()
        touching_percent = bool(parts["before"] or (parts["after"] or " ")[0] == "%")
        level = int(parts["level"]) if parts.get("level") else None
        words.contradictory |= None not in (level, words.level) and level != words.level
        words.contradictory |= None not in (statistic, words.statistic) and statistic != words.statistic
        words.level = level or words.level
        words.statistic = statistic or words.statistic
        if relative or touching_percent or (parts["after"] and pattern is _ERROR):
            words.relative = True
    if found and _take(words, _RELATIVE):
        words.relative = True
    if found and _take(words, _ABSOLUTE):
        words.contradictory |= words.relative is True
        words.relative = False
    return found


def _take_bare_percent(words: HeaderWords) -> None:
    """A lone % is wt% on a value, a limit or a total; on a sigma it may be either, and stays undecided."""
    if _take(words, _BARE_PERCENT) and words.role in ("value", "limit"):
        words.contradictory |= words.unit is not None
        words.unit = "wt%"
