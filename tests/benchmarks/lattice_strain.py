"""Coverage of the lattice-strain fit, with and without overlap, on simulated partition coefficients.

    python tests/benchmarks/lattice_strain.py [--quick] [--cases N] [--seed N]

Prints how often the 95 % intervals of D0, r0, E, of D at radii that were not measured, of the overlap fraction and of the
D corrected for it hold the true value. "cannot tell" is counted apart and is neither a hit nor a miss. The true values are
invented, of the size that is usual for trivalent ions.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tieline.statistics.lattice_strain import FITTED, Coefficients, fit_curves, lattice_strain
from tieline.statistics.lattice_strain_overlap import compare_overlaps, fit_both
from tieline.statistics.lattice_strain_prediction import predictions
from tieline.statistics.lattice_strain_stack import stack
from tieline.statistics.least_squares import covariances
from tieline.statistics.moderated_variance import moderate

FloatArray = NDArray[np.float64]

# eightfold and sixfold radii of La, Ce, Nd, Sm, Gd, Dy, Y, Er, Yb, Lu, Sc in Å (Shannon 1976)
EIGHTFOLD = np.array([1.160, 1.143, 1.109, 1.079, 1.053, 1.027, 1.019, 1.004, 0.985, 0.977, 0.870])
SIXFOLD = np.array([1.032, 1.010, 0.983, 0.958, 0.938, 0.912, 0.900, 0.890, 0.868, 0.861, 0.745])
UNMEASURED = {"eightfold": np.array([1.126, 1.015]), "sixfold": np.array([0.990, 0.880])}


@dataclass(frozen=True)
class Crystal:
    """A true curve: temperature in K, D0, r0 in Å, E in GPa and the radii measured."""

    name: str
    temperature_K: float  # noqa: N815 - a unit
    D0: float
    r0: float
    E: float
    radius: FloatArray
    site: str


CRYSTALS = (
    Crystal("clinopyroxene-like", 1573.15, 0.50, 1.020, 290.0, EIGHTFOLD, "eightfold"),
    Crystal("orthopyroxene-like", 1673.15, 0.15, 0.790, 320.0, SIXFOLD, "sixfold"),
    Crystal("olivine-like", 1573.15, 0.15, 0.740, 360.0, SIXFOLD, "sixfold"),
)
ERRORS = (0.02, 0.20)
FRACTIONS = (0.0, 0.0005, 0.002, 0.01)
KINDS = ("independent", "proportional", "shared", "few spots")


def simulate(
    rng: np.random.Generator, crystal: Crystal, sd: FloatArray, kind: str, fraction: float
) -> Coefficients:
    """One set of measured D with relative errors sd (n,).

    kind: `independent`, the stated error does not depend on the error made; `proportional`, it is a fraction of the D
    measured; `shared`, half of the variance is common to all elements; `few spots`, the stated error is itself estimated,
    with 4 degrees of freedom, and moderated.
    """
    true = lattice_strain(crystal.radius, crystal.temperature_K, crystal.D0, crystal.r0, crystal.E)
    apparent = true + fraction * (1 - true)
    if kind == "independent":
        value = apparent * (1 + sd * rng.standard_normal(len(sd)))
        return Coefficients(crystal.radius, value, (sd * apparent) ** 2)
    if kind == "proportional":
        value = apparent * np.exp(sd * rng.standard_normal(len(sd)))
        return Coefficients(crystal.radius, value, np.zeros(len(sd)), relative_variance=sd**2)
    if kind == "few spots":
        value = apparent * (1 + sd * rng.standard_normal(len(sd)))
        estimated = (sd * apparent / value) ** 2 * rng.chisquare(4, len(sd)) / 4
        moderated, dof = moderate(estimated, np.full(len(sd), 4.0))
        return Coefficients(crystal.radius, value, np.zeros(len(sd)), relative_variance=moderated, dof=dof)
    common = np.median(sd) * np.sqrt(0.5)
    value = (
        apparent
        * (1 + sd * np.sqrt(0.5) * rng.standard_normal(len(sd)))
        * (1 + common * rng.standard_normal())
    )
    return Coefficients(
        crystal.radius, value, 0.5 * (sd * apparent) ** 2, np.full((len(sd), len(sd)), common**2)
    )


def errors_of(rng: np.random.Generator, label: float | str, count: int) -> FloatArray:
    """Relative errors of one case: all alike, or log-uniform between 2 and 20 %."""
    if label == "2-20 %":
        return 0.02 * 10.0 ** rng.uniform(size=count)
    return np.full(count, float(label))


def curve_coverage(
    crystal: Crystal, label: float | str, kind: str, cases: int, seed: int
) -> dict[str, float]:
    """Share of intervals that hold the truth, by parameter; `told`, the share of cases with a fit."""
    rng = np.random.default_rng(seed)
    radius = UNMEASURED[crystal.site]
    truth = lattice_strain(radius, crystal.temperature_K, crystal.D0, crystal.r0, crystal.E)
    hits: Counter[str] = Counter()
    data = [
        simulate(rng, crystal, errors_of(rng, label, len(crystal.radius)), kind, 0.0) for _ in range(cases)
    ]
    fits = fit_curves(data, [crystal.temperature_K] * cases)
    for fit, guess in zip(fits, predictions(fits, [radius] * cases), strict=True):
        if fit.verdict != FITTED:
            continue
        hits["told"] += 1
        for name, one, true in (
            ("D0", fit.D0, crystal.D0),
            ("r0", fit.r0, crystal.r0),
            ("E", fit.E, crystal.E),
        ):
            hits[name] += one.low <= true <= one.high
        hits["predicted"] += int(np.sum((guess.low <= truth) & (truth <= guess.high)))
    told = max(hits["told"], 1)
    return {
        "told": hits["told"] / cases,
        **{name: hits[name] / told for name in ("D0", "r0", "E")},
        "predicted": hits["predicted"] / told / len(radius),
    }


def overlap_coverage(
    crystal: Crystal, label: float | str, kind: str, fraction: float, cases: int, seed: int
) -> dict[str, float]:
    """Share of intervals that hold the overlap fraction and the true D of elements it changes by more than 10 %.

    `found`: share of cases where overlap was called; `possible`: where a test could call it that knows the errors.
    """
    rng = np.random.default_rng(seed)
    true = lattice_strain(crystal.radius, crystal.temperature_K, crystal.D0, crystal.r0, crystal.E)
    affected = fraction * (1 - true) > 0.1 * true
    hits: Counter[str] = Counter()
    errors = [errors_of(rng, label, len(crystal.radius)) for _ in range(cases)]
    data = [simulate(rng, crystal, sd, kind, fraction) for sd in errors]
    fits = fit_both(data, [crystal.temperature_K] * cases)
    results = compare_overlaps(data, *fits, correct=bool(affected.any()))
    for result in results:
        if result.verdict == "cannot tell":
            continue
        hits["told"] += 1
        hits["f"] += result.joint.overlap.low <= fraction <= result.joint.overlap.high
        hits["found"] += result.verdict == "overlap"
        inside = (result.corrected.low <= true) & (true <= result.corrected.high)
        hits["corrected"] += int(inside[affected].sum())
    told, many = max(hits["told"], 1), max(int(affected.sum()), 1)
    return {
        "told": hits["told"] / cases,
        "f": hits["f"] / told,
        "found": hits["found"] / told,
        "possible": power(crystal, errors, fraction),
        "affected": float(affected.sum()),
        "corrected": hits["corrected"] / told / many if affected.any() else np.nan,
    }


def power(crystal: Crystal, errors: list[FloatArray], fraction: float) -> float:
    """How often a test at 5 % finds the overlap, from the information that the values hold at the true curve."""
    from scipy.special import ndtr, ndtri

    true = lattice_strain(crystal.radius, crystal.temperature_K, crystal.D0, crystal.r0, crystal.E)
    apparent = true + fraction * (1 - true)
    data = [Coefficients(crystal.radius, apparent, (sd * apparent) ** 2) for sd in errors]
    problem, _errors = stack(data, np.full(len(data), crystal.temperature_K), [{}] * len(data))
    theta = np.array([np.log(crystal.D0), crystal.r0, np.log(crystal.E), fraction])
    _residuals, jacobian = problem.residuals(np.tile(theta, (len(data), 1)))
    sd_f = np.sqrt(covariances(jacobian, np.ones((len(data), 4), dtype=bool))[:, 3, 3])
    return float(np.mean(ndtr(fraction / sd_f - ndtri(0.95))))


def line(name: str, figures: dict[str, float]) -> str:
    return f"{name:66s}" + "  ".join(f"{key} {value:.3f}" for key, value in figures.items())


def pooled(group: str, cells: list[dict[str, float]]) -> list[str]:
    """Mean, lowest and highest of a group of cells, figure by figure."""
    shares = {
        name: np.array([cell[name] for cell in cells if np.isfinite(cell[name])])
        for name in cells[0]
        if name not in ("affected", "possible")
    }
    return [
        line(f"{group}: {name} of {len(cells)}", {key: float(pool(values)) for key, values in shares.items() if len(values)})
        for name, pool in (("mean", np.mean), ("lowest", np.min), ("highest", np.max))
    ]  # fmt: skip


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="one crystal, few cases")
    parser.add_argument("--cases", type=int, default=None)
    parser.add_argument("--seed", type=int, default=20240611)
    chosen = parser.parse_args(arguments)
    cases = chosen.cases or (40 if chosen.quick else 500)
    seed = chosen.seed
    crystals = CRYSTALS[:1] if chosen.quick else CRYSTALS
    labels: tuple[float | str, ...] = ("2-20 %",) if chosen.quick else (*ERRORS, "2-20 %")
    curves: dict[str, list[dict[str, float]]] = {}
    for crystal in crystals:
        for kind in KINDS:
            for label in labels:
                seed += 1
                figures = curve_coverage(crystal, label, kind, cases, seed)
                group = "few spots" if kind == "few spots" else "known errors"
                curves.setdefault(group, []).append(figures)
                print(line(f"{crystal.name}, {kind}, error {label}", figures), flush=True)
    overlaps: dict[str, list[dict[str, float]]] = {}
    for crystal in crystals:
        for kind in KINDS[:1] if chosen.quick else (KINDS[0], KINDS[-1]):
            for fraction in (0.002,) if chosen.quick else FRACTIONS:
                for label in labels:
                    seed += 1
                    figures = overlap_coverage(crystal, label, kind, fraction, max(cases // 2, 1), seed)
                    group = f"{'no overlap' if fraction == 0 else 'overlap'}, {kind}"
                    overlaps.setdefault(group, []).append(figures)
                    print(
                        line(f"{crystal.name}, overlap {fraction:.2%}, {kind}, error {label}", figures),
                        flush=True,
                    )
    for group, cells in (curves | overlaps).items():
        print("\n".join(pooled(group, cells)))
    return 0


if __name__ == "__main__":
    sys.exit(main())
