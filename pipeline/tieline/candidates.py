"""Which two phase means make each D, where an element was measured by several techniques, batches or analytes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, IntArray, common_keys, flags, labels, matches, numbers

RULE = (
    "both means from one batch before two; then the preferred technique; then two values before a limit; "
    "then the smaller relative uncertainty; then the first by name"
)


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
    pairs: pa.Table, pair: pa.Table, relative_sd: FloatArray, prefer: tuple[str, ...]
) -> Candidates:
    """All combinations of two means of one element for the pairs that could be formed, ranked by `RULE`.

    relative_sd: relative standard uncertainty of every mean with its unshared errors, shape (rows of pair,).
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
    return _ranked(pairs_row[number], alpha[number], usable[beta], pair, relative_sd, prefer)


def _ranked(
    pairs_row: IntArray,
    alpha: IntArray,
    beta: IntArray,
    pair: pa.Table,
    relative_sd: FloatArray,
    prefer: tuple[str, ...],
) -> Candidates:
    elements = labels(pair, "element")
    quotient = pairs_row * (len(elements.texts) + 1) + elements.codes[alpha]
    order = np.argsort(quotient, kind="stable")
    new = _first_of_equals(quotient[order])
    if not new.all():
        order = np.lexsort((*_preferences(alpha, beta, pair, relative_sd, prefer), quotient))
        new = _first_of_equals(quotient[order])
    chosen_row = np.flatnonzero(new)[np.cumsum(new) - 1] if len(new) else order
    return Candidates(pairs_row[order], alpha[order], beta[order], new, chosen_row)


def _first_of_equals(ordered: IntArray) -> BoolArray:
    new = np.ones(len(ordered), dtype=np.bool_)
    new[1:] = ordered[1:] != ordered[:-1]
    return new


def _preferences(
    alpha: IntArray, beta: IntArray, pair: pa.Table, relative_sd: FloatArray, prefer: tuple[str, ...]
) -> tuple[IntArray | FloatArray | BoolArray, ...]:
    """What `RULE` goes by, the least important first; smaller is better."""
    batch, technique, analyte = (labels(pair, name) for name in ("batch", "technique", "analyte"))
    places = [prefer.index(t) if t in prefer else len(prefer) for t in technique.texts]
    preference = np.array([*places, len(prefer)], dtype=np.int64)[technique.codes]
    is_limit = ~np.isfinite(numbers(pair, "mean_ppm"))
    return (
        batch.codes[beta],
        batch.codes[alpha],
        analyte.codes[beta],
        analyte.codes[alpha],
        np.nan_to_num(np.hypot(relative_sd[alpha], relative_sd[beta]), nan=np.inf),
        is_limit[alpha].astype(np.int64) + is_limit[beta],
        preference[alpha] + preference[beta],
        batch.codes[alpha] != batch.codes[beta],
    )
