"""The table of D on a terminal: in full, one block per pair, elements down, experiments across; and in brief."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
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
EXTRA_CLASS = ("+", "green")  # any class that the configuration names
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
    mark, style = CLASS_STYLES.get(row["class"], EXTRA_CLASS)
    return Text(f"{written(row)} {mark}", style=style)


VARIES = ("~", "")  # the class differs between experiments
BRIEF_LEGEND = "lowest\N{EN DASH}highest over the experiments, to two digits"


def brief_lines(classify: pa.Table, width: int) -> Iterator[Text]:
    """Per pair one paragraph per class: its elements by decreasing D, each with its range over the experiments.

    An element that is not in one class in all experiments stands under `~` with the number of each.
    """
    columns = ["experiment", "alpha", "beta", "element", "D", "D_sd", "D_lo", "D_hi", "kind", "class"]
    rows = classify.select(columns).to_pylist()
    extra = [name for name in dict.fromkeys(row["class"] for row in rows) if name not in CLASS_STYLES]
    marks = {name: mark for name, (mark, _) in CLASS_STYLES.items()} | {name: f"+{name}" for name in extra}
    styles = (*CLASS_STYLES.values(), *((f"+{name}", EXTRA_CLASS[1]) for name in extra), VARIES)
    for alpha, beta in dict.fromkeys((row["alpha"], row["beta"]) for row in rows):
        own = [row for row in rows if (row["alpha"], row["beta"]) == (alpha, beta)]
        experiments = {row["experiment"] for row in own}
        where = f"{len(experiments)} experiments" if len(experiments) > 1 else next(iter(experiments))
        yield Text.assemble((f"D {alpha}/{beta}", "bold"), f"  {where}")
        by_element: dict[str, list[dict[str, Any]]] = {}
        for row in own:
            by_element.setdefault(row["element"], []).append(row)
        ordered = sorted(by_element.items(), key=lambda item: -max(_level(row) for row in item[1]))
        for mark, style in styles:
            items = [
                _brief(element, members, marks)
                for element, members in ordered
                if _mark_of(members, marks) == mark
            ]
            for line in _paragraph(items, width - len(mark) - 2):
                yield Text.assemble((f" {mark} ", f"{style} bold".strip()), (line, style))
    if rows:
        yield Text(
            f"c compatible  i incompatible  h highly incompatible  ? unresolved  ~ varies; {BRIEF_LEGEND}",
            "dim",
        )


def _mark_of(rows: Sequence[dict[str, Any]], marks: dict[str, str]) -> str:
    classes = {row["class"] for row in rows}
    return marks[classes.pop()] if len(classes) == 1 else VARIES[0]


def _level(row: dict[str, Any]) -> float:
    """What a D is sorted by; a D of which nothing is known comes last."""
    return next((float(row[name]) for name in ("D", "D_hi", "D_lo") if row[name] is not None), float("-inf"))


def _brief(element: str, rows: Sequence[dict[str, Any]], marks: dict[str, str]) -> str:
    if len(rows) == 1:
        return f"{element} {written(rows[0])}"
    values = [row["D"] for row in rows if row["D"] is not None]
    upper = [row["D_hi"] for row in rows if row["kind"] == "upper-limit" and row["D_hi"] is not None]
    if values:
        low, high = _two_digits(min(values)), _two_digits(max(values))
        span = low if low == high else f"{low}\N{EN DASH}{high}"
        span += f" or <{_two_digits(max(upper))}" if upper else ""
    else:
        span = f"<{_two_digits(max(upper))}" if upper else "\N{EN DASH}"
    counts = Counter(marks[row["class"]] for row in rows)
    each = f" ({' '.join(f'{number}{mark}' for mark, number in counts.items())})" if len(counts) > 1 else ""
    return f"{element} {span}{each}"


def _two_digits(value: float) -> str:
    return f"{value:#.2g}".removesuffix(".")


def _paragraph(items: Sequence[str], width: int) -> list[str]:
    """Items in lines of at most `width`; an item is never broken."""
    lines: list[str] = []
    for item in items:
        if lines and len(lines[-1]) + 2 + len(item) <= width:
            lines[-1] += f"  {item}"
        else:
            lines.append(item)
    return lines
