"""Pictures of the evidence: what they show, with axes and units, and nothing where there is nothing to show."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from matplotlib.figure import Figure

from tieline.report.evidence_data import balance_data, exchange_data, trend_data
from tieline.report.evidence_figures import _draw_exchange, evidence_pictures
from tieline.report.source import Source


def drawn(source: Source) -> dict[str, Figure]:
    figures = {}
    for name, draw, _width, _height in evidence_pictures(source):
        figures[name] = Figure()
        draw(figures[name])
    return figures


@pytest.fixture(scope="module")
def pictures(ember_source: Source) -> dict[str, Figure]:
    return drawn(ember_source)


def test_every_line_of_evidence_has_its_picture(pictures):
    assert {"exchange_Fe-Mg_glass", "mass_balance", "D_against_10^4/T_olivine_glass_1"} <= set(pictures)
    for figure in pictures.values():
        assert all(axes.get_xlabel() for axes in figure.axes)


def test_exchange_is_drawn_with_its_windows(pictures, ember_source: Source):
    (axes,) = pictures["exchange_Fe-Mg_glass"].axes
    rows = [row for row in ember_source.table("assess.exchange").to_pylist() if row["alpha"] == "olivine"]
    series = next(one for one in axes.containers if one.get_label() == "olivine")
    np.testing.assert_allclose(sorted(series[0].get_ydata()), sorted(row["K_D"] for row in rows))
    heights = {(round(one.get_y(), 6), round(one.get_y() + one.get_height(), 6)) for one in axes.patches}
    assert (0.27, 0.33) in heights
    assert "K_D(Fe–Mg)" in axes.get_ylabel()


def test_mass_balance_shows_residuals_and_losses(pictures, ember_source: Source):
    left, right = pictures["mass_balance"].axes
    rows = ember_source.table("assess.balance").to_pylist()
    shown = np.concatenate([line.get_xdata() for line in left.get_lines()])
    np.testing.assert_allclose(sorted(shown), sorted(row["sigmas"] for row in rows if row["use"]))
    assert [label.get_text() for label in right.get_yticklabels()] == ["Fe", "K", "Na"]
    assert "%" in right.get_xlabel()


def test_bulk_coefficients_are_drawn_by_experiment_with_limits_apart(pictures, ember_source: Source):
    (axes,) = pictures["bulk_D_glass"].axes
    rows = ember_source.table("assess.bulk").to_pylist()
    values = [row["bulk_D"] for row in rows if row["bulk_D"] is not None]
    shown = np.concatenate([one[0].get_ydata() for one in axes.containers])
    np.testing.assert_allclose(sorted(shown), sorted(values))
    limits = [row["bulk_D_hi"] for row in rows if row["kind"] == "bounds"]
    arrows = [line.get_ydata() for line in axes.get_lines() if line.get_marker() == "$\u2193$"]
    np.testing.assert_allclose(sorted(np.concatenate(arrows)), sorted(limits))
    assert "bulk D" in axes.get_ylabel()


def test_trends_have_points_and_their_line(pictures, ember_source: Source):
    trends = {(row["alpha"], row["element"]): row for row in ember_source.table("assess.trends").to_pylist()}
    (axes,) = pictures["D_against_10^4/T_olivine_glass_1"].axes
    assert axes.get_xlabel() == "10⁴/T, 1/K"
    assert axes.get_ylabel() == "D olivine/glass"
    element = axes.containers[0].get_label()
    line = next(one for one in axes.get_lines() if len(one.get_xdata()) == 2 and one.get_linestyle() == "-")
    own = trends["olivine", element]
    np.testing.assert_allclose(
        np.log(line.get_ydata()), own["intercept"] + own["slope"] * np.asarray(line.get_xdata())
    )


def test_nothing_to_show_makes_no_picture(ember_source: Source):
    emptied = {
        name: table.slice(0, 0) for name, table in ember_source.tables.items() if name.startswith("assess.")
    }
    assert drawn(replace(ember_source, tables={**ember_source.tables, **emptied})) == {}


def test_the_page_has_every_point_of_a_trend(ember_source: Source):
    entries = trend_data(ember_source)
    points = ember_source.table("assess.trend_points")
    assert sum(len(one["x"]) for one in entries) == points.num_rows
    nickel = next(one for one in entries if (one["pair"], one["element"]) == ("olivine/glass", "Ni"))
    row = next(row for row in points.to_pylist() if (row["alpha"], row["element"]) == ("olivine", "Ni"))
    assert nickel["experiment"][0] == row["experiment"]
    assert nickel["D"][0] == pytest.approx(np.exp(row["ln_D"]), rel=1e-4)
    assert nickel["hi"][0] == pytest.approx(np.exp(row["ln_D"] + row["ln_D_sd"]), rel=1e-2)
    assert len(nickel["line"]) == 2


def test_the_page_has_the_exchange_and_the_balance(ember_source: Source):
    exchange = ember_source.table("assess.exchange").to_pylist()
    assert [one["K_D"] for one in exchange_data(ember_source)] == [row["K_D"] for row in exchange]
    olivine = next(one for one in exchange_data(ember_source) if one["pair"] == "olivine/glass")
    assert olivine["window"] == pytest.approx([0.27, 0.33])
    balance = {(one["experiment"], one["element"]): one for one in balance_data(ember_source)}
    for row in ember_source.table("assess.balance").to_pylist():
        one = balance[row["experiment"], row["element"]]
        assert one["sigmas"] == row["sigmas"]
        assert one["loss"][0] == (None if row["loss"] is None else pytest.approx(100 * row["loss"]))


def test_an_interval_that_begins_at_zero_keeps_its_bar():
    row = {"experiment": "A", "alpha": "olivine", "K_D": 0.3, "K_D_lo": 0.0, "K_D_hi": 0.7, "window_lo": None}
    figure = Figure()
    _draw_exchange(figure, [row | {"window_hi": None}], "Fe–Mg", "glass")
    (bars,) = figure.axes[0].containers[0][2]
    np.testing.assert_allclose(bars.get_segments()[0][:, 1], [0.0, 0.7], atol=1e-12)
