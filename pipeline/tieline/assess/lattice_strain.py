"""Lattice-strain curves of every pair and charge: parameters, elements, overlap, and the checks they make."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import repeat
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import (
    CANNOT_TELL,
    CHECK_COLUMNS,
    CONSISTENT,
    DIFFERS,
    EXCESS,
    PAIR_KEYS,
    base_phase,
    by_pair,
    check,
)  # fmt: skip
from tieline.assess.lattice_fits import CurveResult, fit_all_series
from tieline.assess.lattice_series import Row, Series, charge_of, collect_series, pair_rows
from tieline.chemistry.phases import all_phases
from tieline.statistics.lattice_strain import FITTED, Prior
from tieline.statistics.lattice_strain_overlap import OVERLAP_FOUND
from tieline.statistics.lattice_strain_prediction import Predicted, influences, predictions

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class LatticeTables:
    """curves: a row per pair and charge; elements: a row per pair, charge and element; checks: rows of `assess`."""

    curves: pd.DataFrame
    elements: pd.DataFrame
    checks: pd.DataFrame


def lattice_strain_tables(
    partition: pd.DataFrame,
    covariance: pd.DataFrame,
    temperatures_C: Mapping[str, float],
    *,
    coordination: Mapping[str, int] | None = None,
    charges: Mapping[str, int] | None = None,
    fit_charges: Sequence[int] | None = None,
    least_values: int = 2,
    leave_out: Mapping[str, Sequence[str]] | None = None,
    priors: Mapping[tuple[str, int], Mapping[str, Prior]] | None = None,
    without_each: bool = True,
    confidence: float = 0.95,
) -> LatticeTables:
    """Fit every pair and charge that has at least `least_values` D's to shape a curve, or a prior for it.

    partition, covariance: columns as in the stage files of those names; temperatures_C: experiment -> °C. coordination: phase ->
    coordination of its site, in the place of the published one; phases without either have no curve, and say so.
    fit_charges: by default all. leave_out: phase -> elements. priors: (phase, charge) -> parameter -> prior, used only
    where the values do not suffice. without_each: tell what every element does to the curve. charges: see `collect_series`.
    """
    variances = by_pair(covariance)
    found: list[dict[str, Any] | _Fitted] = []
    for keys, rows in pair_rows(partition).items():
        pair = dict(zip(PAIR_KEYS, keys, strict=True))
        phase = base_phase(pair["alpha"])
        site = _site(phase, coordination or {})
        temperature_K = temperatures_C.get(pair["experiment"], np.nan) + 273.15
        wanted = [charge for charge, count in _charges(rows, charges or {}, fit_charges).items() if count > 1]
        if site is None or not temperature_K > 0:
            lacks = "the coordination of its site" if site is None else "the temperature of the experiment"
            found += [_no_curves(pair, wanted, f"{lacks} is not known")] if wanted else []
            continue
        few: dict[int, tuple[str, ...]] = {}
        for charge in wanted:
            known = (priors or {}).get((phase, charge))
            series = collect_series(
                rows, variances.get(keys, {}), charge, site,
                charges=charges, leave_out=tuple((leave_out or {}).get(phase, ())),
            )  # fmt: skip
            if len(series.elements) < least_values and known is None:
                few[charge] = series.elements
            else:
                found.append(_Fitted(pair, series, temperature_K, known or {}))
        if few:
            words = "; ".join(f"{charge}+ {', '.join(names) or 'none'}" for charge, names in few.items())
            found.append(_no_curves(pair, list(few), f"too few values to shape and test one ({words})"))
    return _tables(found, without_each, confidence)


@dataclass(frozen=True)
class _Fitted:
    """A series that has a curve fitted to it."""

    pair: Mapping[str, str]
    series: Series
    temperature_K: float  # noqa: N815 - a unit
    priors: Mapping[str, Prior]


def _tables(
    found: Sequence[dict[str, Any] | _Fitted], without_each: bool, confidence: float
) -> LatticeTables:
    """The tables of all series, fitted side by side, and of the checks that say why there is no curve, in order."""
    import pandas as pd

    fitted = [one for one in found if isinstance(one, _Fitted)]
    results = fit_all_series(
        [one.series for one in fitted], [one.temperature_K for one in fitted], [one.priors for one in fitted], confidence
    )  # fmt: skip
    per_element = iter(element_rows(results, without_each))
    curves: list[dict[str, Any]] = []
    elements: list[dict[str, Any]] = []
    checks: list[dict[str, Any]] = []
    remaining = iter(results)
    for one in found:
        if isinstance(one, _Fitted):
            result = next(remaining)
            curves.append({**one.pair, **curve_row(result, one.temperature_K)})
            elements.extend({**one.pair, **row} for row in next(per_element))
            checks.extend(_checks(one.pair, result, confidence))
        else:
            checks.append(one)
    return LatticeTables(
        pd.DataFrame(curves, columns=[*PAIR_KEYS, *CURVE_COLUMNS]),
        pd.DataFrame(elements, columns=[*PAIR_KEYS, *ELEMENT_COLUMNS]),
        pd.DataFrame(checks, columns=list(CHECK_COLUMNS)),
    )


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


def _site(phase: str, given: Mapping[str, int]) -> int | None:
    facts = all_phases().get(phase)
    return given.get(phase, facts.large_site if facts else None)


def _charges(
    rows: Sequence[Row], given: Mapping[str, int], wanted: Sequence[int] | None = None
) -> dict[int, int]:
    """How many measured elements each wanted charge has, charges in order."""
    found = [charge_of(element, given) for element in (row["element"] for row in rows)]
    every = sorted({one for one in found if one is not None and (wanted is None or one in wanted)})
    return {charge: found.count(charge) for charge in every}


def _no_curves(pair: Mapping[str, Any], charges: Sequence[int], why: str) -> dict[str, Any]:
    subject = f"{', '.join(f'{charge}+' for charge in charges)} curve"
    return check("lattice-strain", pair, subject, CANNOT_TELL, f"No curve: {why}.")


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


def _checks(pair: Mapping[str, Any], result: CurveResult, confidence: float) -> list[dict[str, Any]]:
    """One row on the curve's fit, one on the overlap that the values show against it."""
    fit, joint, both = result.fit, result.comparison.joint, result.comparison
    charge = result.series.charge
    held = f" Held by what is known: {result.held}." if result.held else ""
    if fit.verdict != FITTED:
        curve = check(
            "lattice-strain", pair, f"{charge}+ curve", CANNOT_TELL, f"No curve: {fit.reason}.{held}"
        )
    else:
        words = (
            f"D0 {fit.D0.value:.3g} ({fit.D0.low:.3g} to {fit.D0.high:.3g}, {fit.D0.status}), r0 {fit.r0.value:.4g} Å "
            f"({fit.r0.low:.4g} to {fit.r0.high:.4g}, {fit.r0.status}), E {fit.E.value:.3g} GPa ({fit.E.low:.3g} to "
            f"{fit.E.high:.3g}, {fit.E.status}) at {confidence:.0%}; Blundy & Wood (1994). value: chi-square over degrees "
            f"of freedom. A curve shows consistency between elements; it is no proof of equilibrium.{held}"
        )
        words += "".join(f" {remark[0].upper()}{remark[1:]}." for remark in fit.remarks)
        if fit.dof == 0:
            curve = check(
                "lattice-strain",
                pair,
                f"{charge}+ curve",
                CANNOT_TELL,
                f"As many parameters as values. {words}",
            )
        else:
            numbers = {
                "value": fit.chi_square / fit.dof,
                "expected_lo": 0.0,
                "expected_hi": fit.excess,
            }
            verdict = DIFFERS if fit.p_value < EXCESS else CONSISTENT
            curve = check("lattice-strain", pair, f"{charge}+ curve", verdict, words, **numbers)
    if both.verdict == CANNOT_TELL:
        floor = check(
            "overlap", pair, f"{charge}+ overlap", CANNOT_TELL, f"No overlap fraction: {both.reason}."
        )
    else:
        f = joint.overlap
        found = both.verdict == OVERLAP_FOUND
        words = (
            f"Fraction of {pair['beta']} in {pair['alpha']} from curve and floor together: {f.value:.3g}, {f.low:.3g} to "
            f"{f.high:.3g} at {confidence:.0%}; p {both.p_value:.2g} that there is none."
        )
        floor = check("overlap", pair, f"{charge}+ overlap", DIFFERS if found else CONSISTENT, words,
            value=f.value, sd=f.sd, expected_lo=0.0, expected_hi=0.0,
        )  # fmt: skip
    return [curve, floor]
