"""One session in many layouts gives the same element concentrations."""

from __future__ import annotations

import math

import pytest

from ingest.layouts import ALL
from tieline.convert import convert
from tieline.settings.chemistry import ConvertSettings

KEYS = ("spot", "experiment", "phase", "technique", "batch", "analyte", "element", "below_limit")


def concentrations(name: str) -> list[dict[str, object]]:
    table = convert(ALL[name]().read().tables["ingest"], settings=ConvertSettings()).tables["convert"]
    return table.to_pylist()


@pytest.mark.parametrize("name", [name for name in ALL if name != next(iter(ALL))])
def test_every_layout_converts_alike(name: str):
    first = concentrations(next(iter(ALL)))
    other = concentrations(name)
    assert len(other) == len(first) > 0
    for ours, theirs in zip(other, first, strict=True):
        assert {key: ours[key] for key in KEYS} == {key: theirs[key] for key in KEYS}
        for number in ("value_ppm", "sigma_ppm", "limit_ppm"):
            if theirs[number] is None:
                assert ours[number] is None
            else:
                assert math.isclose(ours[number], theirs[number], rel_tol=1e-12), (number, ours)
