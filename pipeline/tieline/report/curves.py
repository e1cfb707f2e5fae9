"""Fitted lattice-strain curves as lines to draw, from the side tables of `assess`."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import ndtri

from tieline.report.page_data import Curve
from tieline.report.source import Source, optional_table
from tieline.statistics.lattice_strain import lattice_strain
from tieline.statistics.lattice_strain_problem import STRAIN_FACTOR, strain_energy

POINTS = 41
MARGIN_ANGSTROM = 0.03


def curves(source: Source) -> list[Curve]:
    """Every fitted curve over the radii of its elements, with a band at the configured confidence.

    The band is that of the curve to first order in ln D; how far elements lie off it is not in it.
    """
    fitted, elements = (optional_table(source, name) for name in ("assess.curves", "assess.elements"))
    if fitted is None or elements is None:
        return []
    radii: dict[tuple[Any, ...], list[float]] = {}
    for row in elements.to_pylist():
        if row["role"] != "predicted":
            radii.setdefault(_key(row), []).append(row["radius_angstrom"])
    z = float(ndtri(0.5 + 0.5 * source.settings.assess.confidence))
    return [
        _curve(row, radii[_key(row)], z)
        for row in fitted.to_pylist()
        if row["verdict"] == "fitted" and _key(row) in radii
    ]


def _key(row: dict[str, Any]) -> tuple[Any, ...]:
    return row["experiment"], row["alpha"], row["beta"], row["charge"]


def _curve(row: dict[str, Any], radii: list[float], z: float) -> Curve:
    r0, modulus, kelvin = row["r0_angstrom"], row["E_GPa"], row["temperature_K"]
    at = np.linspace(min(*radii, r0) - MARGIN_ANGSTROM, max(*radii, r0) + MARGIN_ANGSTROM, POINTS)
    D = lattice_strain(at, kelvin, row["D0"], r0, modulus)
    factor = STRAIN_FACTOR * modulus / kelvin
    # ln D by ln D0, r0 and E
    slope = np.stack(
        [
            np.ones_like(at),
            0.5 * factor * (at**2 - r0**2),
            -factor / modulus * strain_energy(at, np.array(r0)),
        ]
    )
    r0_D0, E_D0, E_r0 = (row[name] or 0.0 for name in ("cov_lnD0_r0", "cov_lnD0_E", "cov_r0_E"))
    covariance = np.array(
        [
            [((row["D0_sd"] or 0.0) / row["D0"]) ** 2, r0_D0, E_D0],
            [r0_D0, (row["r0_angstrom_sd"] or 0.0) ** 2, E_r0],
            [E_D0, E_r0, (row["E_GPa_sd"] or 0.0) ** 2],
        ]
    )
    variance = np.einsum("in,ij,jn->n", slope, covariance, slope) * row["scale"]
    half = z * np.sqrt(np.maximum(variance, 0.0))
    label = f"{row['charge']}+ curve, r0 {r0:.3f} Å, E {modulus:.0f} GPa"
    return Curve(
        row["experiment"], row["alpha"], row["beta"], label, at.tolist(), D.tolist(),
        (D * np.exp(-half)).tolist(), (D * np.exp(half)).tolist(),
    )  # fmt: skip
