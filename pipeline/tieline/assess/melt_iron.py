"""The ferric share of the iron in every experiment's melt, as the settings ask for it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from tieline.assess.evidence import base_phase
from tieline.assess.ferric import FerricShare, kress_carmichael
from tieline.chemistry.oxides import usual_oxide, wt_percent_per_ppm
from tieline.settings.assess import AssessSettings

if TYPE_CHECKING:
    import pandas as pd

    from tieline.assess.frames import Conditions

MODEL_ELEMENTS = ("Si", "Ti", "Al", "Fe", "Mn", "Mg", "Ca", "Na", "K", "P", "Cr")


LEAST_OXIDES_WT = 80.0
"""Measured oxides below this are no composition of a melt; what is missing beside them may be water. Own choice."""
Keys = tuple[str, str]


def ferric_shares(
    means: pd.DataFrame, conditions: Conditions, settings: AssessSettings
) -> tuple[dict[Keys, FerricShare], dict[Keys, str]]:
    """(experiment, melt) -> ferric share, and (experiment, melt) -> what the model lacks where it gives none."""
    given = settings.exchange.ferric
    if given.model == "none":
        return {}, {}
    melts = means[means["phase"].map(base_phase).isin(settings.melts)]
    keys = sorted(set(zip(melts["experiment"], melts["phase"], strict=True)))
    if given.model == "stated":
        return dict.fromkeys(keys, FerricShare(given.share, given.sd, given.source)), {}
    found: dict[Keys, FerricShare] = {}
    lacking: dict[Keys, str] = {}
    for experiment, phase in keys:
        own = melts[(melts["experiment"] == experiment) & (melts["phase"] == phase)]
        share = _from_model(own, experiment, conditions, settings)
        if isinstance(share, str):
            lacking[experiment, phase] = share
        else:
            found[experiment, phase] = share
    return found, lacking


def _from_model(
    means: pd.DataFrame, experiment: str, conditions: Conditions, settings: AssessSettings
) -> FerricShare | str:
    """The share, or why there is none."""
    given = settings.exchange.ferric
    names = (settings.temperature, settings.pressure, given.log_fO2)
    own = conditions.table.reindex(index=[experiment], columns=list(names)).iloc[0].astype(float)
    missing = [name for name in names if not np.isfinite(own[name])]
    if missing:
        return f"no {' and no '.join(missing)} is given"
    best = means.assign(relative=means["se_ppm"] / means["mean_ppm"]).sort_values("relative", kind="stable")
    best = best[best["mean_ppm"] > 0].drop_duplicates("element").set_index("element")["mean_ppm"]
    elements = [element for element in MODEL_ELEMENTS if element in best.index]
    oxides = {
        usual_oxide(element): float(best[element] * factor)
        for element, factor in zip(elements, wt_percent_per_ppm(elements), strict=True)
    }
    if "Fe" not in elements or sum(oxides.values()) < LEAST_OXIDES_WT:
        return (
            f"its oxides add up to {sum(oxides.values()):.3g} wt%" if "Fe" in elements else "it has no iron"
        )
    celsius, pressure, fugacity = (float(own[name]) for name in names)
    try:
        return kress_carmichael(
            oxides, celsius + 273.15, pressure, fugacity, given.log_fO2_sd, given.model_sd
        )
    except ValueError as error:
        return str(error)
