"""The uncertainty budget of one D: relative standard uncertainties of both means by source."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tieline.tracing.interval import SIDES, widening

Row = Mapping[str, Any]


def budget_lines(row: Row, phases: Mapping[str, Row]) -> list[dict[str, Any]]:
    """One line per source: both relative uncertainties, whether they cancel, their squares, the share of the sum.

    row: of `classify`. `widening_alpha` and `widening_beta` are what the interval multiplies a factor by that is known
    from few measurements. `unknown` marks a source that D needs and nothing tells; it has no share.
    """
    same_calibration = phases["alpha"]["calibration_key"] == phases["beta"]["calibration_key"]
    standards = {side: phases[side]["internal_standard"] for side in SIDES}
    keys = [None if one is None else one["source_key"] for one in standards.values()]
    same_source = keys[0] is not None and keys[0] == keys[1]
    parts = {side: {**_own(row, side), **_factors(phases[side])} for side in SIDES}
    widths = {side: _widenings(phases[side], row["confidence"]) for side in SIDES}
    unknown = {
        "calibration": not same_calibration and any(parts[side]["calibration"] is None for side in SIDES),
        "internal standard": any(
            one is not None and one["relative_sd"] is None for one in standards.values()
        ),
        "calibration of the standard": not same_source
        and any(
            key is not None and parts[side]["calibration of the standard"] is None
            for side, key in zip(SIDES, keys, strict=True)
        ),
    }
    cancelling = {"calibration": same_calibration, "calibration of the standard": same_source}
    lines: list[dict[str, Any]] = []
    for name in parts["alpha"]:
        first, second = (parts[side][name] or 0.0 for side in SIDES)
        cancels = cancelling.get(name, False)
        # Within one calibration a drift shifts both means, and what counts is by how much they differ.
        apart = first - second if name == "drift" and same_calibration else None
        squared = apart**2 if apart is not None else 0.0 if cancels else first**2 + second**2
        lines.append(
            {
                "source": name,
                **{side: parts[side][name] for side in SIDES},
                **{f"widening_{side}": widths[side].get(name, 1.0) for side in SIDES},
                "cancels": cancels,
                "unknown": unknown.get(name, False),
                "squared": squared,
            }
        )
    total = sum(line["squared"] for line in lines)
    known = row["share_counting"] is not None and total > 0
    return [
        line | {"share": line["squared"] / total if known and not line["unknown"] else None} for line in lines
    ]


def _own(row: Row, side: str) -> dict[str, float | None]:
    mean, se, counting = (row[f"{name}_{side}_ppm"] for name in ("mean", "se", "counting_se"))
    if not mean or se is None:
        return {"counting": None, "spread": None}
    # What counting alone would give can exceed what the scatter shows; D_sd is that of the scatter.
    part = min(counting, se) if counting is not None else 0.0
    return {"counting": part / abs(mean), "spread": max(se**2 - part**2, 0.0) ** 0.5 / abs(mean)}


def _factors(phase: Row) -> dict[str, float | None]:
    calibration, standard, drift = phase["calibration"], phase["internal_standard"], phase["drift"]
    behind = None if standard is None else standard.get("calibration")
    return {
        "calibration": None if calibration is None else calibration["relative_sd"],
        "matrix": None if calibration is None else calibration["matrix_sd"],
        "drift": None if drift is None else drift["shift"],
        "internal standard": None if standard is None else standard["relative_sd"],
        "calibration of the standard": None if behind is None else behind["relative_sd"],
    }


def _widenings(phase: Row, confidence: float) -> dict[str, float]:
    calibration, standard = phase["calibration"], phase["internal_standard"]
    return {
        "calibration": widening(None if calibration is None else calibration["relative_dof"], confidence),
        "internal standard": widening(None if standard is None else standard["dof"], confidence),
    }
