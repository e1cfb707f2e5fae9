"""Recognise what a column header reports: an oxide, an element or an isotope, with its unit and its role.

Everything in a header must be understood, or it is not recognised: a wrong guess here becomes a wrong number
in every table that follows. ``looks_like_analyte`` tells which unrecognised headers deserve a remark.
"""

import difflib
import re
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

from tieline.chemistry.elements import SYMBOLS, parse_isotope
from tieline.chemistry.header_words import (
    PPM_PER_UNIT,
    HeaderWords,
    Role,
    Statistic,
    Unit,
    normalise_header,
    read_words,
)
from tieline.chemistry.oxides import (
    cation_charges,
    is_reported_oxide,
    oxide_from_element,
    parse_oxide,
)

Kind = Literal["oxide", "element", "isotope", "other"]

_BRACKETS_AND_JOINTS = re.compile(r"[\s()\[\]{},;:|_\-]+")
_MASS_OR_SYMBOL = re.compile(r"[0-9]{1,3}|[A-Z][a-z]?")
_TOTAL_MARK = r"(?:\*|T|t|tot|Tot|TOT|total|Total|TOTAL)"
_ALL_FORMS = r"(?i:FeO|Fe2O3|H2O)|Fe"
_TOTAL_IRON = re.compile(
    rf"(?:{_TOTAL_MARK} ?)(?P<after>{_ALL_FORMS})|(?P<before>{_ALL_FORMS})(?: ?{_TOTAL_MARK})"
)
_GIVEN_AS = re.compile(r"(?P<element>[A-Z][a-z]?|[Ii]ron) as (?P<oxide>[A-Za-z0-9]+)")
_ANY_CASE_OXIDE = re.compile(r"([A-Za-z]{1,2})([1-9]?)[Oo]([1-9]?)")
_MAGNESIUM_NUMBER = re.compile(r"(?i:#? ?mg ?(?:#|no\.?|number)|#mg|xmg)")
_OXYGEN_REPLACED = re.compile(r"-? ?O ?[=≡] ?(?:F|Cl|S)(?: ?[,+] ?(?:F|Cl|S))*")
_TOTAL_MEANS_ALL_FORMS = frozenset({"Fe", "FeO", "Fe2O3", "H2O", "CO2", "S", "C"})

# What a mistyped or unusual analyte looks like: REE2O3 or SiO2*, an ion, a zero for the letter O.
_FORMULA_LIKE = re.compile(
    r"[A-Z][A-Za-z]{0,2}[0-9]{0,2}O[0-9]{0,2}[*+]?|[A-Z][a-z]?[1-7]?[+-]|[A-Z][a-z]?[1-9]?0[1-9]?"
)
_ISOTOPE_LIKE = re.compile(r"(?P<symbol>[A-Z][a-z])[0-9]{1,3}|[0-9]{1,3}(?P<last>[A-Z][a-z])")

KNOWN_NAMES: tuple[str, ...] = tuple(
    sorted(SYMBOLS)
    + sorted({oxide_from_element(symbol, q) for symbol in SYMBOLS for q in cation_charges(symbol)})
    + ["FeOT", "Fe2O3T"]
)
"""Names to suggest for a header that was not recognised."""


@dataclass(frozen=True)
class Analyte:
    """What one column reports.

    ``name``: canonical oxide formula (``FeO``), symbol (``Ni``), symbol and mass number (``Ni60``), or, with
    kind "other", ``Total``, ``Mg#``, ``O=F`` or a ratio as written. ``element``: symbol, None for "other".
    ``unit``: what the header says, None if nothing; for at% and mol% see ``usable``. ``role``: "value", or
    what else the column holds. ``level``, ``relative``, ``statistic``: how an uncertainty is stated (2 of
    2SE; in per cent of the value; SD or SE), None where the header does not say. ``total_iron``: all the
    iron, whatever its charge, reported as this oxide. ``certain``: False where such a header is often no
    analyte at all (a bare ``P``, ``Y`` or ``K``; an isotope in other capitals) and no unit supports it.
    """

    name: str
    kind: Kind
    element: str | None = None
    mass_number: int | None = None
    unit: Unit | None = None
    role: Role = "value"
    level: int | None = None
    relative: bool | None = None
    statistic: Statistic | None = None
    total_iron: bool = False
    certain: bool = True

    @property
    def label(self) -> str:
        """The name, with a T behind it for total iron: tells ``FeO`` and ``FeO*`` of one table apart."""
        return f"{self.name}T" if self.total_iron and self.kind == "oxide" else self.name

    @property
    def usable(self) -> bool:
        """Whether the column is a concentration by mass, or its uncertainty or limit."""
        by_mass = self.unit is None or self.unit in PPM_PER_UNIT
        return self.kind != "other" and by_mass and self.role in ("value", "sigma", "limit")


@dataclass(frozen=True)
class _Core:
    name: str
    kind: Kind
    element: str
    mass_number: int | None = None
    total_iron: bool = False
    as_written: bool = True


