"""What the overlap bound leaves of the D's of every pair: which would survive, which are only upper limits."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, PAIR_KEYS, check

if TYPE_CHECKING:
    import pandas as pd

SHARE = 0.3
"""Overlap of this share of D leaves D an upper limit; own choice, as in `statistics.overlap_bound`."""


def overlap_checks(partition: pd.DataFrame) -> pd.DataFrame:
    """One row of the `assess` table per pair of phases whose D's bound the overlap.

    partition: columns as in the stage file. value: the largest fraction of beta in alpha that the smallest D allows. "cannot
    tell" where that fraction could make 30 % or more of some D below one: nothing in the D's rules out that overlap made them.
    No overlap needs to be there; what was found in single spots is another matter.
    """
    import pandas as pd

    rows: list[dict[str, Any]] = []
    own = partition[(partition["kind"] == "value") & partition["overlap_bound"].notna()]
    for key, group in own.groupby(list(PAIR_KEYS), sort=True, observed=True):
        bound = float(group["overlap_bound"].iloc[0])
        doubtful = (group["D"] < 1) & (bound >= SHARE * group["D"])
        keys = dict(zip(PAIR_KEYS, key, strict=True))
        upper, safe = _names(group[doubtful]), _names(group[~doubtful])
        words = f"The smallest D leave room for up to {bound:.2g} of {keys['beta']} in {keys['alpha']}. "
        words += f"Upper limits as far as overlap is concerned: {upper}. " if upper else ""
        words += f"Not overlap: {safe}." if safe else ""
        rows.append(
            check(
                "overlap-bound", keys, f"{keys['beta']} in {keys['alpha']}", CANNOT_TELL if upper else CONSISTENT,
                words.strip(), value=bound,
            )
        )  # fmt: skip
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _names(group: pd.DataFrame) -> str:
    """Elements by increasing D, each with the lowest D that overlap leaves."""
    ordered = group.sort_values("D", kind="stable")
    lowest = np.where(ordered["D_overlap_lo"].notna(), ordered["D_overlap_lo"], 0.0)
    return ", ".join(
        f"{element} (D {D:.2g}, at least {low:.2g})" if low > 0 else f"{element} (D {D:.2g})"
        for element, D, low in zip(ordered["element"], ordered["D"], lowest, strict=True)
    )
