"""The pictures on their own, as vector files of journal width: D against radius, element by element, budget, evidence.

Matplotlib, without a display. The same tables give the same bytes: no date, no random identifiers.
"""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np

from tieline.report.evidence_figures import evidence_pictures
from tieline.report.page_data import Curve, page_data
from tieline.report.picture_style import (
    COLOURS,
    MM_PER_INCH,
    ONE_COLUMN_MM,
    SHAPES,
    STYLE,
    TWO_COLUMNS_MM,
    plain,
)
from tieline.report.source import Source
from tieline.report.spots import spot_use

SHARES = ("share_counting", "share_spread", "share_calibration", "share_internal_standard")
SHARE_NAMES = ("counting", "spread between spots", "calibration", "internal standard")
HATCHES = ("", "////", "", "....")


def figure_files(source: Source, curves: Sequence[Curve] = ()) -> Mapping[str, bytes]:
    """File name to content: every picture of every pair as SVG and PDF."""
    import matplotlib as mpl

    data = page_data(source, spot_use(source.tables), curves)
    rows = source.table("classify").to_pylist()
    files: dict[str, bytes] = {}
    with mpl.rc_context(STYLE):
        for pair in dict.fromkeys((row["alpha"], row["beta"]) for row in rows):
            own = [row for row in rows if (row["alpha"], row["beta"]) == pair]
            for name, draw, width, height in _PICTURES:
                drawing = partial(draw, rows=own, data=data, pair=pair)
                _add(files, f"{name}_{_file_word(pair[0])}_{_file_word(pair[1])}", drawing, width, height)
        for name, draw_evidence, width, height in evidence_pictures(source):
            _add(files, "_".join(_file_word(part) for part in name.split("_")), draw_evidence, width, height)
    return files


def _add(
    files: dict[str, bytes], stem: str, draw: Callable[[Any], None], width_mm: float, height_mm: float
) -> None:
    """One picture as SVG and PDF, without date."""
    from matplotlib.backends.backend_pdf import FigureCanvasPdf
    from matplotlib.backends.backend_svg import FigureCanvasSVG
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_mm / MM_PER_INCH, height_mm / MM_PER_INCH))
    draw(figure)
    stem = _new_stem(stem, files)
    for ending, canvas in (("svg", FigureCanvasSVG), ("pdf", FigureCanvasPdf)):
        stream = io.BytesIO()
        when = {"Date": None} if ending == "svg" else {"CreationDate": None}
        canvas(figure).print_figure(stream, format=ending, metadata=when)
        files[f"{stem}.{ending}"] = stream.getvalue()


def _new_stem(stem: str, files: Mapping[str, bytes]) -> str:
    """The stem, with a number where a file has it already, be it in other letters: some systems hold them for one."""
    taken = {name.rpartition(".")[0].casefold() for name in files}
    stems = (stem, *(f"{stem}_{number}" for number in range(2, len(taken) + 3)))
    return next(one for one in stems if one.casefold() not in taken)


def _file_word(text: str) -> str:
    """A label as part of a file name that every system takes."""
    return re.sub(r"[^A-Za-z0-9]+", "-", text).strip("-") or "phase"


def _radius(figure: Any, rows: Sequence[dict[str, Any]], data: dict[str, Any], pair: tuple[str, str]) -> None:
    radii = data["radii"].get(pair[0], {"coordination": 0, "of": {}})
    axes = figure.add_subplot()
    for charge in sorted({entry[0] for entry in radii["of"].values()}):
        own = [row for row in rows if radii["of"].get(row["element"], (None,))[0] == charge]
        x = [radii["of"][row["element"]][1] for row in own]
        _points(axes, x, own, charge - 1, f"{charge}+")
    for curve in data["curves"]:
        if (curve["alpha"], curve["beta"]) == pair:
            axes.plot(curve["radius"], curve["D"], color="black", linewidth=0.8)
    axes.set_xlabel(f"ionic radius, Å (coordination {radii['coordination']})")
    _finish(axes, pair, "charge")


