"""One session in many layouts gives the same numbers."""

from __future__ import annotations

import math

import pytest

from ingest.layouts import ALL, ANALYTES, SPOTS, UNITS

LABELS = ("spot", "experiment", "phase", "zone", "analyte", "unit", "technique", "batch")


def expected() -> list[dict[str, object]]:
    """What the table says, worked out here without the package."""
    lines: list[dict[str, object]] = []
    for spot in SPOTS:
        for i, analyte in enumerate(ANALYTES):
            text = spot.value[i]
            only_limit = text.startswith("<")
            value = None if only_limit or not text else float(text)
            limit = float(text[1:]) if only_limit else float(spot.limit[i])
            lines.append(
                {
                    "spot": spot.name,
                    "experiment": spot.experiment,
                    "phase": spot.phase,
                    "zone": spot.zone or None,
                    "analyte": analyte,
                    "unit": UNITS[analyte],
                    "technique": "laser",
                    "batch": "b",
                    "value": value,
                    "sigma": None if value is None or not spot.sigma[i] else float(spot.sigma[i]),
                    "limit": limit,
                    "below_limit": only_limit or (value is not None and value < limit),
                }
            )
    return lines


@pytest.mark.parametrize("name", ALL)
def test_every_layout_gives_the_same_values(name: str):
    result = ALL[name]().read()
    result.ledger.check("ingest")
    lines = result.tables["ingest"].to_pylist()
    wanted = expected()
    assert len(lines) == len(wanted)
    for line, want in zip(lines, wanted, strict=True):
        assert {key: line[key] for key in LABELS} == {key: want[key] for key in LABELS}
        for number in ("value", "sigma", "limit"):
            if want[number] is None:
                assert line[number] is None
            else:
                assert math.isclose(line[number], want[number], rel_tol=1e-12), (line, number)
        assert line["below_limit"] == want["below_limit"]
    assert result.tables["ingest.spots"].column("sequence").to_pylist() == [1, 2, 3, 4, 5]


def test_row_numbers_are_those_of_the_spreadsheet():
    rows = ALL["averages_between"]().read().tables["ingest.spots"].column("row").to_pylist()
    assert rows == [4, 5, 10, 11, 12]
    rows = ALL["units_below_xlsx"]().read().tables["ingest.spots"].column("row").to_pylist()
    assert rows == [4, 5, 6, 7, 8]


def test_summaries_and_repeated_headers_are_set_aside_and_told():
    result = ALL["averages_between"]().read()
    aside = result.tables["ingest.set_aside"].to_pylist()
    assert [(line["row"], line["cells"]) for line in aside] == [(6, 15), (7, 15), (9, 15)]
    assert result.ledger.entered == 8 * 15
    assert result.ledger.outcomes["not read"] == 5 * 2
