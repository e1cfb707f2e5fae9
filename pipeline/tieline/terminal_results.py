"""The table of D on a terminal: one block per pair, elements down, experiments across."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pyarrow as pa
from rich.table import Table
from rich.text import Text

from tieline.notation import written

# Class marks are readable without colour; the colours only repeat them.
CLASS_STYLES = {
    "compatible": ("c", "blue"),
    "incompatible": ("i", "yellow"),
    "highly incompatible": ("h", "magenta"),
    "unresolved": ("?", "dim"),
}
CELL_WIDTH = 13
LEGEND = (
    "c compatible  i incompatible  h highly incompatible  ? unresolved;  "
    "x(y): y is the standard uncertainty in the last digits;  < > limits"
)


def partition_tables(classify: pa.Table, width: int) -> Iterator[Table | Text]:
    """Blocks of as many experiments as the width holds, then the legend."""
    rows = classify.select(
        ["experiment", "alpha", "beta", "element", "D", "D_sd", "D_lo", "D_hi", "kind", "confidence", "class"]
    ).to_pylist()
    columns_per_block = max(1, (width - 6) // CELL_WIDTH)
    for alpha, beta in dict.fromkeys((row["alpha"], row["beta"]) for row in rows):
        own = [row for row in rows if (row["alpha"], row["beta"]) == (alpha, beta)]
        experiments = list(dict.fromkeys(row["experiment"] for row in own))
        for start in range(0, len(experiments), columns_per_block):
            yield _block(f"D {alpha}/{beta}", own, experiments[start : start + columns_per_block])
    if rows:
        yield Text(f"{LEGEND} at {rows[0]['confidence']:.0%} confidence")


def _block(title: str, rows: list[dict[str, Any]], experiments: list[str]) -> Table:
    table = Table(
        title=title, title_justify="left", title_style="bold", box=None, pad_edge=False, padding=(0, 1, 0, 0)
    )
    table.add_column("")
    for experiment in experiments:
        table.add_column(experiment, justify="right", no_wrap=True)
    cells = {(row["element"], row["experiment"]): row for row in rows}
    for element in dict.fromkeys(row["element"] for row in rows):
        table.add_row(element, *(_cell(cells.get((element, experiment))) for experiment in experiments))
    return table


def _cell(row: dict[str, Any] | None) -> Text:
    if row is None:
        return Text("")
    mark, style = CLASS_STYLES[row["class"]]
    return Text(f"{written(row)} {mark}", style=style)
