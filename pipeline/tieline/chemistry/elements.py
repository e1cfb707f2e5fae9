"""Elements: symbols, standard atomic weights with their uncertainty, and the isotopes that are measured.

The table below is shipped instead of importing ``periodictable`` at run time: a command needs some eighty
weights, the import costs more than the command itself, and a table in the source can be read by a person
who doubts a number. A test compares every line with ``periodictable`` and with ``molmass``.

Sources: Prohaska et al. (2022), Pure Appl. Chem. 94:573, abridged standard atomic weights with the
uncertainty they state; Gd, Lu and Zr as revised by the Commission on Isotopic Abundances and Atomic Weights
in 2024 (the three revised values are from memory; they agree with the earlier ones within both
uncertainties, and change an oxide factor by less than 5e-6). Isotopes: those with a natural abundance
(Meija et al. 2016, Pure Appl. Chem. 88:293), and long-lived ones of Pb, Th and U that are measured or used
as spikes.
"""

import math
import re

# atomic number, symbol, standard atomic weight, its stated uncertainty, mass numbers
_TABLE = """
1 H 1.008 0.0002 1,2
2 He 4.002602 0.000002 3,4
3 Li 6.94 0.06 6,7
4 Be 9.0121831 0.0000005 9
5 B 10.81 0.02 10,11
6 C 12.011 0.002 12,13
7 N 14.007 0.001 14,15
8 O 15.999 0.001 16,17,18
9 F 18.998403162 0.000000005 19
10 Ne 20.1797 0.0006 20,21,22
11 Na 22.98976928 0.00000002 23
12 Mg 24.305 0.002 24,25,26
13 Al 26.9815384 0.0000003 27
14 Si 28.085 0.001 28,29,30
15 P 30.973761998 0.000000005 31
16 S 32.06 0.02 32,33,34,36
17 Cl 35.45 0.01 35,37
18 Ar 39.95 0.16 36,38,40
19 K 39.0983 0.0001 39,40,41
20 Ca 40.078 0.004 40,42,43,44,46,48
21 Sc 44.955907 0.000004 45
22 Ti 47.867 0.001 46,47,48,49,50
23 V 50.9415 0.0001 50,51
24 Cr 51.9961 0.0006 50,52,53,54
25 Mn 54.938043 0.000002 55
26 Fe 55.845 0.002 54,56,57,58
27 Co 58.933194 0.000003 59
28 Ni 58.6934 0.0004 58,60,61,62,64
29 Cu 63.546 0.003 63,65
30 Zn 65.38 0.02 64,66,67,68,70
31 Ga 69.723 0.001 69,71
32 Ge 72.630 0.008 70,72,73,74,76
33 As 74.921595 0.000006 75
34 Se 78.971 0.008 74,76,77,78,80,82
35 Br 79.904 0.003 79,81
36 Kr 83.798 0.002 78,80,82,83,84,86
37 Rb 85.4678 0.0003 85,87
38 Sr 87.62 0.01 84,86,87,88
39 Y 88.905838 0.000002 89
40 Zr 91.222 0.003 90,91,92,94,96
41 Nb 92.90637 0.00001 93
42 Mo 95.95 0.01 92,94,95,96,97,98,100
44 Ru 101.07 0.02 96,98,99,100,101,102,104
45 Rh 102.90549 0.00002 103
46 Pd 106.42 0.01 102,104,105,106,108,110
47 Ag 107.8682 0.0002 107,109
48 Cd 112.414 0.004 106,108,110,111,112,113,114,116
49 In 114.818 0.001 113,115
50 Sn 118.710 0.007 112,114,115,116,117,118,119,120,122,124
51 Sb 121.760 0.001 121,123
52 Te 127.60 0.03 120,122,123,124,125,126,128,130
53 I 126.90447 0.00003 127
54 Xe 131.293 0.006 124,126,128,129,130,131,132,134,136
55 Cs 132.90545196 0.00000006 133
56 Ba 137.327 0.007 130,132,134,135,136,137,138
57 La 138.90547 0.00007 138,139
58 Ce 140.116 0.001 136,138,140,142
59 Pr 140.90766 0.00001 141
60 Nd 144.242 0.003 142,143,144,145,146,148,150
62 Sm 150.36 0.02 144,147,148,149,150,152,154
63 Eu 151.964 0.001 151,153
64 Gd 157.249 0.002 152,154,155,156,157,158,160
65 Tb 158.925354 0.000007 159
66 Dy 162.500 0.001 156,158,160,161,162,163,164
67 Ho 164.930329 0.000005 165
68 Er 167.259 0.003 162,164,166,167,168,170
69 Tm 168.934219 0.000005 169
70 Yb 173.045 0.010 168,170,171,172,173,174,176
71 Lu 174.96669 0.00005 175,176
72 Hf 178.486 0.006 174,176,177,178,179,180
73 Ta 180.94788 0.00002 180,181
74 W 183.84 0.01 180,182,183,184,186
75 Re 186.207 0.001 185,187
76 Os 190.23 0.03 184,186,187,188,189,190,192
77 Ir 192.217 0.002 191,193
78 Pt 195.084 0.009 190,192,194,195,196,198
79 Au 196.966570 0.000004 197
80 Hg 200.592 0.003 196,198,199,200,201,202,204
81 Tl 204.38 0.01 203,205
82 Pb 207.2 1.1 202,204,205,206,207,208,210
83 Bi 208.98040 0.00001 209
90 Th 232.0377 0.0004 229,230,232
91 Pa 231.03588 0.00001 231
92 U 238.02891 0.00003 233,234,235,236,238
"""

