"""What all pictures that stand alone have in common: widths, colours, marks and type."""

from __future__ import annotations

from typing import Any

# One and two columns of most journals, in millimetres (common practice).
ONE_COLUMN_MM, TWO_COLUMNS_MM = 90.0, 190.0
MM_PER_INCH = 25.4
# Colours that stay apart for colour-blind readers (after Okabe and Ito 2008, from memory), each with a shape of its own.
COLOURS = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#b07d00", "#56b4e9", "#666a00")
SHAPES = ("o", "s", "^", "D", "v", "P", "X", "*")
STYLE: dict[Any, Any] = {
    "font.size": 8,
    "font.family": "DejaVu Sans",
    "axes.linewidth": 0.6,
    "svg.hashsalt": "tieline",
    "svg.fonttype": "none",
    "pdf.fonttype": 42,
    "figure.constrained_layout.use": True,
}


def style_of(place: int) -> dict[str, Any]:
    """Colour and mark of the series at a place."""
    return {"color": COLOURS[place % len(COLOURS)], "marker": SHAPES[place % len(SHAPES)]}


def plain(text: str) -> str:
    """A label that the drawing library does not read as a formula."""
    return text.replace("$", r"\$")
