"""The ferric share of the iron in every experiment's melt, as the settings ask for it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from tieline.assess.evidence import base_phase
from tieline.assess.ferric import FerricShare, kress_carmichael
from tieline.chemistry.oxides import usual_oxide, wt_percent_per_ppm
from tieline.settings.assess import AssessSettings

if TYPE_CHECKING:
    import pandas as pd

    from tieline.assess.frames import Conditions

MODEL_ELEMENTS = ("Si", "Ti", "Al", "Fe", "Mn", "Mg", "Ca", "Na", "K", "P", "Cr")


def ferric_shares(
    means: pd.DataFrame, conditions: Conditions, settings: AssessSettings
) -> dict[tuple[str, str], FerricShare]:
    """(experiment, melt) -> ferric share; a melt without what the model needs has none, and the check says so."""
    given = settings.exchange.ferric
    if given.model == "none":
        return {}
    melts = means[means["phase"].map(base_phase).isin(settings.melts)]
    keys = sorted(set(zip(melts["experiment"], melts["phase"], strict=True)))
    if given.model == "stated":
        return dict.fromkeys(keys, FerricShare(given.share, given.sd, given.source))
    found = {}
    for experiment, phase in keys:
        own = melts[(melts["experiment"] == experiment) & (melts["phase"] == phase)]
        share = _from_model(own, experiment, conditions, settings)
        if share is not None:
            found[experiment, phase] = share
    return found


def _from_model(
    means: pd.DataFrame, experiment: str, conditions: Conditions, settings: AssessSettings
) -> FerricShare | None:
    given = settings.exchange.ferric
    table = conditions.table
    names = (settings.temperature, settings.pressure, given.log_fO2)
    if experiment not in table.index or any(name not in table.columns for name in names):
        return None
    celsius, pressure, fugacity = (float(table.loc[experiment, name]) for name in names)
    best = means.assign(relative=means["se_ppm"] / means["mean_ppm"]).sort_values("relative", kind="stable")
    best = best[best["mean_ppm"] > 0].drop_duplicates("element").set_index("element")["mean_ppm"]
    elements = [element for element in MODEL_ELEMENTS if element in best.index]
    oxides = {
        usual_oxide(element): float(best[element] * factor)
        for element, factor in zip(elements, wt_percent_per_ppm(elements), strict=True)
    }
    try:
        return kress_carmichael(
            oxides, celsius + 273.15, pressure, fugacity, given.log_fO2_sd, given.model_sd
        )
    except ValueError:
        return None
