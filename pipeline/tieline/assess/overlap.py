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

    partition: columns as in the stage file. value: the largest fraction of beta in alpha that the smallest D allows; no such
    overlap needs to be there, and what was found in single spots is another matter. The smallest D sets the bound, so it
    never survives it, which says nothing: "cannot tell" is for pairs where the bound could make 30 % or more of others
    below one too, or where no D is below one.
    """
    import pandas as pd

    names = [*PAIR_KEYS, "element", "D", "D_overlap_lo", "overlap_bound"]
    own = partition.loc[(partition["kind"] == "value") & partition["overlap_bound"].notna(), names]
    own = own.sort_values([*PAIR_KEYS, "D"], kind="stable")
    pairs = own.groupby(list(PAIR_KEYS), sort=False)
    bound = pairs["overlap_bound"].transform("first")
    own = own.assign(place=pairs.cumcount(), doubtful=(own["D"] < 1) & (bound >= SHARE * own["D"]))
    pairs = own.groupby(list(PAIR_KEYS), sort=False)
    own = own.assign(n=pairs["place"].transform("size"), n_doubtful=pairs["doubtful"].transform("sum"))
    # The doubtful ones come first; of the others the smallest alone is named.
    named = own[(own["place"] == 0) | (own["place"] <= own["n_doubtful"])]
    groups: dict[tuple[str, str, str], list[dict[str, Any]]] = {}
    for row in named.to_dict("records"):
        groups.setdefault((row["experiment"], row["alpha"], row["beta"]), []).append(row)
    rows = [_check(dict(zip(PAIR_KEYS, key, strict=True)), group) for key, group in groups.items()]
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _check(keys: dict[str, str], group: list[dict[str, Any]]) -> dict[str, Any]:
    """One pair; group: its doubtful D's in increasing order, and the smallest of the others."""
    alpha, beta, smallest = keys["alpha"], keys["beta"], group[0]
    bound, subject = float(smallest["overlap_bound"]), f"{beta} in {alpha}"
    if smallest["D"] >= 1:
        words = (
            f"No D lies below one, so none bounds the {beta} in {alpha}. It can only have lowered these D."
        )
        return check("overlap-bound", keys, subject, CANNOT_TELL, words)
    doubtful, safe = group[: smallest["n_doubtful"]], group[smallest["n_doubtful"] :]
    others, n_safe = doubtful[1:], smallest["n"] - smallest["n_doubtful"]
    words = f"The D leave room for up to {bound:.2g} of {beta} in {alpha}. "
    if others:
        words += f"That could make {SHARE:.0%} or more of {_names(doubtful)}: upper limits as far as overlap is concerned. "
    elif doubtful:
        words += (
            f"Only the smallest, {_names(doubtful)}, which sets that bound, could itself be nothing else. "
        )
    if safe:
        count = "the other" if doubtful else "all"
        words += f"Of {count} {n_safe}, from {_names(safe)} upwards, it leaves more than {1 - SHARE:.0%}."
    verdict = CANNOT_TELL if others else CONSISTENT
    return check("overlap-bound", keys, subject, verdict, words.strip(), value=bound)


def _names(group: list[dict[str, Any]]) -> str:
    """Elements, each with the lowest D that overlap and the errors leave."""
    return ", ".join(
        f"{row['element']} (D {row['D']:.2g}, at least {row['D_overlap_lo']:.2g})"
        if row["D_overlap_lo"] > 0
        else f"{row['element']} (D {row['D']:.2g})"
        for row in group
    )
