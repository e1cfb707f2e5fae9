"""Rows of the side tables of lattice-strain curves: one per curve, and one per element beside it."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import repeat
from typing import Any

import numpy as np

from tieline.assess.lattice_fits import CurveResult
from tieline.assess.lattice_series import Series
from tieline.statistics.lattice_strain_prediction import Predicted, influences, predictions

_PARAMETER_COLUMNS = tuple(
    f"{name}{part}"
    for name in ("D0", "r0_angstrom", "E_GPa", "overlap")
    for part in ("", "_sd", "_lo", "_hi", "_status")
)
CURVE_COLUMNS = (
    "charge", "coordination", "temperature_K", "n_values", "n_limits", "verdict", "reason", "held",
    *_PARAMETER_COLUMNS, "cov_lnD0_r0", "cov_lnD0_E", "cov_r0_E", "chi_square", "dof", "p_value", "scale",
    "joint_verdict", "joint_D0", "joint_r0_angstrom", "joint_E_GPa", "overlap_p", "overlap_verdict", "remarks",
)  # fmt: skip
ELEMENT_COLUMNS = (
    "charge", "element", "radius_angstrom", "role", "D", "D_sd", "curve_D", "curve_lo", "curve_hi", "sigmas",
    "deleted_sigmas", "shift_D0", "shift_r0", "shift_E", "corrected_D", "corrected_lo", "corrected_hi",
)  # fmt: skip


def curve_row(result: CurveResult, temperature_K: float) -> dict[str, Any]:
    """The columns `CURVE_COLUMNS` of one fit; the overlap is that of the joint fit."""
    fit, joint, series = result.fit, result.comparison.joint, result.series
    row: dict[str, Any] = {}
    for name, one in zip(
        ("D0", "r0_angstrom", "E_GPa", "overlap"), (fit.D0, fit.r0, fit.E, joint.overlap), strict=True
    ):
        row |= {
            name: one.value, f"{name}_sd": one.sd, f"{name}_lo": one.low, f"{name}_hi": one.high,
            f"{name}_status": one.status,
        }  # fmt: skip
    return row | {
        "charge": series.charge, "coordination": series.coordination, "temperature_K": temperature_K,
        "n_values": len(series.elements), "n_limits": len(series.limit_elements),
        "verdict": fit.verdict, "reason": fit.reason, "held": result.held,
        "cov_lnD0_r0": fit.covariance[0, 1], "cov_lnD0_E": fit.covariance[0, 2], "cov_r0_E": fit.covariance[1, 2],
        "chi_square": fit.chi_square, "dof": fit.dof, "p_value": fit.p_value, "scale": fit.scale,
        "joint_verdict": joint.verdict, "joint_D0": joint.D0.value, "joint_r0_angstrom": joint.r0.value,
        "joint_E_GPa": joint.E.value, "overlap_p": result.comparison.p_value,
        "overlap_verdict": result.comparison.verdict,
        "remarks": "; ".join([*fit.remarks, *series.remarks, *(f"{e}: {why}" for e, why in series.missing.items())]),
    }  # fmt: skip


def element_rows(results: Sequence[CurveResult], without_each: bool = True) -> list[list[dict[str, Any]]]:
    """The columns `ELEMENT_COLUMNS` of every fit: fitted, limits, compared, and elements of the charge not measured."""
    roles = [_roles(result.series) for result in results]
    guesses = predictions(
        [result.fit for result in results], [np.array([radius for _e, radius, *_rest in every]) for every in roles]
    )  # fmt: skip
    rows = [
        _element_rows(result, every, guess)
        for result, every, guess in zip(results, roles, guesses, strict=True)
    ]
    if without_each:
        for own, influence in zip(rows, influences([result.fit for result in results]), strict=True):
            for row, shift, deleted in zip(own, influence.shift, influence.deleted_sigmas, strict=False):
                row |= {
                    "deleted_sigmas": deleted,
                    "shift_D0": shift[0],
                    "shift_r0": shift[1],
                    "shift_E": shift[2],
                }
    return rows


_Role = tuple[str, float, str, float, float]


def _roles(series: Series) -> list[_Role]:
    """Element, radius, role, D and its standard deviation."""
    sd = np.sqrt(np.diag(series.data.covariance_at(series.data.value)))
    return [
        *zip(series.elements, series.data.radius, repeat("fitted"), series.data.value, sd, strict=False),
        *((e, r, "limit", np.nan, np.nan) for e, r in zip(series.limit_elements, series.data.limit_radius, strict=True)),
        *((e, r, "compared", d, d_sd) for e, (r, d, d_sd) in series.compared.items()),
        *((e, r, "predicted", np.nan, np.nan) for e, r in series.unmeasured.items()),
    ]  # fmt: skip


def _element_rows(result: CurveResult, every: Sequence[_Role], guess: Predicted) -> list[dict[str, Any]]:
    series, fit, corrected = result.series, result.fit, result.comparison.corrected
    rows: list[dict[str, Any]] = []
    for index, (element, radius, role, measured, measured_sd) in enumerate(every):
        rows.append(
            {
                "charge": series.charge, "element": element, "radius_angstrom": radius, "role": role,
                "D": measured, "D_sd": measured_sd, "curve_D": guess.value[index], "curve_lo": guess.low[index],
                "curve_hi": guess.high[index],
                "sigmas": fit.sigmas[index] if role == "fitted"
                else (measured - guess.value[index]) / np.hypot(measured_sd, np.sqrt(fit.scale) * guess.sd[index]),
            }
        )  # fmt: skip
    for index in range(len(series.elements)):
        rows[index] |= {
            "corrected_D": corrected.value[index], "corrected_lo": corrected.low[index],
            "corrected_hi": corrected.high[index],
        }  # fmt: skip
    return rows
