"""Variances of the D's, and the covariances that internal standards make between the elements of a pair."""

from __future__ import annotations

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, IntArray, labels, numbers
from tieline.candidates import Candidates
from tieline.columns import PARTITION_COVARIANCE
from tieline.mean_sources import MeanSources
from tieline.propagation import Side
from tieline.tables import build


def covariance_table(
    table: pa.Table, sides: tuple[Side, Side], found: Candidates, sources: MeanSources
) -> pa.Table:
    """One row per variance and per covariance that is not zero, from the table of D, its sides and its means.

    Elements measured by one rescaled technique share the factor of each phase, with the calibration behind it:
    cov(D_i, D_j) = D_i D_j (u_a² + u_b²). The measurement that gave the actual values has it in common with all of
    them. Everything else is taken as independent between elements.
    """
    rows = np.flatnonzero(found.chosen)
    D, sd = numbers(table, "D"), numbers(table, "D_sd")
    usable = np.isfinite(D) & np.isfinite(sd)
    keys = [
        np.where(side.internal_standard[rows] > 0, side.internal_standard_key[rows], -1) for side in sides
    ]
    # A standard that both phases share cancels in D.
    keys = [np.where(keys[0] == keys[1], -1, key) for key in keys]
    means = [found.alpha[rows], found.beta[rows]]
    measured = [sources.calibration_key[mean] for mean in means]
    behind = [
        np.where(key >= 0, sources.source_of_standard[mean], -1)
        for key, mean in zip(keys, means, strict=True)
    ]
    is_source = np.isin(measured[0], behind[0][behind[0] >= 0]) | np.isin(
        measured[1], behind[1][behind[1] >= 0]
    )
    code, sharing = _pair_codes(table), usable & ((keys[0] >= 0) | (keys[1] >= 0) | is_source)
    first, second, variances = _pairs_within(code, usable, sharing)
    apart = sides[0].standard_calibration_key[rows] != sides[1].standard_calibration_key[rows]
    shared = np.zeros(len(first))
    # Over the many pairs only what says something: mostly one standard per phase, and its source not among the D.
    for side, key, own, source in zip(sides, keys, measured, behind, strict=True):
        relative = side.internal_standard[rows]
        factor = np.where(key >= 0, relative, 0.0)
        calibration = np.where(apart & (key >= 0), side.standard_calibration[rows], 0.0)
        common = factor[first] * factor[second]
        if calibration.any():
            common += calibration[first] * calibration[second]
        if not _one_key_each(code, sharing, key):
            common[key[first] != key[second]] = 0.0
        shared += common
        if (source >= 0).any():
            shared += np.where(
                (source[second] >= 0) & (own[first] == source[second]), relative[second] ** 2, 0.0
            )
            shared += np.where(
                (source[first] >= 0) & (own[second] == source[first]), relative[first] ** 2, 0.0
            )
    covariance = D[first] * D[second]
    covariance *= shared
    covariance[variances] = sd[usable] ** 2
    kept = shared != 0
    kept[variances] = True
    if not kept.all():
        first, second, covariance = first[kept], second[kept], covariance[kept]
    return build(
        PARTITION_COVARIANCE,
        {
            **{name: _codes_of(table, name, first) for name in ("experiment", "alpha", "beta", "element")},
            "other": _codes_of(table, "element", second),
            "covariance": covariance,
        },
    )


def _codes_of(table: pa.Table, name: str, rows: IntArray) -> pa.DictionaryArray:
    """A label column without nulls, at some rows; as narrow codes, for there may be many rows."""
    column = labels(table, name)
    codes = column.codes.astype(np.int32)[rows]
    return pa.DictionaryArray.from_arrays(pa.array(codes), pa.array(column.texts, pa.string()))


def _one_key_each(code: IntArray, sharing: BoolArray, key: IntArray) -> bool:
    """Whether all sharing rows of one code have one key; rows of one code stand together."""
    code, key = code[sharing], key[sharing]
    return bool(np.all((key[1:] == key[:-1]) | (code[1:] != code[:-1])))


def _pair_codes(table: pa.Table) -> IntArray:
    """A number per pair in the order of the rows, where the rows of a pair stand together."""
    columns = [labels(table, name).codes for name in ("experiment", "alpha", "beta")]
    new = np.zeros(table.num_rows, dtype=np.int64)
    for codes in columns:
        new[1:] |= codes[1:] != codes[:-1]
    return np.cumsum(new)


def _pairs_within(
    code: IntArray, usable: BoolArray, sharing: BoolArray
) -> tuple[IntArray, IntArray, IntArray]:
    """Row pairs (i, j), sorted: every usable row with itself, and i < j of all sharing rows with one code.

    Rows of one code stand together; a sharing row is usable. Also the places of the pairs of a row with itself, in the
    order of the usable rows.
    """
    alone, among = np.flatnonzero(usable), np.flatnonzero(sharing)
    if not len(among):
        return alone, alone, np.arange(len(alone))
    place = np.cumsum(sharing)[alone]  # of the next sharing row after each
    end = np.searchsorted(code[among], code[alone], side="right")
    size = np.where(sharing[alone], end - place, 0) + 1
    start = np.cumsum(size) - size
    # Each row's later partners stand side by side in `among`; one place before them is for the row itself.
    partner = np.repeat(place - 1 - start, size)
    partner += np.arange(len(partner))
    second = among[partner]
    second[start] = alone
    return np.repeat(alone, size), second, start