ATOMIC_NUMBER: dict[str, int] = {}
_WEIGHT: dict[str, tuple[float, float]] = {}
_ISOTOPES: dict[str, frozenset[int]] = {}
for _line in _TABLE.split("\n"):
    if _line:
        _number, _symbol, _weight, _stated, _masses = _line.split()
        ATOMIC_NUMBER[_symbol] = int(_number)
        _WEIGHT[_symbol] = (float(_weight), float(_stated))
        _ISOTOPES[_symbol] = frozenset(int(mass) for mass in _masses.split(","))

SYMBOLS: frozenset[str] = frozenset(ATOMIC_NUMBER)
"""Every element with a standard atomic weight, hydrogen to uranium."""

RARE_EARTHS: tuple[str, ...] = (
    "La", "Ce", "Pr", "Nd", "Sm", "Eu", "Gd", "Tb", "Dy", "Ho", "Er", "Tm", "Yb", "Lu",
)  # fmt: skip
"""The lanthanides that have a standard atomic weight (no promethium), by atomic number."""

_ISOTOPE = re.compile(
    r"(?P<first>[A-Z][a-z]?)[ _-]?(?P<mass>[0-9]{1,3})|(?P<count>[0-9]{1,3})[ _-]?(?P<last>[A-Z][a-z]?)"
)


def atomic_weight(symbol: str) -> float:
    """Standard atomic weight in g/mol. Raises KeyError, with the symbol, for anything but a known element."""
    return _weight_and_stated(symbol)[0]


def atomic_weight_uncertainty(symbol: str) -> float:
    """Standard uncertainty of the atomic weight in g/mol: half-width of the stated interval over √3.

    The stated ± covers every normal material and is read as a rectangular distribution (Possolo et al. 2018,
    Pure Appl. Chem. 90:395). For lead the stated 1.1 g/mol covers radiogenic materials. Raises KeyError.
    """
    return _weight_and_stated(symbol)[1] / math.sqrt(3.0)


def isotopes(symbol: str) -> frozenset[int]:
    """Mass numbers of the isotopes of one element that an analysis may report. Raises KeyError."""
    _weight_and_stated(symbol)
    return _ISOTOPES[symbol]


def parse_isotope(text: str) -> tuple[str, int] | None:
    """``Sr88``, ``88Sr``, ``Sr 88``, ``Sr-88`` as ("Sr", 88); None for anything else.

    Only isotopes that exist in rocks are accepted, so that ``C1``, ``P3`` or ``K40O`` are not taken for one.
    """
    match = _ISOTOPE.fullmatch(text.strip())
    if match is None:
        return None
    symbol = match["first"] or match["last"]
    mass = int(match["mass"] or match["count"])
    return (symbol, mass) if mass in _ISOTOPES.get(symbol, frozenset()) else None


def _weight_and_stated(symbol: str) -> tuple[float, float]:
    if symbol not in _WEIGHT:
        raise KeyError(f"{symbol!r} is not the symbol of an element with a standard atomic weight")
    return _WEIGHT[symbol]
