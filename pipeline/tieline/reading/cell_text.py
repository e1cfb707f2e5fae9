"""What one cell text means when it is not a plain number: words, limits, units, separators, damage."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from functools import cache
from typing import NamedTuple

VALUE, BELOW_LIMIT, NOT_MEASURED, UNREADABLE = 0, 1, 2, 3

LARGEST = 1e12  # no concentration in wt%, ppm or ppb, distance or run number is larger
# One atom in a gram is 1e-16 ppm, and squares of squares of a smaller number could no longer be told from zero.
SMALLEST = 1e-50
LONGEST = 64  # characters of a number; longer ones are damage, not precision

REASONS: tuple[tuple[str, str], ...] = (
    ("", ""),
    ("blank", "blank, and blank is not among the words for not measured"),
    ("error word", "a spreadsheet error word"),
    ("date", "a date or time where a number should be"),
    ("infinite", "infinity or not-a-number is no measurement"),
    ("too large", "number above 1e12"),
    ("too small", "number below 1e-50, but not zero"),
    ("limit not positive", "a limit must be a positive number"),
    ("too long", "more than 64 characters"),
    ("greater than", "a lower bound, not a value"),
    ("uncertainty", "value and uncertainty in one cell"),
    ("other unit", "the unit in the cell is not the column's unit"),
    ("separator", "a comma or point that is neither the decimal mark nor an announced thousands separator"),
    ("not a number", "not a number and not a known word"),
)
_CODES = {name: code for code, (name, _) in enumerate(REASONS)}

# No-break, thin, figure and narrow no-break spaces are what typesetting and spreadsheets put into numbers.
SPACES = dict.fromkeys(
    map(ord, "\u00a0\u2007\u2009\u200a\u202f\u2002\u2003\u2005\u2006\u2008\u3000\t\r\n\v\f"), " "
)
INVISIBLE = dict.fromkeys(map(ord, "\u200b\u200c\u200d\ufeff\u2060"))
MINUS = dict.fromkeys(map(ord, "\u2212\uff0d\ufe63"), "-")
_CLEAN = {**SPACES, **INVISIBLE, **MINUS}

_NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_NUMBER_AND_UNIT = re.compile(rf"({_NUMBER}) ?([^0-9.,+\-\s][^0-9]*)?")
_MONTH = r"(?:jan|feb|m[aä]r|apr|ma[yi]|jun|jul|aug|sep|o[ck]t|nov|de[cz])[a-z]*\.?"
_DATE = re.compile(
    rf"\d{{1,4}}[-/.]\d{{1,2}}[-/.]\d{{1,4}}.*|\d{{1,2}}[-/. ]{_MONTH}(?:[-/. ]\d{{2,4}})?.*|{_MONTH}[-/. ]\d{{1,4}}.*"
    r"|\d{1,2}[/]\d{1,4}|\d{1,4}:\d{2}(?::\d{2})?.*|\d{4}-\d{2}-\d{2}t.*|\d+ days?,.*"
)
_UNCERTAINTY = re.compile(rf"{_NUMBER} ?(?:±|\+/-|\+-).*|{_NUMBER} ?\([0-9.,]+\)")


def reason_code(name: str) -> int:
    """Index of a reason in REASONS."""
    return _CODES[name]


def clean(text: str) -> str:
    """Trimmed, with odd spaces as one plain space, invisible characters removed and U+2212 as a minus."""
    return " ".join((text if text.isascii() else text.translate(_CLEAN)).split())


def fold(text: str) -> str:
    """`clean`, without regard to case: how words and headers are compared."""
    return clean(text).casefold()


@dataclass(frozen=True)
class CellStyle:
    """How the cells of one column are written. Words are compared without regard to case and spaces around."""

    decimal: str = "."
    thousands: str | None = None
    below_limit: tuple[str, ...] = ()
    not_measured: tuple[str, ...] = ("",)
    units: frozenset[str] = frozenset()  # folded unit spellings that may follow the number
    zero_state: int = VALUE
    words: dict[str, int] = field(init=False, repr=False, compare=False)
    numeric_words: dict[float, int] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        words = {fold(word): NOT_MEASURED for word in self.not_measured}
        words |= {fold(word): BELOW_LIMIT for word in self.below_limit}
        object.__setattr__(self, "words", words)
        numeric = {number: state for word, state in words.items() if (number := _float(word)) is not None}
        object.__setattr__(self, "numeric_words", numeric)


class OneCell(NamedTuple):
    """What one text says; NaN where it gives no value or limit."""

    state: int
    value: float = math.nan
    limit: float = math.nan
    reason: int = 0


def read_text(text: str, style: CellStyle) -> OneCell:
    """Reads one text. Words first, then a limit after `<`, then a number with separators or a unit."""
    folded = fold(text)
    if folded in style.words:
        return OneCell(style.words[folded])
    squeezed = folded.replace(" ", "")
    if squeezed in style.words:
        return OneCell(style.words[squeezed])
    shown = clean(text)
    if not shown:
        return _refused("blank")
    if len(shown) > LONGEST:
        return _refused("too long")
    if shown[0] in "<\u2264":
        return _limit(shown[1:].strip(), style)
    number = _number(shown, style)
    if isinstance(number, float):
        return OneCell(VALUE, value=number)
    return _refused(number)


def _limit(shown: str, style: CellStyle) -> OneCell:
    number = _number(shown, style)
    if isinstance(number, str):
        return _refused(number)
    return OneCell(BELOW_LIMIT, limit=number)


def _refused(reason: str) -> OneCell:
    return OneCell(UNREADABLE, reason=_CODES[reason])


def _number(shown: str, style: CellStyle) -> float | str:
    """The number, or the name of the reason why there is none."""
    match = _NUMBER_AND_UNIT.fullmatch(_point_decimal(shown, style))
    if match is None:
        return _diagnose(shown)
    unit = match.group(2)
    if unit is not None and fold(unit) not in style.units:
        return "other unit" if fold(unit) in KNOWN_UNITS else _diagnose(shown)
    number = float(match.group(1))
    if (number == 0 and re.match(r"[^eE]*[1-9]", match.group(1))) or 0 < abs(number) < SMALLEST:
        return "too small"
    return number if abs(number) <= LARGEST else "too large"


def _point_decimal(shown: str, style: CellStyle) -> str:
    """The text with announced thousands separators removed and the decimal mark as a point."""
    if style.thousands is not None and style.thousands in shown:
        mark, separator = re.escape(style.decimal), re.escape(style.thousands)
        grouped = re.match(
            rf"[+-]?[0-9]{{1,3}}(?:{separator}[0-9]{{3}})+(?![0-9{separator}])(?={mark}|[^.,]|$)", shown
        )
        if grouped:
            shown = grouped.group().replace(style.thousands, "") + shown[grouped.end() :]
    if style.decimal == ",":
        return "?" if "." in shown.split(" ")[0] else shown.replace(",", ".", 1)
    return shown


def _diagnose(shown: str) -> str:
    folded = shown.casefold()
    if folded.startswith("#"):
        return "error word"
    if folded.strip("+-") in {"inf", "infinity", "nan", "-nan", "1.#inf", "1.#qnan", "\u221e"}:
        return "infinite"
    if folded.startswith((">", "\u2265")):
        return "greater than"
    if _DATE.fullmatch(folded):
        return "date"
    if _UNCERTAINTY.fullmatch(folded.replace(",", ".")):
        return "uncertainty"
    if re.fullmatch(r"[+-]?[0-9]+(?:[.,'\u2019 ][0-9]+)+", folded):
        return "separator"
    return "not a number"


def _float(word: str) -> float | None:
    try:
        return float(word) if re.fullmatch(_NUMBER, word) else None
    except ValueError:
        return None


UNITS: dict[str, tuple[str, ...]] = {
    "wt%": ("wt%", "wt.%", "wt. %", "wt %", "%", "mass%", "mass %", "% m/m", "weight %", "weight%", "wt pct", "pct",
            "oxide wt%", "ox wt%", "el wt%", "wt% oxide", "oxide%", "oxide wt.%", "g/100g", "g/100 g"),
    "ppm": ("ppm", "ug/g", "\u00b5g/g", "\u03bcg/g", "mg/kg", "ppmw", "ppm wt", "\u00b5g g-1", "\u03bcg g-1", "ug g-1",
            "\u03bcg\u00b7g-1", "g/t"),
    "ppb": ("ppb", "ng/g", "\u00b5g/kg", "\u03bcg/kg", "ug/kg", "ppbw", "ng g-1"),
}  # fmt: skip
_UNIT_OF = {fold(spelling): unit for unit, spellings in UNITS.items() for spelling in spellings}
KNOWN_UNITS = frozenset(_UNIT_OF)


def unit_of(text: str) -> str | None:
    """wt%, ppm or ppb for any of their spellings, with or without brackets; else None."""
    folded = fold(text).strip("()[]{} ").replace("\u207b\u00b9", "-1")
    return _UNIT_OF.get(folded)


@cache
def unit_spellings(unit: str) -> frozenset[str]:
    """Folded spellings of one unit."""
    return frozenset(fold(spelling) for spelling in UNITS[unit])
