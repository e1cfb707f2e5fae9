"""Spot tables of known truth: crystals and glass of an invented basalt experiment.

Everything here is invented. Glass composition and partition coefficients have realistic orders of magnitude
and belong to no measurement. Physics and noise:

- A spot of a host with a mass fraction f of a contaminant is (1 − f)·host + f·contaminant, mixed before
  counting.
- Growth zoning u changes an element of partition coefficient D by the factor 1 + u·clip(1 − D, −1.5, 1).
- Real spread s: u ~ N(0, s) in every spot, and an independent relative s/3 on every trace and s/15 on every
  major.
- Probe (majors): Poisson counts of 0.5 per ppm on a background of 140 counts, which is counted as long again
  and subtracted; relative reproducibility 0.4 % per element.
- Laser (traces): Poisson counts of 400 to 1200 per ppm on a background of 8 counts, counted twice as long;
  relative reproducibility 1.5 % per element; a yield error of 2 % common to all traces of a spot.
- The sigma handed over is the one a laboratory would report: from the counts observed in that spot, not the
  true one.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

# element: glass in ppm, then partition coefficients of olivine, clinopyroxene and plagioclase. Invented.
_MAJORS = {
    "Si": (233e3, 0.81, 1.02, 1.02),
    "Ti": (9.5e3, 0.008, 0.35, 0.04),
    "Al": (82e3, 0.0025, 0.28, 2.0),
    "Fe": (74e3, 1.35, 0.65, 0.05),
    "Mn": (1.3e3, 1.1, 0.8, 0.05),
    "Mg": (47e3, 5.4, 2.1, 0.03),
    "Ca": (80e3, 0.022, 1.85, 1.15),
    "Na": (19e3, 0.001, 0.12, 1.2),
    "K": (4.2e3, 0.0004, 0.002, 0.17),
    "P": (1.0e3, 0.03, 0.02, 0.03),
    "Cr": (320.0, 0.9, 8.0, 0.03),
}
_TRACES = {
    "Li": (30.0, 0.25, 0.2, 0.25),
    "Sc": (60.0, 0.18, 1.2, 0.01),
    "V": (280.0, 0.05, 0.9, 0.02),
    "Co": (45.0, 3.0, 1.1, 0.03),
    "Ni": (120.0, 10.0, 2.5, 0.02),
    "Ga": (20.0, 0.02, 0.4, 0.9),
    "Rb": (60.0, 2.5e-4, 0.002, 0.04),
    "Sr": (350.0, 6e-4, 0.09, 1.7),
    "Y": (60.0, 0.007, 0.5, 0.012),
    "Zr": (180.0, 0.0012, 0.13, 0.004),
    "Nb": (60.0, 2.5e-4, 0.006, 0.008),
    "Ba": (250.0, 1e-4, 5e-4, 0.25),
    "La": (60.0, 1e-4, 0.055, 0.12),
    "Ce": (80.0, 2e-4, 0.09, 0.1),
    "Nd": (60.0, 5e-4, 0.2, 0.07),
    "Sm": (50.0, 0.0012, 0.33, 0.05),
    "Eu": (40.0, 0.0016, 0.37, 0.5),
    "Gd": (50.0, 0.0025, 0.43, 0.035),
    "Dy": (50.0, 0.006, 0.5, 0.022),
    "Er": (50.0, 0.014, 0.5, 0.013),
    "Yb": (50.0, 0.03, 0.47, 0.009),
    "Lu": (40.0, 0.04, 0.45, 0.008),
    "Hf": (40.0, 0.0025, 0.24, 0.005),
    "Ta": (40.0, 4e-4, 0.012, 0.01),
    "Pb": (30.0, 0.002, 0.04, 0.4),
    "Th": (40.0, 8e-5, 0.009, 0.004),
    "U": (40.0, 1.5e-4, 0.007, 0.003),
}
_HOSTS = {"olivine": 1, "clinopyroxene": 2, "plagioclase": 3}

_PROBE_SENSITIVITY, _PROBE_BACKGROUND, _PROBE_RELATIVE = 0.5, 140.0, 0.004
_LASER_BACKGROUND, _LASER_RELATIVE, _LASER_YIELD = 8.0, 0.015, 0.02


@dataclass(frozen=True)
class Phase:
    """A composition and how its elements are measured: all arrays (p,), concentrations in ppm."""

    elements: tuple[str, ...]
    is_trace: npt.NDArray[np.bool_]
    host_ppm: Array
    glass_ppm: Array
    sensitivity: Array
    background: Array
    background_time: Array
    relative: Array

    @property
    def coefficients(self) -> Array:
        """True partition coefficients D (p,)."""
        return self.host_ppm / self.glass_ppm

    def variance(self, concentration_ppm: Array) -> Array:
        """True counting variance at a concentration, without the common yield."""
        counts = concentration_ppm * self.sensitivity + self.background * (1 + 1 / self.background_time)
        return counts / self.sensitivity**2 + (self.relative * concentration_ppm) ** 2


@dataclass(frozen=True)
class Spots:
    """Simulated groups: values and reported sigmas (G, n, p), the measured glass (G, p), and the truth."""

    phase: Phase
    values: Array
    sigmas: Array
    glass_values: Array
    glass_sigmas: Array
    fraction: Array

    @property
    def glass_mean(self) -> Array:
        """Mean (G, p) of the measured glass spots."""
        return self.glass_values.mean(axis=1)

    @property
    def glass_variance(self) -> Array:
        """Variance (G, p) of one glass composition: spread between spots, and error of the mean."""
        number = self.glass_values.shape[1]
        return self.glass_values.var(axis=1, ddof=1) * (1 + 1 / number)


def phase(host: str = "olivine", technique: str = "joint") -> Phase:
    """The invented host phase as seen by the probe (majors), the laser (traces) or both on the same spot."""
    tables = {"probe": [_MAJORS], "laser": [_TRACES], "joint": [_MAJORS, _TRACES]}[technique]
    names = [name for table in tables for name in table]
    rows = np.array([row for table in tables for row in table.values()])
    trace = np.array([name in _TRACES for name in names])
    laser_sensitivity = 400.0 + 800.0 * (np.arange(len(names)) % 5) / 4
    return Phase(
        elements=tuple(names),
        is_trace=trace,
        host_ppm=rows[:, 0] * rows[:, _HOSTS[host]],
        glass_ppm=rows[:, 0],
        sensitivity=np.where(trace, laser_sensitivity, _PROBE_SENSITIVITY),
        background=np.where(trace, _LASER_BACKGROUND, _PROBE_BACKGROUND),
        background_time=np.where(trace, 2.0, 1.0),
        relative=np.where(trace, _LASER_RELATIVE, _PROBE_RELATIVE),
    )


def growth_factor(coefficients: Array) -> Array:
    """Relative change of an element per unit of growth zoning."""
    return np.clip(1 - coefficients, -1.5, 1.0)


def measure(rng: np.random.Generator, of: Phase, true_ppm: Array) -> tuple[Array, Array]:
    """Values and reported sigmas of spots of true composition (..., p), in ppm."""
    yield_error = 1 + _LASER_YIELD * rng.standard_normal((*true_ppm.shape[:-1], 1)) * of.is_trace
    reproducibility = 1 + of.relative * rng.standard_normal(true_ppm.shape)
    expected = np.maximum(true_ppm * yield_error * reproducibility, 0.0) * of.sensitivity
    gross = rng.poisson(expected + of.background)
    blank = (
        rng.poisson(np.broadcast_to(of.background * of.background_time, true_ppm.shape)) / of.background_time
    )
    values = (gross - blank) / of.sensitivity
    counted = np.maximum(gross, 1.0) + blank / of.background_time
    sigmas = np.sqrt(counted / of.sensitivity**2 + (of.relative * values) ** 2)
    return values, sigmas


def simulate(
    rng: np.random.Generator,
    fraction: Array,
    *,
    host: str = "olivine",
    technique: str = "joint",
    spread: float = 0.0,
    growth: Array | float = 0.0,
    glass_spots: int = 10,
    exchanged: bool = False,
) -> Spots:
    """Groups of host spots with given mass fractions (G, n) of the other phase.

    growth (G, n) is the growth zoning u of every spot, on top of the random spread. exchanged: the host is
    the glass and the contaminant the crystal, measured in `glass_spots` clean spots; spread then acts on
    neither.
    """
    of = phase(host, technique)
    groups, spots = fraction.shape
    clean, other = (of.glass_ppm, of.host_ppm) if exchanged else (of.host_ppm, of.glass_ppm)
    factor = np.ones((groups, spots, len(of.elements)))
    if not exchanged:
        common = growth + spread * rng.standard_normal((groups, spots))
        shape = growth_factor(of.coefficients) * of.is_trace
        own = np.where(of.is_trace, spread / 3, spread / 15) * rng.standard_normal(factor.shape)
        factor = np.maximum(1 + common[..., None] * shape + own, 0.0)
    part = fraction[..., None]
    values, sigmas = measure(rng, of, (1 - part) * clean * factor + part * other)
    glass, glass_sigmas = measure(rng, of, np.broadcast_to(other, (groups, glass_spots, len(of.elements))))
    return Spots(of, values, sigmas, glass, glass_sigmas, fraction)


def oracle_filter(of: Phase, spread: float = 0.0, *, exchanged: bool = False) -> tuple[Array, float]:
    """Weights (p,) and standard deviation of the fraction for someone who knows composition, spread and variances."""
    clean, other = (of.glass_ppm, of.host_ppm) if exchanged else (of.host_ppm, of.glass_ppm)
    own = np.zeros(len(clean)) if exchanged else np.where(of.is_trace, spread / 3, spread / 15)
    covariance = np.diag(of.variance(clean) + (own * clean) ** 2)
    yield_line = _LASER_YIELD * clean * of.is_trace
    covariance += np.outer(yield_line, yield_line)
    if not exchanged:
        growth_line = spread * clean * growth_factor(of.coefficients) * of.is_trace
        covariance += np.outer(growth_line, growth_line)
    contrast = other - clean
    weights = np.linalg.solve(covariance, contrast)
    information = contrast @ weights
    return weights / information, float(1 / np.sqrt(information))


def oracle_sd_fraction(of: Phase, spread: float = 0.0, *, exchanged: bool = False) -> float:
    """Standard deviation of the fraction of one clean spot for the same oracle."""
    return oracle_filter(of, spread, exchanged=exchanged)[1]
