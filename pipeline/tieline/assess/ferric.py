"""The ferric share of the iron in a melt: stated, or from the oxygen fugacity by a published model."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from tieline.chemistry.oxides import parse_oxide

KRESS_CARMICHAEL = "kress-carmichael-1991"

# ln(X_Fe2O3 / X_FeO) = a ln fO2 + b/T + c + sum d X + e [1 - T0/T - ln(T/T0)] + f P/T + g (T - T0) P/T + h P²/T
_FUGACITY, _TEMPERATURE, _CONSTANT, _HEAT = 0.196, 1.1492e4, -6.675, -3.36
_OXIDES = {"Al2O3": -2.243, "FeO": -1.828, "CaO": 3.201, "Na2O": 5.854, "K2O": 6.215}
_PRESSURE, _PRESSURE_TEMPERATURE, _PRESSURE_SQUARED = -7.01e-7, -1.54e-10, 3.85e-17
_REFERENCE_K = 1673.0


@dataclass(frozen=True)
class FerricShare:
    """Fe3+ over total Fe, as amounts of substance, with its standard deviation and where it comes from."""

    value: float
    sd: float
    source: str

    def __post_init__(self) -> None:
        if not 0 <= self.value < 1 or not (self.sd >= 0 and math.isfinite(self.sd)):
            raise ValueError(f"a ferric share of {self.value} ± {self.sd} is not between 0 and 1")


def kress_carmichael(
    oxides_wt: Mapping[str, float],
    temperature_K: float,
    pressure_GPa: float,
    log10_fO2: float,
    log10_fO2_sd: float,
    model_sd: float,
) -> FerricShare:
    """Ferric share of a silicate melt by eq. 7 of Kress & Carmichael (1991), Contrib. Mineral. Petrol. 108:82.

    oxides_wt: wt% of the oxides, all iron as FeO; fO2 in bar. sd: that of fO2 carried through, and `model_sd`, the scatter of
    the model as an absolute share. Calibrated for natural silicate melts, 1200-1630 °C, mostly at 1 bar.

    The coefficients are from memory. They give 0.161 for an average ocean-ridge basalt at 1200 °C, 1 bar and 0.1 log units
    above the fayalite-magnetite-quartz buffer, where 0.16 is published (Cottrell & Kelley 2011, Earth Planet. Sci. Lett.
    305:270, which used this model; figures from memory). Raises ValueError for conditions or oxides that make no sense.
    """
    numbers = (temperature_K, pressure_GPa, log10_fO2, log10_fO2_sd, model_sd, *oxides_wt.values())
    if not all(math.isfinite(number) for number in numbers) or temperature_K <= 0 or pressure_GPa < 0:
        raise ValueError("temperature, pressure, oxygen fugacity and oxides must be finite numbers")
    if oxides_wt.get("FeO", 0.0) <= 0 or min(oxides_wt.values()) < 0 or "Fe2O3" in oxides_wt:
        raise ValueError("the melt needs all its iron as FeO, above zero, and no negative oxide")
    moles = {name: wt / parse_oxide(name).molar_mass for name, wt in oxides_wt.items()}
    total = sum(moles.values())
    pressure = pressure_GPa * 1e9
    ratio = math.exp(
        _FUGACITY * log10_fO2 * math.log(10)
        + _TEMPERATURE / temperature_K
        + _CONSTANT
        + sum(slope * moles.get(name, 0.0) / total for name, slope in _OXIDES.items())
        + _HEAT * (1 - _REFERENCE_K / temperature_K - math.log(temperature_K / _REFERENCE_K))
        + _PRESSURE * pressure / temperature_K
        + _PRESSURE_TEMPERATURE * (temperature_K - _REFERENCE_K) * pressure / temperature_K
        + _PRESSURE_SQUARED * pressure**2 / temperature_K
    )
    share = 2 * ratio / (1 + 2 * ratio)
    from_fugacity = share * (1 - share) * _FUGACITY * math.log(10) * log10_fO2_sd
    return FerricShare(
        share,
        math.hypot(from_fugacity, model_sd),
        f"Kress & Carmichael (1991) at log fO2 {log10_fO2:.2f}, {temperature_K - 273.15:.0f} °C, {pressure_GPa:g} GPa",
    )