def _elements(
    figure: Any, rows: Sequence[dict[str, Any]], data: dict[str, Any], pair: tuple[str, str]
) -> None:
    axes = figure.add_subplot()
    level: dict[str, list[float]] = {}
    for row in rows:
        known = [row[name] for name in ("D", "D_hi", "D_lo") if row[name] is not None]
        level.setdefault(row["element"], []).extend(known[:1])
    # An element of which nothing is known comes last.
    names = sorted(level, key=lambda element: float(np.median(level[element] or [np.inf])))
    experiments = sorted({row["experiment"] for row in rows})
    for place, experiment in enumerate(experiments):
        own = [row for row in rows if row["experiment"] == experiment]
        shift = 0.0 if len(experiments) == 1 else (place / (len(experiments) - 1) - 0.5) * 0.6
        _points(axes, [names.index(row["element"]) + shift for row in own], own, place, plain(experiment))
    axes.set_xticks(range(len(names)), names, fontsize=7)
    axes.axhline(data["compatibleAbove"], color="grey", linewidth=0.5)
    axes.axhline(data["highlyBelow"], color="grey", linewidth=0.5, linestyle="--")
    _finish(axes, pair, None)


def _points(axes: Any, x: Sequence[float], rows: Sequence[dict[str, Any]], place: int, label: str) -> None:
    """Values with their intervals, limits as arrows; what is not positive has no place on the axis."""
    colour, shape = COLOURS[place % len(COLOURS)], SHAPES[place % len(SHAPES)]
    value = [(at, row) for at, row in zip(x, rows, strict=True) if row["D"] is not None and row["D"] > 0]
    value = [(at, row) for at, row in value if row["kind"] == "value"]
    if value:
        D = np.array([row["D"] for _, row in value])
        ends = np.array([[max(row["D_lo"], row["D"] * 1e-3), row["D_hi"]] for _, row in value]).T
        bars = np.maximum(np.stack([D - ends[0], ends[1] - D]), 0.0)
        axes.errorbar(
            [at for at, _ in value],
            D,
            bars,
            fmt=shape,
            color=colour,
            markersize=3,
            elinewidth=0.6,
            label=label,
        )
    for kind, end, up in (("upper-limit", "D_hi", False), ("lower-limit", "D_lo", True)):
        limits = [(at, row[end]) for at, row in zip(x, rows, strict=True) if row["kind"] == kind and row[end]]
        if limits:
            places, heights = [at for at, _ in limits], np.array([height for _, height in limits])
            axes.errorbar(
                places, heights, heights * (0.9 if up else 0.45), fmt="_", color=colour, elinewidth=0.6,
                markersize=4, capsize=1.5, lolims=up, uplims=not up,
            )  # fmt: skip


def _finish(axes: Any, pair: tuple[str, str], title: str | None) -> None:
    axes.set_yscale("log")
    axes.set_ylabel(plain(f"D {pair[0]}/{pair[1]}"))
    if axes.get_legend_handles_labels()[0]:
        axes.legend(title=title, fontsize=6.5, title_fontsize=7, frameon=False, ncols=2, handletextpad=0.3)


def _budget(figure: Any, rows: Sequence[dict[str, Any]], data: dict[str, Any], pair: tuple[str, str]) -> None:
    """Mean shares over the experiments, element by element."""
    axes = figure.add_subplot()
    known = [row for row in rows if row["share_counting"] is not None]
    names = sorted(
        {row["element"] for row in known}, key=lambda element: data["atomicNumber"].get(element, 999)
    )
    left = np.zeros(len(names))
    for share, label, colour, hatch in zip(SHARES, SHARE_NAMES, COLOURS, HATCHES, strict=False):
        width = np.array(
            [np.mean([row[share] or 0.0 for row in known if row["element"] == name]) for name in names]
        )
        axes.bar(
            range(len(names)),
            width,
            bottom=left,
            color=colour,
            hatch=hatch,
            edgecolor="white",
            linewidth=0.3,
            label=label,
        )
        left = left + width
    axes.set_xticks(range(len(names)), names, fontsize=7)
    axes.set_ylabel(plain(f"share of the variance of D, {pair[0]}/{pair[1]}"), fontsize=7)
    axes.set_ylim(0, 1)
    if names:
        axes.legend(fontsize=6.5, frameon=False, ncols=4, loc="lower left", bbox_to_anchor=(0, 1.0))


_PICTURES = (
    ("D_radius", _radius, ONE_COLUMN_MM, 75.0),
    ("D_elements", _elements, TWO_COLUMNS_MM, 85.0),
    ("budget", _budget, TWO_COLUMNS_MM, 60.0),
)
