"""What the page draws of the evidence: D against conditions, exchange coefficients, and the mass balance."""

from __future__ import annotations

from typing import Any

import numpy as np

from tieline.report.compact import rounded
from tieline.report.source import Source, optional_table

DIGITS, ERROR_DIGITS = 5, 3
_KEYS = ("alpha", "beta", "element", "condition")


def trend_data(source: Source) -> list[dict[str, Any]]:
    """One entry per pair, element and condition: its points, D with one standard uncertainty, and the ends of its line."""
    points, trends = (optional_table(source, name) for name in ("assess.trend_points", "assess.trends"))
    if points is None or trends is None:
        return []
    own: dict[tuple[str, ...], list[dict[str, Any]]] = {}
    for row in points.to_pylist():
        own.setdefault(tuple(row[name] for name in _KEYS), []).append(row)
    lines = ((row, own.get(tuple(row[name] for name in _KEYS), [])) for row in trends.to_pylist())
    return [_entry(row, some) for row, some in lines if some]


def _entry(trend: dict[str, Any], points: list[dict[str, Any]]) -> dict[str, Any]:
    x, x_sd, log_d, log_sd = (
        np.array([row[name] for row in points], dtype=np.float64) for name in ("x", "x_sd", "ln_D", "ln_D_sd")
    )
    entry: dict[str, Any] = {
        "pair": f"{trend['alpha']}/{trend['beta']}",
        "element": trend["element"],
        "condition": trend["condition"],
        "experiment": [row["experiment"] for row in points],
        "x": rounded(x, DIGITS),
        "sd": rounded(x_sd, ERROR_DIGITS),
        "D": rounded(np.exp(log_d), DIGITS),
        "lo": rounded(np.exp(log_d - log_sd), DIGITS),
        "hi": rounded(np.exp(log_d + log_sd), DIGITS),
        "left": trend["n_left_out"],
        "line": [],
        "p": None,
    }
    if trend["slope"] is not None:
        ends = np.array([x.min(), x.max()])
        entry["line"] = rounded(np.exp(trend["intercept"] + trend["slope"] * ends), DIGITS)
        entry["p"] = trend["p_value"]
    return entry


def exchange_data(source: Source) -> list[dict[str, Any]]:
    """Every exchange coefficient with an interval: pair of phases, elements, value, ends, window and verdict."""
    table = optional_table(source, "assess.exchange")
    rows = [] if table is None else table.to_pylist()
    return [
        {
            "pair": f"{row['alpha']}/{row['beta']}",
            "elements": f"{row['first']}–{row['second']}",
            **{name: row[name] for name in ("experiment", "verdict")},
            "K_D": row["K_D"],
            "ends": [row["K_D_lo"], row["K_D_hi"]],
            "window": [row["window_lo"], row["window_hi"]],
        }
        for row in rows
        if row["K_D"] is not None and row["K_D_hi"] is not None
    ]


def balance_data(source: Source) -> list[dict[str, Any]]:
    """Every element of every mass balance: the residual in standard deviations, or the loss in % with its interval."""
    table = optional_table(source, "assess.balance")
    rows = [] if table is None else table.to_pylist()
    return [
        {"experiment": row["experiment"], "element": row["element"], "sigmas": row["sigmas"],
         "loss": [None if row[name] is None else 100 * row[name] for name in ("loss", "loss_lo", "loss_hi")]}
        for row in rows
    ]  # fmt: skip
