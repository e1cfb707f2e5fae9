"""Invented crystallisation experiments in chemical balance: what `write_ember.py` lets its instruments see.

Compositions are per 100 g of major oxides, so the majors add up to 100; the traces come on top (about 0.2 wt%
in the starting material, 0.6 wt% in the most evolved melt). Crystals have ideal formulas, exchange Fe and Mg
with the melt by a given coefficient, and balance with the starting material in the given proportions. The
partition coefficients are made up: magnitudes as petrologists meet them, temperature and pressure terms of
our own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

SEED = 20417

# oxide: cation, cations and oxygens per oxide, cation charge, g/mol of the cation; starting material (wt%);
# the probe's detection limit (wt%) and counting variance (wt% squared per wt%); the reference glass (wt%)
OXIDE_TABLE = """
SiO2  Si 1 2 4 28.085   48.595  0.030  8e-4  51.20
TiO2  Ti 1 2 4 47.867    1.300  0.024  4e-4   2.40
Al2O3 Al 2 3 3 26.98154 15.000  0.021  5e-4  13.60
Cr2O3 Cr 2 3 3 51.9961   0.090  0.030  9e-4   0.05
FeO   Fe 1 1 2 55.845    9.000  0.036  1e-3  11.80
MnO   Mn 1 1 2 54.93804  0.170  0.033  1e-3   0.19
MgO   Mg 1 1 2 24.305   11.500  0.021  7e-4   6.60
NiO   Ni 1 1 2 58.6934   0.045  0.030  1e-3   0.03
CaO   Ca 1 1 2 40.078   11.600  0.018  5e-4  10.60
Na2O  Na 2 1 1 22.98977  2.300  0.024  9e-4   2.60
K2O   K  2 1 1 39.0983   0.400  0.015  4e-4   0.52
"""
# isotope: detection limit (ppm), the starting material (ppm), the reference glass (ppm); "-": see above
LASER_TABLE = """
Li7 0.15 12 22; K39 2.5 - -; Ca43 60 - -; Sc45 0.08 38 33; Ti49 0.6 - -;
V51 0.06 260 310; Cr53 0.9 - -; Mn55 0.4 - -; Co59 0.05 48 44; Ni60 0.25 - -;
Zn66 0.35 85 105; Rb85 0.02 45 40; Sr88 0.012 320 380; Y89 0.008 28 36; Zr90 0.012 140 185;
Nb93 0.007 45 41; Cs133 0.008 20 28; Ba137 0.05 250 210; La139 0.006 30 27; Ce140 0.006 45 52;
Pr141 0.005 20 24; Nd146 0.028 30 34; Sm147 0.03 25 27; Eu153 0.010 15 18; Gd157 0.03 20 25;
Dy163 0.02 20 24; Er166 0.015 15 21; Yb172 0.022 15 20; Lu175 0.006 10 14; Hf178 0.018 20 23;
Ta181 0.006 20 25; Th232 0.006 20 26; U238 0.005 15 22
"""
# run, temperature (deg C), pressure (GPa), duration (h); mass fractions of olivine, clinopyroxene and
# plagioclase, the rest is melt
EXPERIMENT_TABLE = """
EM-01 1300 1.0  24 0.05 0    0
EM-02 1275 1.0  36 0.07 0.06 0
EM-03 1250 1.0  48 0.09 0.14 0
EM-04 1225 1.0  72 0.10 0.20 0
EM-05 1200 1.0  96 0.11 0.26 0.06
EM-06 1190 0.5  96 0.13 0.16 0.14
EM-07 1160 0.5 120 0.15 0.23 0.22
EM-08 1130 0.5 168 0.17 0.27 0.27
EM-09 1320 2.0  24 0    0.16 0
EM-10 1290 2.0  48 0.03 0.26 0
"""
# Shannon (1976) ionic radii in Angstrom, six- and eightfold, for the strain model below
RADII_VI = {"Li": 0.76, "Na": 1.02, "K": 1.38, "Rb": 1.52, "Cs": 1.67, "Ca": 1.00, "Sr": 1.18, "Ba": 1.35,
            "Sc": 0.745, "Y": 0.900, "La": 1.032, "Ce": 1.01, "Pr": 0.99, "Nd": 0.983, "Sm": 0.958,
            "Eu": 0.947, "Gd": 0.938, "Dy": 0.912, "Er": 0.890, "Yb": 0.868, "Lu": 0.861, "Ti": 0.605,
            "Zr": 0.72, "Hf": 0.71}  # fmt: skip
RADII_VIII = {"Na": 1.18, "K": 1.51, "Rb": 1.61, "Cs": 1.74, "Ca": 1.12, "Sr": 1.26, "Ba": 1.42, "Y": 1.019,
              "La": 1.160, "Ce": 1.143, "Pr": 1.126, "Nd": 1.109, "Sm": 1.079, "Eu": 1.066, "Gd": 1.053,
              "Dy": 1.027, "Er": 1.004, "Yb": 0.985, "Lu": 0.977, "Th": 1.05, "U": 1.00}  # fmt: skip
RARE_EARTHS = ("La", "Ce", "Pr", "Nd", "Sm", "Eu", "Gd", "Dy", "Y", "Er", "Yb", "Lu")
CRYSTALS = ("olivine", "clinopyroxene", "plagioclase")

_oxides = [line.split() for line in OXIDE_TABLE.strip().splitlines()]
OXIDES = tuple(row[0] for row in _oxides)
CATIONS = tuple(row[1] for row in _oxides)
PER_OXIDE, OXYGENS, CHARGE, ATOMIC, START_WT, PROBE_LIMIT, PROBE_COUNTING, REFERENCE_WT = (
    np.array([float(row[k]) for row in _oxides]) for k in range(2, 10)
)
GRAMS_PER_CATION = ATOMIC + 15.999 * OXYGENS / PER_OXIDE
PPM_PER_WT = 1e4 * ATOMIC / GRAMS_PER_CATION
_laser = [row.split() for row in LASER_TABLE.replace("\n", " ").split(";")]
ISOTOPES = tuple(row[0] for row in _laser)
LASER_ELEMENTS = tuple(name.rstrip("0123456789") for name in ISOTOPES)
LASER_LIMIT = np.array([float(row[1]) for row in _laser])
TRACES = tuple(e for e, row in zip(LASER_ELEMENTS, _laser, strict=True) if row[2] != "-")
START_PPM = np.array([float(row[2]) for row in _laser if row[2] != "-"])
REFERENCE_PPM = np.array([float(row[3]) for row in _laser if row[3] != "-"])
SI, AL, CR, FE, MG, CA, NA = (CATIONS.index(e) for e in ("Si", "Al", "Cr", "Fe", "Mg", "Ca", "Na"))


@dataclass
class Composition:
    """Major oxides in wt% (in the order of OXIDES) and traces in ppm (in the order of TRACES)."""

    oxides: np.ndarray
    traces: np.ndarray

    def mixed(self, other: Composition, fraction: float) -> Composition:
        """This composition with a mass fraction of another in it."""
        keep = 1 - fraction
        return Composition(
            keep * self.oxides + fraction * other.oxides, keep * self.traces + fraction * other.traces
        )

    def ppm(self, elements: tuple[str, ...]) -> np.ndarray:
        """Mass fractions of elements in ppm."""
        known = dict(zip(CATIONS, self.oxides * PPM_PER_WT, strict=True))
        known.update(zip(TRACES, self.traces, strict=True))
        return np.array([known[element] for element in elements])


@dataclass
class Experiment:
    """One charge: conditions, phase proportions, exchange coefficients, and its true compositions."""

    run: str
    temperature: float
    pressure: float
    duration: float
    fractions: dict[str, float]
    exchange: dict[str, float]
    phases: dict[str, Composition] = field(default_factory=dict)


# --- partition coefficients, by mass ---


def strain(radius: float, best: float, modulus: float, kelvin: float) -> float:
    """Blundy & Wood (1994) strain factor; radii in Angstrom, Young's modulus in GPa."""
    misfit = radius - best
    return math.exp(-910.1785 * modulus / kelvin * (best * misfit**2 / 2 + misfit**3 / 3))


