"""Lattice-strain curves of every pair and charge: parameters, elements, overlap, and the checks they make."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, PAIR_KEYS, base_phase, by_pair, check
from tieline.assess.lattice_checks import curve_checks
from tieline.assess.lattice_fits import fit_all_series
from tieline.assess.lattice_rows import CURVE_COLUMNS, ELEMENT_COLUMNS, curve_row, element_rows
from tieline.assess.lattice_series import NO_RADIUS, Row, Series, charge_of, collect_series, pair_rows
from tieline.chemistry.phases import all_phases
from tieline.statistics.lattice_strain import Prior

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
    D between two crystals has no curve.
    """
    variances = by_pair(covariance)
    found: list[dict[str, Any] | _Fitted] = []
    for keys, rows in pair_rows(partition):
        pair = dict(zip(PAIR_KEYS, keys, strict=True))
        phase = base_phase(pair["alpha"])
        site = _site(phase, coordination or {})
        temperature_K = temperatures_C.get(pair["experiment"], math.nan) + 273.15
        wanted = [charge for charge, count in _charges(rows, charges or {}, fit_charges).items() if count > 1]
        if site is None or not temperature_K > 0 or _is_crystal(pair["beta"]):
            lacks = "the coordination of its site" if site is None else "the temperature of the experiment"
            why = _OF_TWO_CRYSTALS if _is_crystal(pair["beta"]) else f"{lacks} is not known"
            found += [_no_curves(pair, wanted, why)] if wanted else []
            continue
        few: dict[int, Series] = {}
        for charge in wanted:
            known = (priors or {}).get((phase, charge))
            series = collect_series(
                rows, variances.get(keys, {}), charge, site,
                charges=charges, leave_out=tuple((leave_out or {}).get(phase, ())),
            )  # fmt: skip
            if len(series.elements) < least_values and known is None:
                few[charge] = series
            else:
                found.append(_Fitted(pair, series, temperature_K, known or {}))
        if few:
            words = "; ".join(f"{charge}+ {_what_there_is(series)}" for charge, series in few.items())
            found.append(_no_curves(pair, list(few), f"too few values to shape and test one ({words})"))
    return _tables(found, without_each, confidence)


_OF_TWO_CRYSTALS = "D between two crystals follows two curves, one over the other: there is no site whose r0 and E it could have"


def _is_crystal(phase: str) -> bool:
    facts = all_phases().get(base_phase(phase))
    return facts is not None and facts.kind == "mineral"


def _what_there_is(series: Series) -> str:
    """The values of a series that has too few, and the elements that have no radius."""
    without = [element for element, why in series.missing.items() if why.startswith(NO_RADIUS)]
    words = ", ".join(series.elements) or "none"
    radii = f"{NO_RADIUS} in coordination {series.coordination} for {', '.join(without)}"
    return f"{words}, {radii}" if without else words


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
            checks.extend(curve_checks(one.pair, result, confidence))
        else:
            checks.append(one)
    return LatticeTables(
        pd.DataFrame(curves, columns=[*PAIR_KEYS, *CURVE_COLUMNS]),
        pd.DataFrame(elements, columns=[*PAIR_KEYS, *ELEMENT_COLUMNS]),
        pd.DataFrame(checks, columns=list(CHECK_COLUMNS)),
    )


def _site(phase: str, given: Mapping[str, int]) -> int | None:
    facts = all_phases().get(phase)
    return given.get(phase, facts.large_site if facts else None)


def _charges(
    rows: Sequence[Row], given: Mapping[str, int], wanted: Sequence[int] | None = None
) -> dict[int, int]:
    """How many measured elements each wanted charge has, charges in order."""
    count = Counter(charge_of(row["element"], given) for row in rows)
    every = sorted(one for one in count if one is not None and (wanted is None or one in wanted))
    return {charge: count[charge] for charge in every}


def _no_curves(pair: Mapping[str, Any], charges: Sequence[int], why: str) -> dict[str, Any]:
    subject = f"{', '.join(f'{charge}+' for charge in charges)} curve"
    return check("lattice-strain", pair, subject, CANNOT_TELL, f"No curve: {why}.")
