"""Cell texts to values, limits and states."""

from __future__ import annotations

import math
import re
from decimal import Decimal

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.reading.cell_text import KNOWN_UNITS, read_text, unit_of, unit_spellings
from tieline.reading.cells import (
    BELOW_LIMIT,
    NOT_MEASURED,
    REASONS,
    UNREADABLE,
    VALUE,
    CellStyle,
    parse_cells,
)

POINT = CellStyle(
    below_limit=("bdl", "b.d.l.", "<dl"), not_measured=("", "-", "—", "n.d."), units=unit_spellings("ppm")
)
COMMA = CellStyle(decimal=",", thousands=".", not_measured=("", "-999"))


def one(text: str, style: CellStyle = POINT) -> tuple[int, float, float, str]:
    cells = parse_cells(pa.array([text]), style)
    return int(cells.state[0]), float(cells.value[0]), float(cells.limit[0]), REASONS[cells.reason[0]][0]


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1.5", 1.5),
        (" 2.50\t", 2.5),
        ("+3", 3.0),
        (".5", 0.5),
        ("7.", 7.0),
        ("1e-3", 0.001),
        ("1.20E+02", 120.0),
        ("-0.04", -0.04),
        ("\u22120.04", -0.04),
        ("\u00a012\u202f", 12.0),
        ("12.5 ppm", 12.5),
        ("12.5µg/g", 12.5),
        ("12.5 μg/g", 12.5),
        ("0", 0.0),
        ("0.000", 0.0),
        ("-0", 0.0),
        ("0e5", 0.0),
    ],
)
def test_numbers(text: str, value: float):
    assert one(text)[:2] == (VALUE, value)


@pytest.mark.parametrize(
    "text", ["<0.012", "< 0.012", " <0.012 ", "<\u00a00.012", "<0.012 ppm", "≤0.012", "<1.2e-2"]
)
def test_limits(text: str):
    state, value, limit, _ = one(text)
    assert (state, limit) == (BELOW_LIMIT, 0.012)
    assert math.isnan(value)


@pytest.mark.parametrize(
    ("text", "state"),
    [
        ("", NOT_MEASURED),
        ("  ", NOT_MEASURED),
        ("-", NOT_MEASURED),
        ("—", NOT_MEASURED),
        ("N.D.", NOT_MEASURED),
        ("n. d.", NOT_MEASURED),
        ("BDL", BELOW_LIMIT),
        ("b.d.l.", BELOW_LIMIT),
        ("< DL", BELOW_LIMIT),
    ],
)
def test_words(text: str, state: int):
    found, value, limit, _ = one(text)
    assert found == state
    assert math.isnan(value)
    assert math.isnan(limit)


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("#N/A", "error word"),
        ("#DIV/0!", "error word"),
        ("#WERT!", "error word"),
        ("12-Mar", "date"),
        ("Mar-12", "date"),
        ("2024-03-01 00:00:00", "date"),
        ("01.03.2024", "date"),
        ("12:30", "date"),
        ("inf", "infinite"),
        ("-Infinity", "infinite"),
        ("nan", "infinite"),
        ("1e308", "too large"),
        ("1e400", "too large"),
        ("-1e13", "too large"),
        ("1e-400", "too small"),
        ("1e-400 ppm", "too small"),
        ("<1e-400", "limit not positive"),
        ("<0", "limit not positive"),
        ("<-3", "limit not positive"),
        ("1" * 400, "too long"),
        ("0." + "0" * 400 + "1", "too long"),
        (">100", "greater than"),
        ("12.3 ± 0.2", "uncertainty"),
        ("0.0123(14)", "uncertainty"),
        ("1,234.5", "separator"),
        ("1,5", "separator"),
        ("1,234,567", "separator"),
        ("3 wt%", "other unit"),
        ("1e", "not a number"),
        ("--1", "not a number"),
        ("0x1F", "not a number"),
        ("1_000", "not a number"),
        ("\u0661\u0662", "not a number"),
        ("olivine", "not a number"),
        ("1.5*", "not a number"),
        ("0.5–0.7", "not a number"),
    ],
)
def test_unreadable(text: str, reason: str):
    state, value, limit, found = one(text)
    assert (state, found) == (UNREADABLE, reason)
    assert math.isnan(value)
    assert math.isnan(limit)


@pytest.mark.parametrize(
    ("text", "state", "value"),
    [
        ("1,5", VALUE, 1.5),
        ("1.234,5", VALUE, 1234.5),
        ("1.234", VALUE, 1234.0),
        ("1.234.567", VALUE, 1234567.0),
        ("-12,75 ", VALUE, -12.75),
        ("-999,0", NOT_MEASURED, math.nan),
        ("1.5", UNREADABLE, math.nan),
        ("12.34,5", UNREADABLE, math.nan),
        ("1234.567", UNREADABLE, math.nan),
        ("1,2,3", UNREADABLE, math.nan),
    ],
)
def test_decimal_comma_and_thousands(text: str, state: int, value: float):
    assert one(text, COMMA)[0] == state
    np.testing.assert_equal(one(text, COMMA)[1], value)


