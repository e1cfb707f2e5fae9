"""Exchange coefficients between crystal and melt that equilibrium experiments reach, with their sources.

K_D(Fe–Mg) = (Fe/Mg in the crystal) / (Fe/Mg in the melt), molar, with Fe2+ in the melt: it moves with the
ferric iron assumed there, with composition and with pressure. A window is an expectation to compare with,
no verdict.
"""

from dataclasses import dataclass
from typing import Literal

Exchange = Literal["Fe-Mg", "Ab-An"]


@dataclass(frozen=True)
class ExchangeWindow:
    """Expected coefficient ``centre`` ± ``half_width`` of ``phase`` against a silicate melt.

    ``half_width`` None: the source, as known here, gives a value without a range. ``holds_for``: melts or
    temperatures. ``verified``: False where value or range are from memory.
    """

    phase: str
    exchange: Exchange
    centre: float
    half_width: float | None
    holds_for: str
    source: str
    verified: bool


_PUTIRKA = "Putirka (2008), Rev. Mineral. Geochem. 69:61"
_ALKALINE = "J. Petrol. 64, egad078 (2023)"

WINDOWS: tuple[ExchangeWindow, ...] = (
    ExchangeWindow(
        "olivine", "Fe-Mg", 0.30, 0.03, "basaltic melts at low pressure (value verified, range from memory)",
        "Roeder & Emslie (1970), Contrib. Mineral. Petrol. 29:275", False,
    ),
    ExchangeWindow(
        "olivine", "Fe-Mg", 0.34, None, "magnesian basaltic melts",
        "Matzen et al. (2011), J. Petrol. 52:1243", True,
    ),
    ExchangeWindow("olivine", "Fe-Mg", 0.299, 0.053, "all melts of a compilation", _PUTIRKA, False),
    ExchangeWindow("olivine", "Fe-Mg", 0.285, 0.014, "alkaline melts", _ALKALINE, True),
    ExchangeWindow("clinopyroxene", "Fe-Mg", 0.28, 0.08, "all melts of a compilation", _PUTIRKA, False),
    ExchangeWindow("clinopyroxene", "Fe-Mg", 0.245, 0.008, "alkaline melts", _ALKALINE, True),
    ExchangeWindow("orthopyroxene", "Fe-Mg", 0.29, 0.06, "all melts of a compilation", _PUTIRKA, False),
    ExchangeWindow("plagioclase", "Ab-An", 0.10, 0.05, "below 1050 °C", _PUTIRKA, False),
    ExchangeWindow("plagioclase", "Ab-An", 0.27, 0.11, "at and above 1050 °C", _PUTIRKA, False),
)  # fmt: skip
"""For each phase and exchange, the window to compare with by default comes first."""


def windows_for(phase: str, exchange: Exchange = "Fe-Mg") -> tuple[ExchangeWindow, ...]:
    """The windows known for a phase, the default first; empty where none is known."""
    return tuple(window for window in WINDOWS if (window.phase, window.exchange) == (phase, exchange))
