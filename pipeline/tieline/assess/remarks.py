"""What of the evidence needs attention."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

from tieline.assess.approach import runs_at_the_same_conditions
from tieline.assess.condition_values import condition_values, varies
from tieline.assess.frames import Conditions
from tieline.assess.starting_composition import Start
from tieline.results import Remark
from tieline.settings.assess import AssessSettings

if TYPE_CHECKING:
    import pandas as pd


def remarks(
    checks: list[dict[str, object]],
    conditions: Conditions,
    means: pd.DataFrame,
    D: pd.DataFrame,
    start: Mapping[tuple[str | None, str], Start],
    settings: AssessSettings,
) -> tuple[Remark, ...]:
    """Exchange outside its window, losses, names and conditions that are not there or do not vary, runs not compared."""
    found = [*_differing(checks), *_unknown_experiments(means, start, settings)]
    if len(D):
        found += [*_without_trends(conditions, means, settings), *_not_compared(conditions, settings)]
    return tuple(found)


def _differing(checks: list[dict[str, object]]) -> list[Remark]:
    found = []
    for row in checks:
        pair = " ".join(str(row[key]) for key in ("experiment", "alpha") if row[key])
        if row["verdict"] != "differs":
            continue
        if row["check"] == "exchange":
            words = f"{row['subject']} {row['value']:.3g} lies outside {row['expected_lo']:.3g} to {row['expected_hi']:.3g}"
            found.append(Remark(words, pair))
        elif row["check"] == "mass-balance" and str(row["subject"]).endswith("loss"):
            found.append(Remark(str(row["detail"]).split(", p ")[0], pair))
    return found


def _unknown_experiments(
    means: pd.DataFrame, start: Mapping[tuple[str | None, str], Start], settings: AssessSettings
) -> list[Remark]:
    """Names in the starting composition and among the modes that no experiment of the session has."""
    known = set(means["experiment"].unique())
    given = {
        "the starting composition names": {name for name, _element in start if name is not None},
        "[assess.modes] names": set(settings.modes.proportions),
    }
    return [
        Remark(f"{where} {', '.join(sorted(names - known))}, which no experiment with means is called")
        for where, names in given.items()
        if names - known
    ]


def _without_trends(conditions: Conditions, means: pd.DataFrame, settings: AssessSettings) -> list[Remark]:
    own = settings.trends
    missing, constant, found = [], [], []
    for name in dict.fromkeys((*own.conditions, *own.predict)):
        values = condition_values(name, conditions, means, settings) if name in own.conditions else None
        if values is None:
            missing.append(name)
            continue
        if values.impossible:
            names = ", ".join(values.impossible)
            found.append(Remark(f"{name} of {names} left out: the value or its uncertainty is impossible"))
        if len(values.x) > 1 and not varies(values.x):
            constant.append(name)
    if missing:
        found.append(
            Remark(
                f"no trends against {', '.join(missing)}: no condition of the experiments' table or [assess.trends], "
                "and no mean of a phase"
            )
        )
    if constant:
        found.append(Remark(f"no trends against {', '.join(constant)}: all experiments have the same"))
    return found


def _not_compared(conditions: Conditions, settings: AssessSettings) -> list[Remark]:
    """Runs of different length that no other run can be compared with, and conditions named that are not there."""
    whole = conditions.whole()
    absent = [name for name in settings.same_conditions if name not in whole.columns]
    if absent:
        return [
            Remark(f"same_conditions names {', '.join(absent)}, which the experiments' table does not hold")
        ]
    if settings.duration not in whole.columns or whole[settings.duration].nunique() < 2:
        return []
    if runs_at_the_same_conditions(whole, settings.duration, settings.same_conditions):
        return []
    return [
        Remark(
            "no two runs differ in duration alone, so the approach to equilibrium was not looked at; name in "
            "[assess] same_conditions what they must have in common"
        )
    ]
