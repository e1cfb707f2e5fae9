"""Covariances between the D's of a pair, against the definition pair by pair."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.arrays import Labels
from tieline.covariances import covariance_table
from tieline.propagation import Side

NONE = np.zeros(0)
ELEMENTS = ("Ba", "Ni", "Sc", "Sr", "Y")
PAIRS = 3


def some_side(rng: np.random.Generator, n: int) -> Side:
    """Keys and uncertainties as they come: few standards, each of one pair, some rows without any."""
    standard = rng.integers(0, 3, n)
    uncertainty = np.where(standard > 0, np.array([0.0, 0.01, 0.03])[standard], 0.0)
    key = np.where(standard > 0, 10 * (np.arange(n) // len(ELEMENTS)) + standard, -1 - np.arange(n))
    behind = np.where((standard > 0) & (rng.random() < 0.5), 0.02 * standard, 0.0)
    return Side(NONE, NONE, NONE, NONE, NONE, NONE, uncertainty, key, behind, rng.integers(0, 2, n))


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.integers(0, 10**6))
def test_covariance_is_that_of_the_factors_that_two_coefficients_share(seed: int):
    rng = np.random.default_rng(seed)
    n = PAIRS * len(ELEMENTS)
    D, sd = rng.lognormal(0, 1, n), rng.lognormal(-3, 1, n)
    D[rng.random(n) < 0.2] = np.nan
    sides = some_side(rng, n), some_side(rng, n)
    row = np.arange(n)
    element = Labels(row % len(ELEMENTS), ELEMENTS)
    table = pa.table(
        {
            "experiment": Labels(row // len(ELEMENTS), ("A", "B", "C")).array(),
            "alpha": Labels(0 * row, ("olivine",)).array(),
            "beta": Labels(0 * row, ("glass",)).array(),
            "element": element.array(),
            "D": D,
            "D_sd": sd,
        }
    )
    found = SimpleNamespace(chosen=np.ones(n, dtype=bool), alpha=row, beta=row)
    source = np.where(rng.random(n) < 0.3, rng.integers(0, 2 * n, n), -1)
    sources = SimpleNamespace(calibration_key=row, source_of_standard=source)

    expected = {}
    for i in range(n):
        for j in range(i, n):
            if np.isnan(D[i]) or np.isnan(D[j]) or i // len(ELEMENTS) != j // len(ELEMENTS):
                continue
            shared = 0.0
            for side, other in (sides, sides[::-1]):
                u, key = side.internal_standard, side.internal_standard_key
                has = [u[k] > 0 and key[k] != other.internal_standard_key[k] for k in (i, j)]
                apart = [
                    side.standard_calibration_key[k] != other.standard_calibration_key[k] for k in (i, j)
                ]
                if all(has) and key[i] == key[j]:
                    shared += u[i] * u[j]
                    shared += (
                        apart[0] * apart[1] * side.standard_calibration[i] * side.standard_calibration[j]
                    )
                shared += u[j] ** 2 * (has[1] and source[j] >= 0 and source[j] == i)
                shared += u[i] ** 2 * (has[0] and source[i] >= 0 and source[i] == j)
            if i == j:
                expected[i, j] = sd[i] ** 2
            elif shared:
                expected[i, j] = D[i] * D[j] * shared
    made = covariance_table(table, sides, found, sources).to_pylist()
    names = [(table["experiment"][i].as_py(), element.texts[element.codes[i]]) for i in range(n)]
    assert [(row["experiment"], row["element"], row["other"]) for row in made] == [
        (*names[i], names[j][1]) for i, j in expected
    ]
    assert [row["covariance"] for row in made] == pytest.approx(list(expected.values()), rel=1e-12)