def test_spaces_and_apostrophes_as_thousands_separators():
    assert one("1 234 567.5", CellStyle(thousands=" "))[1] == 1234567.5
    assert one("1\u00a0234", CellStyle(thousands=" "))[1] == 1234.0
    assert one("1 23", CellStyle(thousands=" "))[0] == UNREADABLE
    assert one("12'500", CellStyle(thousands="'"))[1] == 12500.0
    assert one("<1,500", CellStyle(thousands=","))[2] == 1500.0
    assert one("1 234 567.5")[0] == UNREADABLE


def test_what_zero_means_is_a_setting():
    for state in (BELOW_LIMIT, NOT_MEASURED):
        style = CellStyle(zero_state=state)
        assert one("0.00", style)[0] == state
        assert math.isnan(one("0.00", style)[1])
        assert one("0.01", style)[0] == VALUE


def test_units():
    assert unit_of("(wt.%)") == "wt%"
    assert unit_of("[µg/g]") == unit_of("μg/g") == "ppm"
    assert unit_of("ng/g") == "ppb"
    assert unit_of("apfu") is None
    assert "μg/g" in KNOWN_UNITS


def test_a_slice_is_read_like_a_whole_array():
    texts = pa.array(["1", "<2", "x", "3", "", "4"])
    whole, part = parse_cells(texts, POINT), parse_cells(texts.slice(2, 3), POINT)
    np.testing.assert_array_equal(part.value, whole.value[2:5])
    np.testing.assert_array_equal(part.state, whole.state[2:5])


def test_no_cells():
    assert len(parse_cells(pa.array([], pa.string()), POINT).value) == 0


def numbers_as_text() -> st.SearchStrategy[tuple[str, float]]:
    """A decimal number as a table may show it, with the double nearest to it."""
    exact = st.decimals(min_value=-(10**9), max_value=10**9, places=6, allow_nan=False, allow_infinity=False)
    plain = exact.map(lambda number: (format(number, "f"), float(number)))
    powers = st.tuples(st.integers(-999999, 999999), st.integers(-30, 5)).map(
        lambda pair: (f"{pair[0]}e{pair[1]}", float(Decimal(pair[0]).scaleb(pair[1])))
    )
    return plain | powers


@given(st.lists(numbers_as_text(), max_size=30), st.data())
def test_any_accepted_number_is_read_exactly(numbers: list[tuple[str, float]], data: st.DataObject):
    padding = st.sampled_from(["", " ", "\u00a0", "\t"])
    shown = [data.draw(padding) + text + data.draw(padding) for text, _ in numbers]
    cells = parse_cells(pa.array(shown, pa.string()), CellStyle())
    np.testing.assert_array_equal(cells.value, [value for _, value in numbers])
    assert (cells.state == VALUE).all()
    commas = pa.array([text.replace(".", ",") for text in shown], pa.string())
    np.testing.assert_array_equal(parse_cells(commas, CellStyle(decimal=",")).value, cells.value)


WORDS = st.sampled_from(
    ["<0.5", "bdl", "-", "", "n.d.", "1.5", "0", "7 ppm", "#N/A", "1,5", "inf", "1e999", "< 3"]
)


@given(st.lists(WORDS | st.text(max_size=8) | st.text("0123456789.,+-eE<> %()±", max_size=10), max_size=30))
def test_the_fast_way_reads_what_the_slow_way_reads(texts: list[str]):
    cells = parse_cells(pa.array(texts, pa.string()), POINT)
    for index, text in enumerate(texts):
        want = read_text(text, POINT)
        if want.state == BELOW_LIMIT and not want.limit > 0 and not math.isnan(want.limit):
            want = want._replace(state=UNREADABLE, limit=math.nan)
        assert cells.state[index] == want.state, text
        np.testing.assert_equal(cells.value[index], want.value)
        np.testing.assert_equal(cells.limit[index], want.limit)


@given(st.text(max_size=12))
def test_a_value_is_never_made_up(text: str):
    """Whatever is read as a number shows just that number's digits, in order."""
    state, value, limit, _ = one(text, CellStyle())
    if state in (VALUE, BELOW_LIMIT):
        shown = re.sub(r"[\s<≤]", "", text.replace("\u2212", "-").replace("\ufeff", ""))
        shown = shown.translate(dict.fromkeys(map(ord, "\u200b\u200c\u200d\u2060")))
        shown = shown.replace("\uff0d", "-").replace("\ufe63", "-")
        assert float(shown) == (value if state == VALUE else limit)
