"""Which spots are whole analyses, so that their oxides must add up; one column per element for them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.chemistry.oxides import oxide_total, wt_percent_per_ppm
from tieline.screen.padding import few_rows
from tieline.screen.session import Measured
from tieline.statistics.threads import side_by_side

# Preferred columns where an element is reported several times: total iron, then oxides, elements, isotopes.
_TOTAL_IRON = ("FeOT", "Fe2O3T", "FeO", "Fe2O3")


@dataclass(frozen=True)
class WholeAnalyses:
    """Element concentrations of one technique in ppm, (n, E), with totals in wt% (n,), iron as FeO.

    `complete` marks spots whose oxides must add up: enough elements are measured and, over the session, such
    spots of this technique add up to most of the sample. `median_total` is that median, NaN without such
    spots.
    """

    measured: Measured
    elements: tuple[str, ...]
    value: FloatArray
    sigma: FloatArray
    total: FloatArray
    total_sd: FloatArray
    complete: BoolArray
    median_total: float


def whole_analyses(measured: Measured, min_oxides: int, incomplete_below: float) -> WholeAnalyses:
    """One column per element, total and its counting uncertainty.

    A value of which only the limit L is known counts as L/2 with standard uncertainty L/2. Sigmas that are
    not known count as 0: a total then looks surer than it is.
    """
    elements, value, sigma = one_column_per_element(measured)
    counted = [position for position, element in enumerate(elements) if element != "O"]
    names = [elements[position] for position in counted]
    factor = wt_percent_per_ppm(names)
    total, total_sd = np.empty((2, len(value)))
    complete = np.empty(len(value), dtype=np.bool_)

    def add_up(rows: slice) -> None:
        oxides = value[rows][:, counted]
        total[rows] = oxide_total(oxides, names)
        total_sd[rows] = np.sqrt(np.nan_to_num(sigma[rows][:, counted]) ** 2 @ factor**2)
        complete[rows] = np.isfinite(oxides).sum(axis=1) >= min_oxides

    side_by_side(add_up, list(few_rows(*value.shape)))
    median_total = float(np.median(total[complete])) if complete.any() else float("nan")
    if not median_total >= incomplete_below:
        complete = np.zeros_like(complete)
    return WholeAnalyses(measured, elements, value, sigma, total, total_sd, complete, median_total)


def one_column_per_element(measured: Measured) -> tuple[tuple[str, ...], FloatArray, FloatArray]:
    """Elements in sorted order; values and sigmas (n, E) of the preferred column with a value in each spot."""
    elements = tuple(sorted(set(measured.elements)))
    value = np.full((len(measured.value), len(elements)), np.nan)
    sigma = np.full_like(value, np.nan)
    columns = [(column, elements.index(measured.elements[column])) for column in _by_preference(measured)]

    def fill(rows: slice) -> None:
        part = measured.part(rows)
        only_limit = part.only_limit
        values = np.where(only_limit, 0.5 * part.limit, part.value)
        sigmas = np.where(only_limit, 0.5 * part.limit, part.sigma)
        for column, position in columns:
            wanted = ~np.isfinite(value[rows, position])
            value[rows, position] = np.where(wanted, values[:, column], value[rows, position])
            sigma[rows, position] = np.where(wanted, sigmas[:, column], sigma[rows, position])

    side_by_side(fill, list(few_rows(*measured.value.shape)))
    return elements, value, sigma


def _by_preference(measured: Measured) -> IntArray:
    def preference(column: int) -> tuple[int, int, str]:
        analyte = measured.analytes[column]
        if analyte in _TOTAL_IRON:
            return 0, _TOTAL_IRON.index(analyte), analyte
        is_oxide = "O" in analyte[1:]
        return 0 if is_oxide else 1 if analyte == measured.elements[column] else 2, 0, analyte

    return np.array(sorted(range(len(measured.analytes)), key=preference), dtype=np.int64)
