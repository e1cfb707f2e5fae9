"""Which two phase means make each D, where an element was measured by several techniques, batches or analytes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, IntArray, common_keys, flags, labels, matches, numbers
from tieline.mean_sources import MeanSources

RULE = (
    "both means from one technique and batch before two; then one source column for both; then two means clearly above "
    "zero and with an interval before limits, and limits before single values; then the preferred technique; then the "
    "smaller counting uncertainty, or of limits the lower; then more spots; then the first by name"
)

# A mean is clearly above zero when it exceeds this many of its standard errors.
CLEARLY = 2.0


@dataclass(frozen=True)
class Candidates:
    """Every possible D: rows of `pair.pairs`, of alpha's and of beta's mean in `pair`, best first within a D.

    `chosen` marks the best of each D; `chosen_row` gives for every candidate the chosen one of its D.
    """

    pair: IntArray
    alpha: IntArray
    beta: IntArray
    chosen: BoolArray
    chosen_row: IntArray


def candidates(
    pairs: pa.Table, pair: pa.Table, sources: MeanSources, limit: FloatArray, prefer: tuple[str, ...]
) -> Candidates:
    """All combinations of two means of one element for the pairs that could be formed, ranked by `RULE`.

    limit: lowest limit among the values of every mean, NaN where it has none, shape (rows of pair,). The observed
    scatter takes no part in the ranking: the smallest of several estimated uncertainties is too small.
    """
    usable = np.flatnonzero(numbers(pair, "n_used") > 0)
    formed = np.flatnonzero(flags(pairs, "formed"))
    sides = [("experiment", "alpha"), ("experiment", "beta"), ("experiment", "phase")]
    of_alpha, of_beta, of_mean = common_keys((pairs, pairs, pair), sides)
    element = labels(pair, "element")
    n_elements = len(element.texts) + 1
    number, alpha = matches(of_alpha[formed], of_mean[usable])
    pairs_row, alpha = formed[number], usable[alpha]
    of_element = of_mean * n_elements + element.codes
    wanted = of_beta[pairs_row] * n_elements + element.codes[alpha]
    number, beta = matches(wanted, of_element[usable])
    return _ranked(pairs_row[number], alpha[number], usable[beta], sources, limit, prefer)


def _ranked(
    pairs_row: IntArray,
    alpha: IntArray,
    beta: IntArray,
    sources: MeanSources,
    limit: FloatArray,
    prefer: tuple[str, ...],
) -> Candidates:
    elements = sources.labels["element"]
    quotient = pairs_row * (len(elements.texts) + 1) + elements.codes[alpha]
    order = np.argsort(quotient, kind="stable")
    new = _first_of_equals(quotient[order])
    if not new.all():
        order = np.lexsort((*_preferences(alpha, beta, sources, limit, prefer), quotient))
        new = _first_of_equals(quotient[order])
    chosen_row = np.flatnonzero(new)[np.cumsum(new) - 1] if len(new) else order
    return Candidates(pairs_row[order], alpha[order], beta[order], new, chosen_row)


def _first_of_equals(ordered: IntArray) -> BoolArray:
    new = np.ones(len(ordered), dtype=np.bool_)
    new[1:] = ordered[1:] != ordered[:-1]
    return new


def _preferences(
    alpha: IntArray, beta: IntArray, sources: MeanSources, limit: FloatArray, prefer: tuple[str, ...]
) -> tuple[IntArray | FloatArray | BoolArray, ...]:
    """What `RULE` goes by, the least important first; smaller is better."""
    batch, technique, analyte = (sources.labels[name] for name in ("batch", "technique", "analyte"))
    places = [prefer.index(t) if t in prefer else len(prefer) for t in technique.texts]
    preference = np.array([*places, len(prefer)], dtype=np.int64)[technique.codes]
    standing = _standing(sources)
    worse = np.maximum(standing[alpha], standing[beta])
    apart = (batch.codes[alpha] != batch.codes[beta]) | (technique.codes[alpha] != technique.codes[beta])
    return (
        batch.codes[beta],
        batch.codes[alpha],
        analyte.codes[beta],
        analyte.codes[alpha],
        -(sources.n[alpha] + sources.n[beta]),
        np.where(worse == 0, _counting(sources, alpha, beta), _reach(sources, limit, alpha, beta)),
        preference[alpha] + preference[beta],
        worse,
        analyte.codes[alpha] != analyte.codes[beta],
        apart,
    )


def _standing(sources: MeanSources) -> IntArray:
    """0: a mean clearly above zero with an interval; 1: a limit, or not clearly above zero; 2: no interval."""
    is_value = np.isfinite(sources.mean)
    error = np.fmax(sources.se, np.nan_to_num(sources.counting_se))
    clear = is_value & (sources.dof > 0) & (sources.mean > CLEARLY * error)
    return np.where(clear, 0, np.where(is_value & ~(sources.dof > 0), 2, 1))


def _counting(sources: MeanSources, alpha: IntArray, beta: IntArray) -> FloatArray:
    """Relative counting uncertainty of the quotient; infinite where it is unknown."""
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = sources.counting_sd / np.sqrt(sources.n) / sources.mean
    return np.nan_to_num(np.hypot(relative[alpha], relative[beta]), nan=np.inf)


def _reach(sources: MeanSources, limit: FloatArray, alpha: IntArray, beta: IntArray) -> FloatArray:
    """Roughly how far up the quotient could be, where a mean is a limit or hardly above zero."""
    top = np.where(np.isfinite(sources.mean), sources.mean + CLEARLY * np.nan_to_num(sources.se), limit)
    bottom = np.where(np.isfinite(sources.mean) & (sources.mean > 0), sources.mean, np.nan)
    return np.nan_to_num(top[alpha] / bottom[beta], nan=np.inf)
