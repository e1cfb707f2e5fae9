"""Pictures of the evidence as vector files: exchange coefficients, mass balance, bulk D, and D against conditions."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from functools import partial
from itertools import groupby
from typing import Any

import numpy as np

from tieline.chemistry.oxides import parse_oxide
from tieline.report.picture_style import ONE_COLUMN_MM, TWO_COLUMNS_MM, plain, style_of
from tieline.report.source import Source, optional_table

MOST_LINES = 12
_PER_MM_OF_ROW = 4.0
Draw = Callable[[Any], None]
Rows = Sequence[dict[str, Any]]


def evidence_pictures(source: Source) -> Iterator[tuple[str, Draw, float, float]]:
    """Name, what draws it into a figure, width and height in mm; none where a line of evidence has nothing to show."""
    yield from _exchange(source)
    yield from _balance(source)
    yield from _bulk(source)
    yield from _trends(source)


def _logarithmic(axes: Any) -> None:
    """A logarithmic ordinate with plain numbers; between the decades too where it spans fewer than two."""
    axes.set_yscale("log")
    low, high = axes.get_ylim()
    axes.yaxis.set_major_formatter("{x:g}")
    if high < 100 * low:
        axes.yaxis.set_minor_formatter("{x:g}")
        axes.tick_params(axis="y", which="minor", labelsize=6)


def _rows(source: Source, name: str) -> Rows:
    table = optional_table(source, name)
    return [] if table is None else table.to_pylist()


# --- K_D by experiment, beside its window ---


def _exchange(source: Source) -> Iterator[tuple[str, Draw, float, float]]:
    rows = [row for row in _rows(source, "assess.exchange") if row["K_D_lo"] is not None]
    key = lambda row: (row["first"], row["second"], row["beta"])  # noqa: E731 - sorted and grouped by one key
    for (first, second, beta), own in groupby(sorted(rows, key=key), key=key):
        drawing = partial(_draw_exchange, rows=list(own), pair=f"{first}–{second}", beta=beta)
        yield f"exchange_{first}-{second}_{beta}", drawing, ONE_COLUMN_MM, 75.0


def _draw_exchange(figure: Any, rows: Rows, pair: str, beta: str) -> None:
    axes = figure.add_subplot()
    experiments = sorted({row["experiment"] for row in rows})
    phases = sorted({row["alpha"] for row in rows})
    for place, phase in enumerate(phases):
        own = [row for row in rows if row["alpha"] == phase and row["K_D"] is not None]
        shift = (place - (len(phases) - 1) / 2) * 0.15
        x = np.array([experiments.index(row["experiment"]) for row in own]) + shift
        value, low, high = (
            np.array([row[name] for row in own], dtype=np.float64) for name in ("K_D", "K_D_lo", "K_D_hi")
        )
        bars = np.maximum(np.stack([value - low, high - value]), 0.0) if own else np.zeros((2, 0))
        style = style_of(place)
        axes.errorbar(
            x, value, bars, fmt=style["marker"], color=style["color"], markersize=3, elinewidth=0.6, label=plain(phase)
        )  # fmt: skip
        windows = {(row["window_lo"], row["window_hi"]) for row in rows if row["alpha"] == phase}
        for low_end, high_end in windows:
            if low_end is not None:
                axes.axhspan(low_end, high_end, color=style["color"], alpha=0.10, linewidth=0)
    _logarithmic(axes)
    axes.set_xticks(range(len(experiments)), [plain(name) for name in experiments], rotation=60, fontsize=6.5)
    axes.set_xlabel("experiment")
    axes.set_ylabel(plain(f"K_D({pair}) over {beta}; shaded: expected"))
    axes.legend(fontsize=6.5, frameon=False)


# --- mass balance: what is left over, and what was lost ---


def _balance(source: Source) -> Iterator[tuple[str, Draw, float, float]]:
    rows = _rows(source, "assess.balance")
    if rows:
        height = 30.0 + _PER_MM_OF_ROW * len({row["element"] for row in rows})
        yield "mass_balance", partial(_draw_balance, rows=rows), TWO_COLUMNS_MM, height


def _draw_balance(figure: Any, rows: Rows) -> None:
    left, right = figure.subplots(1, 2)
    experiments = sorted({row["experiment"] for row in rows})
    fitted = sorted({row["element"] for row in rows if row["use"]})
    lost = sorted({row["element"] for row in rows if not row["use"]})
    for place, experiment in enumerate(experiments):
        own = [row for row in rows if row["experiment"] == experiment]
        shift = (place - (len(experiments) - 1) / 2) * 0.6 / max(len(experiments), 1)
        style = style_of(place)
        inside = [row for row in own if row["use"] and row["sigmas"] is not None]
        left.plot(
            [row["sigmas"] for row in inside], [fitted.index(row["element"]) + shift for row in inside], linestyle="",
            markersize=3, label=plain(experiment), **style,
        )  # fmt: skip
        outside = [row for row in own if not row["use"] and row["loss"] is not None]
        loss, low, high = (
            100 * np.array([row[name] for row in outside]) for name in ("loss", "loss_lo", "loss_hi")
        )
        right.errorbar(
            loss, [lost.index(row["element"]) + shift for row in outside], xerr=np.stack([loss - low, high - loss]),
            fmt=style["marker"], color=style["color"], markersize=3, elinewidth=0.6,
        )  # fmt: skip
    left.axvspan(-2, 2, color="grey", alpha=0.15, linewidth=0)
    right.axvline(0, color="grey", linewidth=0.5)
    left.set_yticks(range(len(fitted)), fitted)
    right.set_yticks(range(len(lost)), lost)
    left.set_xlabel("start less phases, standard deviations (shaded: within 2)")
    right.set_xlabel("lost, % of the start")
    for axes, names in ((left, fitted), (right, lost)):
        axes.set_ylim(len(names) - 0.5, -0.5)
    figure.legend(loc="outside upper center", ncols=min(len(experiments), 10), fontsize=6.5, frameon=False)


# --- bulk D of the crystals of an experiment, element by element ---


def _bulk(source: Source) -> Iterator[tuple[str, Draw, float, float]]:
    rows = [row for row in _rows(source, "assess.bulk") if row["bulk_D_hi"] is not None]
    key = lambda row: row["beta"]  # noqa: E731 - sorted and grouped by one key
    for beta, own in groupby(sorted(rows, key=key), key=key):
        yield f"bulk_D_{beta}", partial(_draw_bulk, rows=list(own), beta=beta), TWO_COLUMNS_MM, 90.0


def _draw_bulk(figure: Any, rows: Rows, beta: str) -> None:
    axes = figure.add_subplot()
    highest: dict[str, float] = {}
    for row in rows:
        highest[row["element"]] = max(highest.get(row["element"], 0.0), row["bulk_D_hi"])
    elements = sorted(highest, key=highest.__getitem__)
    experiments = sorted({row["experiment"] for row in rows})
    for place, experiment in enumerate(experiments):
        own = [row for row in rows if row["experiment"] == experiment]
        shift = (place - (len(experiments) - 1) / 2) * 0.7 / len(experiments)
        x = np.array([elements.index(row["element"]) for row in own]) + shift
        value, low, high = (
            np.array([row[name] for row in own], dtype=np.float64)
            for name in ("bulk_D", "bulk_D_lo", "bulk_D_hi")
        )
        told, style = np.isfinite(value), style_of(place)
        bars = np.stack([value - low, high - value])[:, told]
        axes.errorbar(
            x[told], value[told], bars, fmt=style["marker"], color=style["color"], markersize=2.5, elinewidth=0.6,
            label=plain(experiment),
        )  # fmt: skip
        axes.plot(x[~told], high[~told], linestyle="", marker="$\u2193$", color=style["color"], markersize=5)
    _logarithmic(axes)
    axes.set_xticks(range(len(elements)), elements, fontsize=6.5)
    axes.set_xlabel("element; arrows: upper end where a D is a limit")
    axes.set_ylabel(plain(f"bulk D, crystals over {beta}"))
    figure.legend(loc="outside upper center", ncols=min(len(experiments), 10), fontsize=6.5, frameon=False)


# --- ln D against a condition ---


def _trends(source: Source) -> Iterator[tuple[str, Draw, float, float]]:
    points = _rows(source, "assess.trend_points")
    lines = {_trend_key(row): row for row in _rows(source, "assess.trends")}
    key = lambda row: (row["alpha"], row["beta"], row["condition"])  # noqa: E731 - sorted and grouped by one key
    for (alpha, beta, condition), own in groupby(sorted(points, key=key), key=key):
        some = list(own)
        elements = _most_certain(some, lines)
        for part in range(0, len(elements), MOST_LINES):
            shown = elements[part : part + MOST_LINES]
            number = f"_{part // MOST_LINES + 1}" if len(elements) > MOST_LINES else ""
            drawing = partial(
                _draw_trend,
                points=some,
                lines=lines,
                elements=shown,
                title=f"D {alpha}/{beta}",
                condition=condition,
            )
            yield f"D_against_{condition}_{alpha}_{beta}{number}", drawing, ONE_COLUMN_MM, 90.0


def _trend_key(row: dict[str, Any]) -> tuple[str, ...]:
    return row["alpha"], row["beta"], row["element"], row["condition"]


def _most_certain(points: Rows, lines: dict[tuple[str, ...], dict[str, Any]]) -> list[str]:
    """The elements with a line, by the level of their points: neighbours in the picture are neighbours in the legend."""
    level: dict[str, list[float]] = {}
    for row in points:
        if lines[_trend_key(row)]["slope"] is not None:
            level.setdefault(row["element"], []).append(row["ln_D"])
    return sorted(level, key=lambda element: -float(np.mean(level[element])))


def _draw_trend(
    figure: Any,
    points: Rows,
    lines: dict[tuple[str, ...], dict[str, Any]],
    elements: Sequence[str],
    title: str,
    condition: str,
) -> None:
    axes = figure.add_subplot()
    for place, element in enumerate(elements):
        own = [row for row in points if row["element"] == element]
        line, style = lines[_trend_key(own[0])], style_of(place)
        x, x_sd, log_d, log_sd = (
            np.array([row[name] for row in own]) for name in ("x", "x_sd", "ln_D", "ln_D_sd")
        )
        D = np.exp(log_d)
        axes.errorbar(
            x, D, np.stack([D - D * np.exp(-log_sd), D * np.exp(log_sd) - D]), xerr=x_sd, fmt=style["marker"],
            color=style["color"], markersize=3, elinewidth=0.6, label=element,
        )  # fmt: skip
        ends = np.array([x.min(), x.max()])
        axes.plot(ends, np.exp(line["intercept"] + line["slope"] * ends), color=style["color"], linewidth=0.7)
    _logarithmic(axes)
    axes.set_ylabel(plain(title))
    axes.set_xlabel(plain("10⁴/T, 1/K" if condition == "10^4/T" else _with_unit(condition)))
    figure.legend(loc="outside right upper", fontsize=6.5, frameon=False)


def _with_unit(condition: str) -> str:
    """The condition with its unit, as the name tells it: `temperature_C`, `MgO in glass`."""
    analyte, _, phase = condition.partition(" in ")
    if phase:
        return f"{condition}, {'wt%' if parse_oxide(analyte).oxygens else 'ppm'}"
    name, _, unit = condition.rpartition("_")
    return f"{name.replace('_', ' ')}, {'°C' if unit == 'C' else unit}" if name else condition