def cooling(kelvin: float) -> float:
    """0 at 1250 deg C, 0.56 at 1130 deg C: scales the temperature dependence of the invented D."""
    return 1e4 / kelvin - 1e4 / 1523.15


def olivine_partitioning(kelvin: float, pressure: float, melt: np.ndarray) -> dict[str, float]:
    """D of olivine; ions that prefer it follow Mg, and a floor of 2e-6 stands for uptake at defects."""
    cool, magnesium = cooling(kelvin), 46 / melt[MG]
    d = {"Ni": 2.3 * magnesium, "Co": 0.56 * magnesium, "Mn": 0.22 * magnesium, "Zn": 0.21 * magnesium,
         "Cr": 0.75 * math.exp(0.3 * cool), "V": 0.075 * math.exp(0.6 * cool), "Al": 0.005 + 0.002 * pressure,
         "Nb": 5e-4, "Ta": 9e-4, "Th": 1.5e-5, "U": 3e-5}  # fmt: skip
    for e in ("Sc", *RARE_EARTHS):
        d[e] = 0.17 * math.exp(0.7 * cool - 0.05 * pressure) * strain(RADII_VI[e], 0.725, 310, kelvin)
    for e in ("Ca", "Sr", "Ba"):
        d[e] = 0.65 * math.exp(0.3 * cool) * strain(RADII_VI[e], 0.72, 150, kelvin)
    for e in ("Ti", "Zr", "Hf"):
        d[e] = 0.014 * math.exp(0.4 * cool) * strain(RADII_VI[e], 0.62, 900, kelvin)
    for e in ("Li", "Na", "K", "Rb", "Cs"):
        d[e] = 0.27 * strain(RADII_VI[e], 0.76, 200, kelvin)
    return {e: max(value, 2e-6) for e, value in d.items()}


