"""What D is drawn against: a condition of the experiments, inverse temperature, or the composition of a phase."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from tieline.chemistry.oxides import parse_oxide
from tieline.settings.assess import AssessSettings

if TYPE_CHECKING:
    import pandas as pd

    from tieline.assess.frames import Conditions

INVERSE_TEMPERATURE = "10^4/T"
_COMPOSITION = re.compile(r"(\S+) in (.+)")
PPM_PER_WT_PERCENT = 1e4
ABSOLUTE_ZERO_C = -273.15


@dataclass(frozen=True)
class ConditionValues:
    """x and its standard uncertainty by experiment; common: (phase, element) of the mean that x is, None for no mean.

    impossible: experiments left out, whose temperature is at or below absolute zero or whose uncertainty is negative.
    """

    x: pd.Series[float]
    x_sd: pd.Series[float]
    common: tuple[str, str] | None = None
    impossible: tuple[str, ...] = ()


def varies(x: pd.Series[float]) -> bool:
    """Whether there are two different values: nothing can be drawn against one."""
    return bool(x.nunique() > 1)


def inverse_temperature(
    temperature_C: np.ndarray, temperature_sd: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """10⁴/T in 1/K and its standard deviation, from °C."""
    kelvin = np.asarray(temperature_C, dtype=np.float64) - ABSOLUTE_ZERO_C
    return 1e4 / kelvin, 1e4 * np.asarray(temperature_sd, dtype=np.float64) / kelvin**2


def condition_values(
    condition: str, conditions: Conditions, means: pd.DataFrame, settings: AssessSettings
) -> ConditionValues | None:
    """The values of one condition, None where nothing holds it.

    A column of the experiments' table by its name, its uncertainty in `<name>_sd`; 10^4/T from the temperature; `MgO in
    glass` in wt% and `Ni in glass` in ppm from the phase means, with the standard error of the mean: a calibration is
    common to the experiments of a session and moves them together.
    """
    import pandas as pd

    table = conditions.table
    source = settings.temperature if condition == INVERSE_TEMPERATURE else condition
    if source not in table.columns:
        return _of_phase(condition, means)
    x = table[source].dropna()
    sd = table[f"{source}_sd"] if f"{source}_sd" in table.columns else pd.Series(0.0, table.index)
    x_sd = sd.reindex(x.index).fillna(0.0)
    coldest = ABSOLUTE_ZERO_C if condition == INVERSE_TEMPERATURE else -np.inf
    possible = (x > coldest) & (x_sd >= 0) & np.isfinite(x) & np.isfinite(x_sd)
    impossible = tuple(str(experiment) for experiment in x.index[~possible])
    x, x_sd = x[possible], x_sd[possible]
    if condition == INVERSE_TEMPERATURE:
        values, errors = inverse_temperature(x.to_numpy(), x_sd.to_numpy())
        x, x_sd = pd.Series(values, x.index), pd.Series(errors, x.index)
    return ConditionValues(x, x_sd, impossible=impossible)


def _of_phase(condition: str, means: pd.DataFrame) -> ConditionValues | None:
    parts = _COMPOSITION.fullmatch(condition)
    if parts is None:
        return None
    try:
        oxide = parse_oxide(parts[1])
    except ValueError:
        return None
    own = means[(means["phase"] == parts[2]) & (means["element"] == oxide.element) & means["se_ppm"].notna()]
    own = own.assign(relative=own["se_ppm"] / own["mean_ppm"].abs()).sort_values("relative", kind="stable")
    own = own[own["mean_ppm"] > 0].drop_duplicates("experiment").set_index("experiment").sort_index()
    if own.empty:
        return None
    factor = 1.0 if parts[1] == oxide.element else 1.0 / (PPM_PER_WT_PERCENT * oxide.element_fraction)
    return ConditionValues(own["mean_ppm"] * factor, own["se_ppm"] * factor, (parts[2], oxide.element))
