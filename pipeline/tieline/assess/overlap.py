"""What the overlap bound leaves of the D's of every pair: which would survive, which are only upper limits."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

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

    names = [*PAIR_KEYS, "element", "D", "D_overlap_lo", "overlap_bound"]
    own = partition.loc[(partition["kind"] == "value") & partition["overlap_bound"].notna(), names]
    pairs: dict[tuple[str, str, str], list[dict[str, Any]]] = {}
    for row in own.sort_values([*PAIR_KEYS, "D"], kind="stable").to_dict("records"):
        pairs.setdefault((row["experiment"], row["alpha"], row["beta"]), []).append(row)
    rows = [_check(dict(zip(PAIR_KEYS, key, strict=True)), group) for key, group in pairs.items()]
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _check(keys: dict[str, str], group: list[dict[str, Any]]) -> dict[str, Any]:
    """One pair; group: its D's in increasing order."""
    bound = float(group[0]["overlap_bound"])
    doubtful = [row for row in group if row["D"] < 1 and bound >= SHARE * row["D"]]
    upper, safe = _names(doubtful), _names([row for row in group if row not in doubtful])
    words = f"The smallest D leave room for up to {bound:.2g} of {keys['beta']} in {keys['alpha']}. "
    words += f"Upper limits as far as overlap is concerned: {upper}. " if upper else ""
    words += f"Not overlap: {safe}." if safe else ""
    subject, verdict = f"{keys['beta']} in {keys['alpha']}", CANNOT_TELL if upper else CONSISTENT
    return check("overlap-bound", keys, subject, verdict, words.strip(), value=bound)


def _names(group: list[dict[str, Any]]) -> str:
    """Elements, each with the lowest D that overlap leaves."""
    return ", ".join(
        f"{row['element']} (D {row['D']:.2g}, at least {row['D_overlap_lo']:.2g})"
        if row["D_overlap_lo"] > 0
        else f"{row['element']} (D {row['D']:.2g})"
        for row in group
    )
