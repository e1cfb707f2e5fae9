"""Which row is the header, which the units, which mark is the decimal one."""

from __future__ import annotations

import pytest

from tieline.reading.header import find_decimal, find_header, is_units_row


@pytest.mark.parametrize(
    ("rows", "index"),
    [
        ([["Spot", "MgO"], ["1", "2"]], 0),
        ([["1", "2"], ["3", "4"]], None),
        ([["Title", ""], ["", ""], ["Spot", "MgO"], ["1", "2"]], 2),
        ([["one"], ["1"]], 0),
        ([], None),
    ],
)
def test_find_header(rows: list[list[str]], index: int | None):
    assert find_header(rows) == index


@pytest.mark.parametrize(
    ("row", "units"),
    [
        (["", "wt%", "ppm"], True),
        (["", "(wt.%)", "[µg/g]", "µm"], True),
        (["", "wt%", "1s"], True),
        (["a", "wt%", "b", "x"], False),
        (["", "wt%", "12"], False),
        (["", "um", "h"], False),
        (["", ""], False),
    ],
)
def test_units_rows(row: list[str], units: bool):
    assert is_units_row(row) is units


@pytest.mark.parametrize(
    ("cells", "mark"),
    [
        (["1.5", "2"], "."),
        (["1,5", "2"], ","),
        (["1", "2"], "."),
        (["1,234"], None),
        (["0,234"], ","),
        (["1,234", "0,5"], ","),
        (["1,234", "0.5"], "."),
        (["<0,12", "−1,5e-3"], ","),
        (["1.2", "1,55", "1,66"], ","),
    ],
)
def test_find_decimal(cells: list[str], mark: str | None):
    assert find_decimal([cells]) == mark
