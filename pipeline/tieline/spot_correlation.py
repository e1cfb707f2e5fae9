"""How two elements vary together between the spots behind their phase means."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    Groups,
    IntArray,
    grain_codes,
    group_rows,
    labels,
    matches,
    narrow_labels,
    ranked,
    spot_codes,
)
from tieline.columns import PAIR_CORRELATIONS
from tieline.statistics.groups import group_mean
from tieline.statistics.paired_ratios import common_correlation
from tieline.tables import build

SESSION_KEYS = ("experiment", "phase", "technique", "batch")
_KEYS = (*SESSION_KEYS, "element", "analyte")
_NO_NUMBERS: IntArray = np.zeros(0, dtype=np.int64)
_NOTHING = (_NO_NUMBERS, _NO_NUMBERS, np.zeros(0), _NO_NUMBERS)


def spot_correlations(
    convert: pa.Table,
    value: FloatArray,
    used: BoolArray,
    pairs: Sequence[tuple[str, str]],
    *,
    of_grains: bool,
) -> pa.Table:
    """The table `pair.correlations`: for every pair of elements the correlation of their used values, by session.

    convert: rows with the phases that the means are made of; value: (rows,) as they enter the means, corrected and, where
    asked for, freed of overlap; used: (rows,) those that do. Spots count once each, or grains with their mean. Only rows
    of the elements named are looked at.
    """
    pairs = list(dict.fromkeys(pairs))
    wanted = sorted({element for pair in pairs for element in pair})
    rows = np.flatnonzero(used & narrow_labels(convert, "element").is_one_of(wanted))
    own = convert.select([*_KEYS, "grain", "table", "row"]).take(pa.array(rows))
    means = group_rows([labels(own, name) for name in _KEYS])
    unit = grain_codes(own) if of_grains else spot_codes(own)[0]
    n_units = int(unit.max(initial=0)) + 1
    made = [_correlations(means, value[rows], unit, n_units, pair) for pair in pairs]
    first, second, correlation, n_common = (
        np.concatenate(parts) for parts in zip(_NOTHING, *made, strict=True)
    )
    named = dict(zip(_KEYS, means.labels, strict=True))
    columns = {name: named[name].take(first) for name in SESSION_KEYS}
    for suffix, place in (("first", first), ("second", second)):
        columns |= {f"{name}_{suffix}": named[name].take(place) for name in ("element", "analyte")}
    return build(PAIR_CORRELATIONS, {**columns, "correlation": correlation, "n_common": n_common})


def _correlations(
    means: Groups, value: FloatArray, unit: IntArray, n_units: int, pair: tuple[str, str]
) -> tuple[IntArray, IntArray, FloatArray, IntArray]:
    """Every mean of the first element with every mean of the second of the same session, over the units with both.

    Numbers of the two means, the correlation and the number of common units, one entry per two means.
    """
    element = np.array(means.key(_KEYS.index("element")), dtype=object)
    session = group_rows(means.labels[: len(SESSION_KEYS)]).code
    first, second = (np.flatnonzero(element == name) for name in pair)
    at_first, at_second = matches(session[first], session[second])
    first, second = first[at_first], second[at_second]
    places, values = [], []
    for own in (first, second):
        combination, row = matches(own, means.code)
        keys = combination * n_units + unit[row]
        # Spots of one grain, and repeated cells, count once with their mean.
        place, kept = ranked(keys, max(len(own) * n_units, 1))
        places.append(keys[kept])
        values.append(group_mean(value[row], place, len(kept)))
    common, of_first, of_second = np.intersect1d(
        places[0], places[1], assume_unique=True, return_indices=True
    )
    correlation, n_common = common_correlation(
        values[0][of_first], values[1][of_second], common // n_units, len(first)
    )
    return first, second, correlation, n_common
