"""Oxide total and cation sum of every spot that is a whole analysis, for the picture of one against the other."""

from __future__ import annotations

from typing import Any

import numpy as np

from tieline.chemistry.formula import atoms_from_ppm
from tieline.chemistry.phases import PHASES
from tieline.report.compact import rounded
from tieline.report.source import Source
from tieline.report.spots import SpotUse
from tieline.screen.session import session_of
from tieline.screen.whole_analyses import whole_analyses
from tieline.settings.screen import CationRule


def formula_sums(source: Source, spots: SpotUse) -> dict[str, Any]:
    """Spot numbers with total and cation sum and their standard uncertainties, and the windows of the phases.

    The same sums as the screening tests use: iron as FeO, a value below its limit as half of it. The cation sum is
    null for phases without a formula.
    """
    session = session_of(source.table("convert"), source.concentrations())
    place = {key: spot for spot, key in enumerate(zip(spots.keys["table"], spots.keys["row"], strict=True))}
    keys = session.spots.keys
    of_session = [place[key] for key in zip(keys["table"].to_pylist(), keys["row"].to_pylist(), strict=True)]
    settings = source.settings.screen.total
    data: dict[str, list[Any]] = {name: [] for name in ("spot", "total", "total_sd", "cations", "cations_sd")}
    for measured in session.techniques:
        analyses = whole_analyses(measured, settings.min_oxides, settings.incomplete_below)
        rows = np.flatnonzero(analyses.complete)
        if not len(rows):
            continue
        phases = [session.spots.phase.texts[code] for code in session.spots.phase.codes[measured.spots[rows]]]
        columns = [at for at, element in enumerate(analyses.elements) if element != "O"]
        sums, sds = np.full((2, len(rows)), np.nan)
        for phase in set(phases):
            rule = rule_of(source, phase)
            if rule is None:
                continue
            own = np.array([name == phase for name in phases])
            units = atoms_from_ppm(
                analyses.value[np.ix_(rows[own], columns)],
                [analyses.elements[at] for at in columns],
                rule.oxygens,
                np.nan_to_num(analyses.sigma[np.ix_(rows[own], columns)]),
            )
            sums[own], sds[own] = units.cation_sum, units.cation_sum_sigma
        data["spot"] += [of_session[spot] for spot in measured.spots[rows].tolist()]
        data["total"] += rounded(analyses.total[rows], 5)
        data["total_sd"] += rounded(analyses.total_sd[rows], 2)
        data["cations"] += rounded(sums, 5)
        data["cations_sd"] += rounded(sds, 2)
    return {**data, "windows": _windows(source, spots)}


def rule_of(source: Source, phase: str) -> CationRule | None:
    """What the cation sum of a phase is held against: the configured rule, else the phase table's."""
    given = source.settings.screen.cations.rules.get(phase)
    facts = PHASES.get(phase)
    if given is not None or facts is None or facts.oxygens is None or facts.cation_sum is None:
        return given
    return CationRule(oxygens=facts.oxygens, sum=facts.cation_sum, tolerance=facts.cation_tolerance or 0.02)


def _windows(source: Source, spots: SpotUse) -> dict[str, Any]:
    made: dict[str, Any] = {}
    for phase in sorted(set(spots.keys["phase"])):
        facts, rule = PHASES.get(phase), rule_of(source, phase)
        total = source.settings.screen.total.limits.get(phase) or (facts.total_window if facts else None)
        made[phase] = {
            "total": list(total) if total else None,
            "cations": [rule.sum - rule.tolerance, rule.sum + rule.tolerance] if rule else None,
            "oxygens": rule.oxygens if rule else None,
        }
    return made
