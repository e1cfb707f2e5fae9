"""How two elements vary together between the spots behind their phase means."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    IntArray,
    Labels,
    flags,
    group_rows,
    labels,
    matches,
    numbers,
    ranked,
    spot_codes,
)
from tieline.correction import calibrated
from tieline.statistics.groups import group_mean
from tieline.statistics.paired_ratios import common_correlation

if TYPE_CHECKING:
    import pandas as pd

MEAN_KEYS = ("experiment", "phase", "technique", "batch")
CORRELATION_COLUMNS = (*MEAN_KEYS, "analyte_first", "analyte_second", "correlation", "n_common")
_LABELS = (*MEAN_KEYS, "analyte", "element", "grain", "zone", "table")
_NUMBERS = ("row", "value_ppm", "sigma_ppm", "limit_ppm")


@dataclass(frozen=True)
class SpotTables:
    """The tables that hold the values behind the means: `convert` and `screen` row by row, and what corrects them."""

    convert: pa.Table
    screen: pa.Table
    calibrate: pa.Table
    spots: pa.Table


@dataclass(frozen=True)
class _Values:
    """Used values: mean (rows,) numbers the phase mean, unit (rows,) the spot or grain; means: one row per mean."""

    value: FloatArray
    mean: IntArray
    unit: IntArray
    n_units: int
    means: pd.DataFrame


def spot_correlations(
    tables: SpotTables, pair: pa.Table, pairs: Sequence[tuple[str, str]]
) -> dict[tuple[str, str], pd.DataFrame]:
    """For every pair of elements the correlation of their values, one row per two means of one session.

    Only rows of the elements named are looked at. Grains count as units where the means of `pair` were made from grains.
    Values are taken as they enter the means: corrected for drift, and freed of overlap where that was asked for.
    """
    wanted = sorted({element for one in pairs for element in one})
    found = _values(tables, pair, wanted)
    return {(first, second): _correlations(found, first, second) for first, second in pairs}


def _values(tables: SpotTables, pair: pa.Table, wanted: Sequence[str]) -> _Values:
    import pandas as pd

    rows = pa.array(np.flatnonzero(_used(tables, wanted)))
    convert = tables.convert.select([*_LABELS, *_NUMBERS]).take(rows)
    value = calibrated(convert, tables.calibrate, tables.spots).value
    if tables.screen.column("unmixed_ppm").null_count < tables.screen.num_rows:
        unmixed = numbers(tables.screen.select(["unmixed_ppm"]).take(rows), "unmixed_ppm")
        value = np.where(np.isfinite(unmixed), unmixed, value)
    keys = {name: labels(convert, name) for name in (*MEAN_KEYS, "analyte", "element")}
    keys["phase"] = _part_names(convert, keys["phase"], set(labels(pair, "phase").texts))
    groups = group_rows(list(keys.values()))
    unit, first = spot_codes(convert)
    n_units = len(first)
    if np.any(numbers(pair, "n_independent") < numbers(pair, "n_used")):
        grain = labels(convert, "grain")
        unit = np.where(grain.codes >= 0, grain.codes, len(grain.texts) + unit)
        n_units += len(grain.texts)
    means = pd.DataFrame({name: groups.key(place) for place, name in enumerate(keys)}, dtype=object)
    return _Values(value, groups.code, unit, n_units, means)


def _used(tables: SpotTables, wanted: Sequence[str]) -> BoolArray:
    element = labels(tables.convert, "element")
    chosen = element.is_one_of(wanted) & flags(tables.screen, "use")
    place = np.flatnonzero(chosen)
    known = tables.convert.select(["value_ppm", "experiment"]).take(pa.array(place))
    keep = np.isfinite(numbers(known, "value_ppm")) & (labels(known, "experiment").codes >= 0)
    chosen[place[~keep]] = False
    return chosen


def _part_names(convert: pa.Table, phase: Labels, known: set[str]) -> Labels:
    """The phase of every row, or its part, such as `olivine (rim)`, where there are means of that part."""
    texts, codes = list(phase.texts), phase.codes.copy()
    for name in ("zone", "grain"):
        part = labels(convert, name)
        for at, text in enumerate(phase.texts):
            for own, suffix in enumerate(part.texts):
                if f"{text} ({suffix})" in known:
                    codes[(phase.codes == at) & (part.codes == own)] = len(texts)
                    texts.append(f"{text} ({suffix})")
    order = sorted(range(len(texts)), key=texts.__getitem__)
    return Labels(np.argsort(order)[codes] if texts else codes, tuple(texts[place] for place in order))


def _correlations(found: _Values, first: str, second: str) -> pd.DataFrame:
    """Every mean of `first` with every mean of `second` of the same session, over the units that have both."""
    own = found.means.assign(mean=np.arange(len(found.means)))
    both = own[own["element"] == first].merge(
        own[own["element"] == second], on=list(MEAN_KEYS), suffixes=("_first", "_second")
    )
    place: list[IntArray] = []
    value: list[FloatArray] = []
    for side in ("first", "second"):
        combination, row = matches(both[f"mean_{side}"].to_numpy(dtype=np.int64), found.mean)
        keys = combination * found.n_units + found.unit[row]
        # Spots of one grain, and repeated cells, count once with their mean.
        unit, kept = ranked(keys, max(len(both) * found.n_units, 1))
        place.append(keys[kept])
        value.append(group_mean(found.value[row], unit, len(kept)))
    common, at_first, at_second = np.intersect1d(place[0], place[1], assume_unique=True, return_indices=True)
    group = common // max(found.n_units, 1)
    correlation, n_common = common_correlation(value[0][at_first], value[1][at_second], group, len(both))
    return both.assign(correlation=correlation, n_common=n_common)[list(CORRELATION_COLUMNS)]