def clinopyroxene_partitioning(kelvin: float, pressure: float, melt: np.ndarray) -> dict[str, float]:
    """D of clinopyroxene; Ca is set by the formula, and carries Sr and Ba."""
    cool = cooling(kelvin)
    d = {"Ti": 0.36, "Al": 0.27 + 0.08 * pressure, "Cr": 5.5, "Na": 0.10 + 0.09 * pressure, "Li": 0.21,
         "Sc": 1.15, "V": 1.3, "Mn": 0.80, "Co": 1.1, "Ni": 2.6, "Zn": 0.55, "Nb": 0.005,
         "Ta": 0.012}  # fmt: skip
    d = {e: value * math.exp((0.5 if e in ("Ti", "Sc", "V", "Cr", "Ni", "Co", "Mn") else 0.2) * cool)
         for e, value in d.items()}  # fmt: skip
    scale = math.exp(0.8 * cool - 0.12 * (pressure - 1))
    for e in RARE_EARTHS:
        d[e] = 0.46 * scale * strain(RADII_VIII[e], 1.015 - 0.004 * pressure, 285, kelvin)
    for e in ("Th", "U"):
        d[e] = 0.014 * scale * strain(RADII_VIII[e], 1.045, 900, kelvin)
    for e, relative in (("Zr", 0.28), ("Hf", 0.48)):
        d[e] = relative * d["Ti"] * scale**0.5
    for e in ("K", "Rb", "Cs"):
        d[e] = d["Na"] * strain(RADII_VIII[e], 1.10, 63, kelvin) / strain(RADII_VIII["Na"], 1.10, 63, kelvin)
    calcium = (20.4 - 0.011 * (kelvin - 1473) - 1.3 * pressure) / melt[CA]
    for e in ("Sr", "Ba"):
        d[e] = (
            calcium * strain(RADII_VIII[e], 1.04, 190, kelvin) / strain(RADII_VIII["Ca"], 1.04, 190, kelvin)
        )
    return d


