"""Formula units of the whole analyses: cations, their sums, ferric iron, and the usual components.

The equations stand in `tieline.chemistry.formula`. A whole analysis is a spot whose oxides add up to more
than `WHOLE_ABOVE_WT`; trace tables have no formula.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import FloatArray, IntArray, Labels, labels, spot_codes
from tieline.chemistry.formula import FormulaUnits, atoms_from_ppm, ferric_iron
from tieline.chemistry.oxides import oxide_total, wt_percent_per_ppm
from tieline.chemistry.phases import all_phases
from tieline.columns import CONVERT_CATIONS, CONVERT_FORMULA
from tieline.settings.chemistry import FormulaSettings
from tieline.tables import build

WHOLE_ABOVE_WT = 50.0
KEYS = ("spot", "table", "row", "technique", "experiment", "phase")

# component -> (numerator element, elements of the sum); molar, total iron.
COMPONENTS: dict[str, tuple[str, tuple[str, ...]]] = {
    "mg_number": ("Mg", ("Mg", "Fe")),
    "cr_number": ("Cr", ("Cr", "Al")),
    "an": ("Ca", ("Ca", "Na", "K")),
    "ab": ("Na", ("Ca", "Na", "K")),
    "or": ("K", ("Ca", "Na", "K")),
    "wo": ("Ca", ("Ca", "Mg", "Fe", "Mn")),
    "en": ("Mg", ("Ca", "Mg", "Fe", "Mn")),
}
FELDSPARS = ("plagioclase", "alkali feldspar", "feldspar")
OF_PHASE = {"an": FELDSPARS, "ab": FELDSPARS, "or": FELDSPARS}
PYROXENE_COMPONENTS = ("wo", "en")


@dataclass(frozen=True)
class Whole:
    """The whole analyses: first row of each in `convert`, elements, ppm and sigma (n, p), total and its sd (n,)."""

    rows: IntArray
    elements: tuple[str, ...]
    ppm: FloatArray
    sigma: FloatArray
    total: FloatArray
    total_sd: FloatArray


def formula_tables(
    ingest: pa.Table, element: Labels, value: FloatArray, sigma: FloatArray, settings: FormulaSettings
) -> dict[str, pa.Table]:
    """`convert.formula` (one row per whole analysis) and `convert.cations` (one per analysis and element).

    value, sigma: element ppm of every row of `ingest`, before any internal standard.
    """
    whole = _whole_analyses(ingest, element, value, sigma)
    phase = labels(ingest.select(["phase"]).take(pa.array(whole.rows)), "phase").text()
    oxygens, ideal = _bases(phase, settings)
    columns = {name: np.full(len(whole.rows), np.nan) for name in _number_columns()}
    columns["total_wt"], columns["total_sd_wt"], columns["oxygens"] = whole.total, whole.total_sd, oxygens
    atoms = np.full(whole.ppm.shape, np.nan)
    atom_sds = np.full(whole.ppm.shape, np.nan)
    for basis in np.unique(oxygens[np.isfinite(oxygens)]):
        rows = np.flatnonzero(oxygens == basis)
        units = atoms_from_ppm(whole.ppm[rows], whole.elements, float(basis), whole.sigma[rows])
        atoms[rows], atom_sds[rows] = units.atoms, units.sigma
        columns["cation_sum"][rows], columns["cation_sum_sd"][rows] = units.cation_sum, units.cation_sum_sigma
        _ferric(columns, rows, units, ideal[rows])
    _components(columns, whole, phase)
    head = {name: ingest.column(name).take(pa.array(whole.rows)) for name in KEYS}
    return {
        "convert.formula": build(CONVERT_FORMULA, {**head, **columns}),
        "convert.cations": _cation_table(head, whole.elements, atoms, atom_sds),
    }


def _whole_analyses(ingest: pa.Table, element: Labels, value: FloatArray, sigma: FloatArray) -> Whole:
    spot, first = spot_codes(ingest)
    known = np.isfinite(value)
    share = wt_percent_per_ppm(element.texts) if element.texts else np.zeros(0)
    parts = share[element.codes] if element.texts else np.zeros(0)
    parts *= value
    parts[~known] = 0.0
    rough = np.bincount(spot, weights=parts, minlength=len(first))
    chosen = np.flatnonzero(rough > WHOLE_ABOVE_WT)
    place = np.full(len(first), -1)
    place[chosen] = np.arange(len(chosen))
    if len(chosen) < len(first):
        known &= (rough > WHOLE_ABOVE_WT)[spot]
    cells = np.flatnonzero(known)
    codes = element.codes[cells]
    in_use = np.flatnonzero(np.bincount(codes, minlength=len(element.texts)))
    in_use = in_use[[element.texts[code] != "O" for code in in_use]]
    elements = tuple(element.texts[code] for code in in_use)
    column = np.full(len(element.texts), -1)
    column[in_use] = np.arange(len(in_use))
    columns = column[codes]
    if columns.min(initial=0) < 0:
        cells, columns = cells[columns >= 0], columns[columns >= 0]
    shape = (len(chosen), len(elements))
    ppm, sigmas = np.full(shape, np.nan), np.full(shape, np.nan)
    # In reverse, so that of an element measured twice in one spot the first column stands.
    cells = cells[::-1]
    target = place[spot[cells]] * len(elements) + columns[::-1]
    ppm.reshape(-1)[target], sigmas.reshape(-1)[target] = value[cells], sigma[cells]
    total = oxide_total(ppm, elements) if len(chosen) else np.zeros(0)
    weights = wt_percent_per_ppm(elements) if elements else np.zeros(0)
    total_sd = np.sqrt(np.sum((np.where(np.isnan(ppm), 0.0, sigmas) * weights) ** 2, axis=1))
    return Whole(first[chosen], elements, ppm, sigmas, total, total_sd)


def _bases(phase: np.ndarray, settings: FormulaSettings) -> tuple[FloatArray, FloatArray]:
    """Oxygens per formula, and the ideal cation sum where ferric iron is asked for, spot by spot."""
    facts = all_phases()

    def oxygens(name: str) -> float:
        known = facts[name].oxygens if name in facts else None
        return settings.oxygens.get(name, np.nan if known is None else known)

    def ideal(name: str) -> float:
        known = facts[name].cation_sum if name in facts else None
        wanted = name in settings.ferric and name not in settings.oxygens
        return np.nan if known is None or not wanted else known

    names = sorted(set(phase))
    by_name: Mapping[str, tuple[float, float]] = {name: (oxygens(name), ideal(name)) for name in names}
    both = np.array([by_name[name] for name in phase], dtype=np.float64).reshape(-1, 2)
    return both[:, 0], both[:, 1]


def _ferric(columns: dict[str, FloatArray], rows: IntArray, units: FormulaUnits, ideal: FloatArray) -> None:
    for sum_wanted in np.unique(ideal[np.isfinite(ideal)]):
        chosen = ideal == sum_wanted
        if "Fe" not in [oxide.element for oxide in units.oxides]:
            continue
        iron = ferric_iron(units, float(sum_wanted))
        columns["ferric_fraction"][rows[chosen]] = iron.fraction[chosen]
        total_iron = (iron.fe3 + iron.fe2)[chosen]
        with np.errstate(divide="ignore", invalid="ignore"):
            columns["ferric_fraction_sd"][rows[chosen]] = iron.balance_sigma[chosen] / total_iron


def _components(columns: dict[str, FloatArray], whole: Whole, phase: np.ndarray) -> None:
    """Molar ratios with their standard uncertainty: for s = a_i / sum(a), var = sum((d_ij - s)² u_j²) / sum(a)²."""
    from tieline.chemistry.elements import atomic_weight

    weight = np.array([atomic_weight(name) for name in whole.elements])
    moles = np.nan_to_num(whole.ppm) / weight if len(weight) else whole.ppm
    sds = np.nan_to_num(whole.sigma) / weight if len(weight) else whole.sigma
    for name, (numerator, parts) in COMPONENTS.items():
        present = [whole.elements.index(part) for part in parts if part in whole.elements]
        if numerator not in whole.elements or len(present) < 2:
            continue
        total = moles[:, present].sum(axis=1)
        safe = np.where(total > 0, total, np.nan)
        own = whole.elements.index(numerator)
        share = moles[:, own] / safe
        slope = (np.array(present) == own)[None, :] - share[:, None]
        sd = np.sqrt(np.sum((slope * sds[:, present]) ** 2, axis=1)) / safe
        fits = _fits(name, phase)
        columns[name], columns[f"{name}_sd"] = np.where(fits, share, np.nan), np.where(fits, sd, np.nan)


def _fits(component: str, phase: np.ndarray) -> np.ndarray:
    if component in OF_PHASE:
        return np.isin(phase, OF_PHASE[component])
    if component in PYROXENE_COMPONENTS:
        return np.array(["pyroxene" in name or name == "pigeonite" for name in phase], dtype=np.bool_)
    return np.ones(len(phase), dtype=np.bool_)


def _number_columns() -> tuple[str, ...]:
    return tuple(column.name for column in CONVERT_FORMULA.columns if column.kind == "number")


def _cation_table(
    head: dict[str, pa.ChunkedArray], elements: tuple[str, ...], atoms: FloatArray, sds: FloatArray
) -> pa.Table:
    spot, element = np.nonzero(np.isfinite(atoms))
    return build(
        CONVERT_CATIONS,
        {
            **{name: column.take(pa.array(spot)) for name, column in head.items()},
            "element": Labels(element, elements).array(),
            "cations": atoms[spot, element],
            "cations_sd": sds[spot, element],
        },
    )