def recognise_analyte(header: str) -> Analyte | None:
    """Read one column header; None if any part of it is not understood. Never raises.

    A unit on a second header line can be appended with a blank. A lone per cent sign is wt% on a value, and
    undecided on an uncertainty unless it touches the word (``1s%``, ``%RSD``) or says ``rel``.
    """
    text = normalise_header(header)
    if not text or len(text) > 80:
        return None
    if _OXYGEN_REPLACED.fullmatch(text):
        return Analyte(text.replace(" ", "").lstrip("-"), "other", role="correction")
    words = read_words(text)
    if words.contradictory:
        return None
    rest = " ".join(_tokens(words.rest))
    if not rest:
        return _total_column(words)
    if _MAGNESIUM_NUMBER.fullmatch(rest):
        return _ratio("Mg#", words)
    if "/" in rest:
        parts = [part.strip() for part in rest.split("/")]
        both_known = len(parts) == 2 and all(_read_core(part, has_unit=False) for part in parts)
        return _ratio("/".join(parts), words) if both_known else None
    core = _read_core(rest, has_unit=words.unit is not None)
    if core is None or (words.total and core.name not in _TOTAL_MEANS_ALL_FORMS):
        return None
    bare_letter = len(rest) == 1 and words.unit is None and not words.total
    return Analyte(
        name=core.name,
        kind=core.kind,
        element=core.element,
        mass_number=core.mass_number,
        unit=words.unit,
        role=words.role,
        level=words.level,
        relative=words.relative,
        statistic=words.statistic,
        total_iron=core.total_iron or (words.total and core.element == "Fe"),
        certain=not bare_letter and (core.as_written or words.unit is not None),
    )


def looks_like_analyte(header: str) -> bool:
    """Whether a header that was not recognised deserves a remark: a unit, or a word built like a formula.

    True for every recognised analyte as well. Never raises.
    """
    if recognise_analyte(header) is not None:
        return True
    words = read_words(normalise_header(header))
    tokens = _tokens(words.rest.replace("O+", "O "))
    if not tokens:
        return False
    if words.unit is not None:
        return True
    return len(tokens) <= 3 and any(_built_like_formula(token) for token in tokens)


def nearest_names(text: str, candidates: Iterable[str] = KNOWN_NAMES, count: int = 3) -> list[str]:
    """The candidates that resemble a text, nearest first, ignoring case; empty if none comes near."""
    by_folded: dict[str, str] = {}
    for candidate in candidates:
        by_folded.setdefault(candidate.casefold(), candidate)
    found = difflib.get_close_matches(text.strip().casefold(), by_folded, n=count, cutoff=0.6)
    return [by_folded[name] for name in found]


def _tokens(text: str) -> list[str]:
    return [token for part in _BRACKETS_AND_JOINTS.split(text) if (token := part.strip("."))]


def _total_column(words: HeaderWords) -> Analyte | None:
    if not words.total or words.role != "value" or words.unit not in (None, "wt%"):
        return None
    return Analyte("Total", "other", unit=words.unit, role="total")


def _ratio(name: str, words: HeaderWords) -> Analyte:
    role: Role = "ratio" if words.role == "value" else words.role
    return Analyte(
        name, "other", role=role, level=words.level, relative=words.relative, statistic=words.statistic
    )


def _read_core(rest: str, has_unit: bool) -> _Core | None:
    given_as = _GIVEN_AS.fullmatch(rest)
    if given_as:
        core = _read_core(given_as["oxide"], has_unit)
        if (
            core is None
            or core.kind != "oxide"
            or given_as["element"].lower() not in (core.element.lower(), "iron")
        ):
            return None
        return _Core(core.name, "oxide", core.element, total_iron=core.element == "Fe")
    total = _TOTAL_IRON.fullmatch(rest)
    if total:
        core = _read_core(total["after"] or total["before"], has_unit)
        return core and _Core(core.name, core.kind, core.element, total_iron=core.element == "Fe")
    tokens = rest.split(" ")
    if len(tokens) > 2 or (len(tokens) == 2 and not all(map(_MASS_OR_SYMBOL.fullmatch, tokens))):
        return None
    return _written_core(rest) or _other_case_core(rest, has_unit)


def _written_core(text: str) -> _Core | None:
    isotope = parse_isotope(text.removeprefix("^"))
    if isotope is not None:
        return _Core(f"{isotope[0]}{isotope[1]}", "isotope", isotope[0], mass_number=isotope[1])
    try:
        oxide = parse_oxide(text)
    except ValueError:
        return None
    if oxide.oxygens == 0:
        return _Core(oxide.element, "element", oxide.element)
    return _Core(oxide.formula, "oxide", oxide.element) if is_reported_oxide(oxide) else None


def _other_case_core(text: str, has_unit: bool) -> _Core | None:
    """``SIO2``, ``mgo``, ``sr88``, and ``NI`` where a unit shows that it is no word; ``CO`` is ambiguous."""
    match = _ANY_CASE_OXIDE.fullmatch(text)
    if match:
        symbol = match[1].capitalize()
        core = _written_core(f"{symbol}{match[2]}O{match[3]}")
        return core and _Core(core.name, core.kind, core.element)
    letters = re.sub(r"[^A-Za-z]", "", text)
    recased = text.replace(letters, letters.capitalize()) if letters else text
    core = _written_core(recased)
    if core is None or core.kind == "oxide" or (core.kind == "element" and not (has_unit and text.isupper())):
        return None
    return _Core(core.name, core.kind, core.element, core.mass_number, as_written=False)


def _built_like_formula(token: str) -> bool:
    if _FORMULA_LIKE.fullmatch(token) or (len(token) > 1 and _read_core(token, has_unit=True)):
        return True
    match = _ISOTOPE_LIKE.fullmatch(token)
    return match is not None and (match["symbol"] or match["last"]) in SYMBOLS
