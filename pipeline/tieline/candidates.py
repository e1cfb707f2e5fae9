"""Which two phase means make each D, where an element was measured by several techniques, batches or analytes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, IntArray, flags, labels, numbers

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
    import pandas as pd

    experiment, phase, element = (labels(pair, name) for name in ("experiment", "phase", "element"))
    usable = np.flatnonzero(numbers(pair, "n_used") > 0)
    means = pd.DataFrame(
        {
            "experiment": experiment.text()[usable],
            "phase": phase.text()[usable],
            "element": element.codes[usable],
            "row": usable,
        }
    )
    formed = np.flatnonzero(flags(pairs, "formed"))
    wanted = pd.DataFrame(
        {name: labels(pairs, name).text()[formed] for name in ("experiment", "alpha", "beta")}
    )
    wanted["pair"] = formed
    joined = wanted.merge(
        means.rename(columns={"phase": "alpha", "row": "row_alpha"}), on=["experiment", "alpha"]
    )
    joined = joined.merge(
        means.rename(columns={"phase": "beta", "row": "row_beta"}), on=["experiment", "beta", "element"]
    )
    return _ranked(joined, pair, relative_sd, prefer)


def _ranked(joined: object, pair: pa.Table, relative_sd: FloatArray, prefer: tuple[str, ...]) -> Candidates:
    pairs_row, element, alpha, beta = (
        np.asarray(joined[name], dtype=np.int64)  # type: ignore[index]
        for name in ("pair", "element", "row_alpha", "row_beta")
    )
    batch, technique, analyte = (labels(pair, name) for name in ("batch", "technique", "analyte"))
    preference = np.array(
        [prefer.index(t) if t in prefer else len(prefer) for t in technique.texts], dtype=np.int64
    )
    preference = preference[technique.codes] if len(technique.codes) else preference
    is_limit = ~np.isfinite(numbers(pair, "mean_ppm"))
    order = np.lexsort(
        (
            batch.codes[beta],
            batch.codes[alpha],
            analyte.codes[beta],
            analyte.codes[alpha],
            np.nan_to_num(np.hypot(relative_sd[alpha], relative_sd[beta]), nan=np.inf),
            is_limit[alpha].astype(np.int64) + is_limit[beta],
            preference[alpha] + preference[beta],
            batch.codes[alpha] != batch.codes[beta],
            element,
            pairs_row,
        )
    )
    pairs_row, element, alpha, beta = pairs_row[order], element[order], alpha[order], beta[order]
    new = np.ones(len(order), dtype=np.bool_)
    new[1:] = (pairs_row[1:] != pairs_row[:-1]) | (element[1:] != element[:-1])
    return Candidates(
        pairs_row, alpha, beta, new, np.flatnonzero(new)[np.cumsum(new) - 1] if len(new) else order
    )