def plagioclase_partitioning(kelvin: float, pressure: float, melt: np.ndarray) -> dict[str, float]:
    """D of plagioclase; part of the Eu is divalent."""
    d = {"Ti": 0.04, "Cr": 0.02, "Fe": 0.045, "Mn": 0.03, "Mg": 0.025, "Ni": 0.03, "Co": 0.03, "Zn": 0.10,
         "Sc": 0.015, "V": 0.02, "Zr": 0.002, "Hf": 0.003, "Nb": 0.003, "Ta": 0.006, "Th": 0.0015, "U": 0.001,
         "Li": 0.28}  # fmt: skip
    for e in RARE_EARTHS:
        d[e] = 0.11 * math.exp(0.6 * cooling(kelvin)) * strain(RADII_VIII[e], 1.19, 130, kelvin)
    d["Eu"] += 0.45
    for e in ("K", "Rb", "Cs"):
        d[e] = 1.4 * strain(RADII_VIII[e], 1.22, 62, kelvin)
    for e in ("Sr", "Ba"):
        d[e] = 14.0 / melt[CA] * strain(RADII_VIII[e], 1.19, 108, kelvin)
    return d


PARTITIONING = {
    "olivine": olivine_partitioning,
    "clinopyroxene": clinopyroxene_partitioning,
    "plagioclase": plagioclase_partitioning,
}


# --- crystals of ideal stoichiometry in equilibrium with a melt ---


def oxides_of_formula(formula: np.ndarray) -> np.ndarray:
    """Cations per formula -> oxide wt% that add up to 100."""
    grams = formula * GRAMS_PER_CATION
    return np.asarray(100 * grams / grams.sum())


def ferromagnesian(given: np.ndarray, cation_sum: int, charge: int, iron_to_magnesium: float) -> np.ndarray:
    """Si and Mg + Fe such that cations and charges add up, Mg and Fe in the given molar ratio."""
    silicon = (charge - CHARGE @ given - 2 * (cation_sum - given.sum())) / 2
    divalent = cation_sum - given.sum() - silicon
    formula = given.copy()
    formula[SI] = silicon
    formula[MG] = divalent / (1 + iron_to_magnesium)
    formula[FE] = divalent - formula[MG]
    return formula


def feldspar(given: np.ndarray, calcium_to_sodium: float) -> np.ndarray:
    """Ca + Na fill the large site beside what is given; Al balances the charge of that site, Al + Si = 4."""
    formula = given.copy()
    room = 1 - given.sum()
    formula[NA] = room / (1 + calcium_to_sodium)
    formula[CA] = room - formula[NA]
    formula[AL] = CHARGE @ formula
    formula[SI] = 4 - formula[AL]
    return formula


def crystal(
    phase: str, experiment: Experiment, melt: np.ndarray, factors: np.ndarray, exchange: float
) -> np.ndarray:
    """Oxides of a crystal: minor cations by D x factor, Fe and Mg by exchange, the rest by the formula."""
    kelvin, pressure = experiment.temperature + 273.15, experiment.pressure
    d = PARTITIONING[phase](kelvin, pressure, melt)
    minor = np.array([d.get(e, 0.0) for e in CATIONS]) * factors * melt / GRAMS_PER_CATION
    melt_moles = melt / GRAMS_PER_CATION
    grams = 270.0 if phase == "plagioclase" else 150.0 if phase == "olivine" else 220.0
    for _ in range(12):  # the formula's mass depends weakly on the minor cations
        given = minor * grams / 100
        if phase == "olivine":
            formula = ferromagnesian(given, 3, 8, exchange * melt_moles[FE] / melt_moles[MG])
        elif phase == "clinopyroxene":
            given[CA] = (0.80 - 0.0005 * (kelvin - 1473) - 0.05 * pressure) * factors[CA]
            formula = ferromagnesian(given, 4, 12, exchange * melt_moles[FE] / melt_moles[MG])
        else:
            formula = feldspar(given, exchange * melt_moles[CA] / melt_moles[NA])
        grams = float(formula @ GRAMS_PER_CATION)
    return oxides_of_formula(formula)


