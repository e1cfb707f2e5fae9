"""Linear propagation of uncertainty to D, with the share of every source.

The model of one D is

    D = (mean_a · calibration_a · matrix_a · standard_a · standard_calibration_a) / (the same of b)

with every factor 1 ± its relative uncertainty. The internal standard's own calibration is that of the measurement
that gave its actual value. A factor that both phases share is one variable and cancels
exactly. The `uncertainties` package carries the model for small tables; beyond `ARRAYS_ABOVE` D's the same
first-order propagation (JCGM 100:2008, 5.1 and 5.2) runs on arrays, several hundred times faster. A property
test holds the two equal.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from tieline.arrays import FloatArray, IntArray

ARRAYS_ABOVE = 1000


@dataclass(frozen=True)
class Side:
    """One phase of K D's: mean and the relative standard uncertainties of its factors, shape (K,) each.

    `counting` and `spread` are the two parts of the mean's own uncertainty. The keys say which variable a
    factor is: equal keys on both sides are one variable. `matrix` is never shared.
    """

    mean: FloatArray
    counting: FloatArray
    spread: FloatArray
    calibration: FloatArray
    calibration_key: IntArray
    matrix: FloatArray
    internal_standard: FloatArray
    internal_standard_key: IntArray
    standard_calibration: FloatArray
    standard_calibration_key: IntArray


@dataclass(frozen=True)
class Budget:
    """D, its standard uncertainty, and the shares of D_sd squared, shape (K,) each; the shares sum to 1."""

    D: FloatArray
    D_sd: FloatArray
    counting: FloatArray
    spread: FloatArray
    calibration: FloatArray
    internal_standard: FloatArray


def propagate(alpha: Side, beta: Side) -> Budget:
    """Budget of K D's by the package for small K, by arrays for large K."""
    return by_arrays(alpha, beta) if len(alpha.mean) > ARRAYS_ABOVE else by_package(alpha, beta)


def unshared(alpha: Side, beta: Side) -> tuple[FloatArray, FloatArray]:
    """Relative uncertainty of alpha and of beta from factors that do not cancel between them, shape (K,) each."""
    apart = alpha.calibration_key != beta.calibration_key
    different = alpha.internal_standard_key != beta.internal_standard_key
    elsewhere = alpha.standard_calibration_key != beta.standard_calibration_key

    def total(side: Side) -> FloatArray:
        calibration = np.where(apart, side.calibration, 0.0)
        standard = np.where(different, side.internal_standard, 0.0)
        behind = np.where(elsewhere, side.standard_calibration, 0.0)
        return np.asarray(np.sqrt(calibration**2 + side.matrix**2 + standard**2 + behind**2))

    return total(alpha), total(beta)


def by_arrays(alpha: Side, beta: Side) -> Budget:
    """First-order propagation on arrays. Every factor enters D with the power 1 or -1."""
    with np.errstate(divide="ignore", invalid="ignore"):
        D = np.where(beta.mean != 0, alpha.mean / beta.mean, np.nan)
    counting = alpha.counting**2 + beta.counting**2
    spread = alpha.spread**2 + beta.spread**2
    apart = alpha.calibration_key != beta.calibration_key
    calibration = np.where(apart, alpha.calibration**2 + beta.calibration**2, 0.0)
    elsewhere = alpha.standard_calibration_key != beta.standard_calibration_key
    calibration += np.where(elsewhere, alpha.standard_calibration**2 + beta.standard_calibration**2, 0.0)
    calibration += alpha.matrix**2 + beta.matrix**2
    different = alpha.internal_standard_key != beta.internal_standard_key
    standard = np.where(different, alpha.internal_standard**2 + beta.internal_standard**2, 0.0)
    total = counting + spread + calibration + standard
    safe = np.where(total > 0, total, np.nan)
    return Budget(
        D, np.abs(D) * np.sqrt(total), counting / safe, spread / safe, calibration / safe, standard / safe
    )


def by_package(alpha: Side, beta: Side) -> Budget:
    """The same with one `uncertainties` variable per source, shared variables being one and the same."""
    from uncertainties import UFloat, ufloat

    shared: dict[tuple[str, int], UFloat | float] = {}

    def factor(source: str, sd: float, key: int | None = None, kind: str = "") -> UFloat | float:
        if sd == 0:
            return 1.0  # an exact factor is no variable
        if key is None:
            return ufloat(1.0, sd, tag=source)
        return shared.setdefault((kind or source, key), ufloat(1.0, sd, tag=source))

    def concentration(side: Side, row: int) -> UFloat | float:
        return (
            float(side.mean[row])
            * factor("counting", float(side.counting[row]))
            * factor("spread", float(side.spread[row]))
            * factor("calibration", float(side.calibration[row]), int(side.calibration_key[row]))
            * factor("calibration", float(side.matrix[row]))
            * factor(
                "internal_standard",
                float(side.internal_standard[row]),
                int(side.internal_standard_key[row]),
            )
            * factor(
                "calibration",
                float(side.standard_calibration[row]),
                int(side.standard_calibration_key[row]),
                kind="calibration of the standard",
            )
        )

    rows = [_components(concentration, alpha, beta, row) for row in range(len(alpha.mean))]
    columns = np.array(rows, dtype=np.float64).reshape(-1, 6)
    return Budget(*columns.T)


def _components(concentration, alpha: Side, beta: Side, row: int) -> tuple[float, ...]:  # type: ignore[no-untyped-def]
    if not np.isfinite(alpha.mean[row]) or not np.isfinite(beta.mean[row]) or beta.mean[row] == 0:
        return (np.nan,) * 6
    D = concentration(alpha, row) / concentration(beta, row)
    if isinstance(D, float):
        return (D, 0.0, *(np.nan,) * 4)
    parts = dict.fromkeys((field.name for field in fields(Budget)[2:]), 0.0)
    for variable, component in D.error_components().items():
        parts[variable.tag] += component**2
    total = sum(parts.values())
    shares = [part / total if total > 0 else np.nan for part in parts.values()]
    return (D.nominal_value, D.std_dev, *shares)
