"""Ionic radii of Shannon (1976), Acta Crystallogr. A32:751, for the cations of partitioning studies.

Effective ionic radii in Å, high spin where the spin makes a difference. A test compares the table with
``mendeleev``, which is too slow to import at run time. A radius that Shannon does not give stays missing:
none is interpolated.
"""

import math
from functools import cache

from tieline.chemistry.elements import SYMBOLS
from tieline.chemistry.oxides import cation_charges

# element, charge, coordination:radius
_TABLE = """
Li 1 4:0.59 6:0.76 8:0.92
Na 1 4:0.99 6:1.02 7:1.12 8:1.18 9:1.24 12:1.39
K 1 4:1.37 6:1.38 7:1.46 8:1.51 9:1.55 10:1.59 12:1.64
Rb 1 6:1.52 7:1.56 8:1.61 9:1.63 10:1.66 12:1.72
Cs 1 6:1.67 8:1.74 9:1.78 10:1.81 12:1.88
Cu 1 4:0.6 6:0.77
Ag 1 4:1 6:1.15 7:1.22 8:1.28
Tl 1 6:1.5 8:1.59 12:1.7
Be 2 4:0.27 6:0.45
Mg 2 4:0.57 6:0.72 8:0.89
Ca 2 6:1 7:1.06 8:1.12 9:1.18 10:1.23 12:1.34
Sr 2 6:1.18 7:1.21 8:1.26 9:1.31 10:1.36 12:1.44
Ba 2 6:1.35 7:1.38 8:1.42 9:1.47 10:1.52 12:1.61
Mn 2 4:0.66 6:0.83 7:0.9 8:0.96
Fe 2 4:0.63 6:0.78 8:0.92
Co 2 4:0.58 6:0.745 8:0.9
Ni 2 4:0.55 6:0.69
Cu 2 4:0.57 6:0.73
Zn 2 4:0.6 6:0.74 8:0.9
Cd 2 4:0.78 6:0.95 7:1.03 8:1.1 12:1.31
Pb 2 6:1.19 7:1.23 8:1.29 9:1.35 10:1.4 12:1.49
Eu 2 6:1.17 7:1.2 8:1.25 9:1.3 10:1.35
Ge 2 6:0.73
V 2 6:0.79
Cr 2 6:0.8
B 3 4:0.11 6:0.27
Al 3 4:0.39 6:0.535
Ga 3 4:0.47 6:0.62
In 3 4:0.62 6:0.8 8:0.92
Sc 3 6:0.745 8:0.87
Y 3 6:0.9 7:0.96 8:1.019 9:1.075
La 3 6:1.032 7:1.1 8:1.16 9:1.216 10:1.27 12:1.36
Ce 3 6:1.01 7:1.07 8:1.143 9:1.196 10:1.25 12:1.34
Pr 3 6:0.99 8:1.126 9:1.179
Nd 3 6:0.983 8:1.109 9:1.163 12:1.27
Sm 3 6:0.958 7:1.02 8:1.079 9:1.132 12:1.24
Eu 3 6:0.947 7:1.01 8:1.066 9:1.12
Gd 3 6:0.938 7:1 8:1.053 9:1.107
Tb 3 6:0.923 7:0.98 8:1.04 9:1.095
Dy 3 6:0.912 7:0.97 8:1.027 9:1.083
Ho 3 6:0.901 8:1.015 9:1.072 10:1.12
Er 3 6:0.89 7:0.945 8:1.004 9:1.062
Tm 3 6:0.88 8:0.994 9:1.052
Yb 3 6:0.868 7:0.925 8:0.985 9:1.042
Lu 3 6:0.861 8:0.977 9:1.032
V 3 6:0.64
Cr 3 6:0.615
Fe 3 4:0.49 6:0.645 8:0.78
Mn 3 6:0.645
Ti 3 6:0.67
Bi 3 6:1.03 8:1.17
Sb 3 6:0.76
As 3 6:0.58
U 3 6:1.025
Si 4 4:0.26 6:0.4
Ge 4 4:0.39 6:0.53
Ti 4 4:0.42 6:0.605 8:0.74
Zr 4 4:0.59 6:0.72 7:0.78 8:0.84 9:0.89
Hf 4 4:0.58 6:0.71 7:0.76 8:0.83
Sn 4 4:0.55 6:0.69 7:0.75 8:0.81
Th 4 6:0.94 8:1.05 9:1.09 10:1.13 12:1.21
U 4 6:0.89 7:0.95 8:1 9:1.05 12:1.17
Ce 4 6:0.87 8:0.97 10:1.07 12:1.14
V 4 6:0.58 8:0.72
Mo 4 6:0.65
W 4 6:0.66
Pb 4 4:0.65 6:0.775 8:0.94
Nb 5 4:0.48 6:0.64 7:0.69 8:0.74
Ta 5 6:0.64 7:0.69 8:0.74
V 5 4:0.355 6:0.54
P 5 4:0.17 6:0.38
As 5 4:0.335 6:0.46
Sb 5 6:0.6
U 5 6:0.76 7:0.84
Mo 6 4:0.41 6:0.59 7:0.73
W 6 4:0.42 6:0.6
U 6 4:0.52 6:0.73 7:0.81 8:0.86
S 6 4:0.12 6:0.29
"""

_RADII: dict[tuple[str, int, int], float] = {}
for _line in _TABLE.split("\n"):
    if _line:
        _element, _charge, *_entries = _line.split()
        for _entry in _entries:
            _coordination, _radius = _entry.split(":")
            _RADII[_element, int(_charge), int(_coordination)] = float(_radius)

# Where the usual charge in a silicate melt is not the one of the oxide that totals are counted in: copper is
# Cu+ at the oxygen fugacities of igneous rocks (from memory).
_CHARGES_IN_MELTS = {"Cu": (1, 2)}


def ionic_radius(element: str, charge: int, coordination: int) -> float:
    """Effective ionic radius in Å; NaN where Shannon (1976) gives none, as for Ni2+ in VIII. Never raises."""
    return _RADII.get((element, charge, coordination), math.nan)


@cache
def usual_charges(element: str) -> tuple[int, ...]:
    """Charges of an element in igneous systems, the usual one first (Eu 3 then 2, V 3 then 4, 5 and 2).

    Common practice; what Eu, V, Cr, Ti, U or Mo do in one experiment depends on its oxygen fugacity. Empty
    for anions and noble gases. Raises ValueError for an unknown element.
    """
    if element not in SYMBOLS:
        raise ValueError(f"{element!r} is not the symbol of an element")
    return _CHARGES_IN_MELTS.get(element, cation_charges(element))


def known_radii() -> dict[tuple[str, int, int], float]:
    """The whole table: (element, charge, coordination) → Å."""
    return dict(_RADII)