def equilibrate(experiment: Experiment) -> None:
    """Melt and crystals that balance with the starting material (fixed point), traces by their D."""
    fractions, melt = experiment.fractions, START_WT.copy()
    plain = np.ones(len(OXIDES))
    liquid = 1 - sum(fractions.values())
    for _ in range(250):
        solids = {p: crystal(p, experiment, melt, plain, experiment.exchange[p]) for p in fractions}
        melt = START_WT / (liquid + sum(fractions[p] * solids[p] / melt for p in fractions))
    kelvin, pressure = experiment.temperature + 273.15, experiment.pressure
    d = {p: np.array([PARTITIONING[p](kelvin, pressure, melt)[e] for e in TRACES]) for p in fractions}
    traces = START_PPM / (liquid + sum(fractions[p] * d[p] for p in fractions))
    experiment.phases = {p: Composition(solids[p], d[p] * traces) for p in fractions}
    experiment.phases["glass"] = Composition(melt, traces)


def make_experiments() -> list[Experiment]:
    """All charges; the exchange coefficients scatter a little from run to run."""
    rng = np.random.RandomState([SEED, 1])
    experiments = []
    for line in EXPERIMENT_TABLE.strip().splitlines():
        run, *numbers = line.split()
        t, p, hours, *modes = (float(x) for x in numbers)
        fractions = {phase: f for phase, f in zip(CRYSTALS, modes, strict=True) if f > 0}
        scatter = rng.standard_normal(3)
        exchange = {"olivine": 0.300 + 0.005 * scatter[0], "clinopyroxene": 0.250 + 0.006 * scatter[1],
                    "plagioclase": 1.15 + 0.02 * scatter[2]}  # fmt: skip
        experiments.append(Experiment(run, t, p, hours, fractions, exchange))
        equilibrate(experiments[-1])
    return experiments


def natural(rng: np.random.RandomState, experiment: Experiment, phase: str, core: float = 0.0) -> Composition:
    """One place in a phase with small real scatter; `core`, 0 to 1, moves a zoned crystal to its core."""
    melt, noise = experiment.phases["glass"], rng.standard_normal(len(OXIDES))
    growth, trace_noise = rng.standard_normal(), rng.standard_normal(len(TRACES))
    if phase == "glass":
        oxides = melt.oxides * np.exp(0.002 * noise)
        traces = melt.traces * np.exp(0.008 * trace_noise)
        return Composition(100 * oxides / oxides.sum(), traces)
    true = experiment.phases[phase]
    zoning = np.zeros(len(OXIDES))
    for element, change in (
        ("Ti", -0.35),
        ("Al", -0.30),
        ("Na", -0.20),
        ("K", -0.35),
        ("Mn", -0.1),
        ("Cr", 0.6),
    ):
        zoning[CATIONS.index(element)] = change * core
    sizes = np.where(np.arange(len(OXIDES)) == CA, 0.004, 0.012)
    factors = np.exp(sizes * noise + zoning)
    exchange = experiment.exchange[phase] * math.exp(0.008 * noise[MG] - 0.20 * core)
    # growth from a more evolved melt raises all incompatible elements together, by 1 - D
    direction = np.clip(1 - true.traces / melt.traces, -1.5, 1)
    traces = true.traces * np.exp((0.02 * growth - 0.35 * core) * direction + 0.01 * trace_noise)
    return Composition(crystal(phase, experiment, melt.oxides, factors, exchange), traces)
