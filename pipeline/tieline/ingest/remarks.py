"""What a person should know about the cells of one table."""

from __future__ import annotations

from collections import Counter

from tieline.ingest.asides import Asides
from tieline.ingest.matrices import TOTAL_TOLERANCE, Counts
from tieline.results import Remark
from tieline.settings.ingest import Table

AMBIGUOUS = ("n.d.", "nd", "n. d.")


def cell_remarks(table: Table, counts: Counts, asides: Asides) -> list[Remark]:
    """Ambiguous words, limits nobody stated, totals that do not fit, and what was set aside."""
    messages = []
    # From the settings in effect alone: whether a file spells a default out must not change a result.
    ambiguous = sum(counts.words[word] for word in AMBIGUOUS)
    if ambiguous:
        messages.append(
            f'{ambiguous} cells say "n.d.", taken as not measured; if it means not detected, list it in below_limit.'
        )
    if counts.no_limit:
        messages.append(
            f"{counts.no_limit} cells are below a detection limit that is not given; state limit.values."
        )
    if counts.wrong_totals:
        row, total, total_of_columns = counts.wrong_totals[0]
        messages.append(
            f"the Total column differs from the sum of the columns by more than {TOTAL_TOLERANCE} wt% in "
            f"{len(counts.wrong_totals)} of {counts.n_totals} rows, first in row {row}: "
            f"{total:g} against {total_of_columns:.2f}."
        )
    messages += [
        f"{count} {'line' if count == 1 else 'lines'} set aside: {reason}."
        for reason, count in sorted(Counter(asides.reasons).items())
    ]
    return [Remark(message, asides.table) for message in messages]
