"""Formula units of the whole analyses: cations, their sums, ferric iron, and the usual components.

The equations stand in `tieline.chemistry.formula`. A whole analysis is a spot whose oxides add up to more
than `WHOLE_ABOVE_WT`; trace tables have no formula.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from itertools import compress

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, IntArray, Labels, labels, portions, spot_codes
from tieline.chemistry.formula import FormulaUnits, atoms_from_ppm, ferric_iron
from tieline.chemistry.oxides import oxide_total, wt_percent_per_ppm
from tieline.chemistry.phases import all_phases
from tieline.columns import CONVERT_CATIONS, CONVERT_FORMULA
from tieline.settings.chemistry import FormulaSettings
from tieline.statistics.threads import side_by_side
from tieline.tables import build, empty

WHOLE_ABOVE_WT = 50.0
SPOTS_AT_ONCE = 4096
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


@dataclass(frozen=True)
class Cations:
    """Of some spots: how many elements each has (spots,); which, with atoms per formula and sd, spot by spot (k,)."""

    number: IntArray
    element: npt.NDArray[np.int8]
    atoms: FloatArray
    sds: FloatArray


def formula_tables(
    ingest: pa.Table, element: Labels, value: FloatArray, sigma: FloatArray, settings: FormulaSettings
) -> dict[str, pa.Table]:
    """`convert.formula` (one row per whole analysis) and `convert.cations` (one per analysis and element).

    value, sigma: element ppm of every row of `ingest`, before any internal standard.
    """
    whole = _whole_analyses(ingest, element, value, sigma)
    phase = labels(ingest.select(["phase"]).take(pa.array(whole.rows)), "phase")
    oxygens, ideal = _bases(phase, settings)
    columns = {name: np.full(len(whole.rows), np.nan) for name in _number_columns()}
    columns["total_wt"], columns["total_sd_wt"], columns["oxygens"] = whole.total, whole.total_sd, oxygens
    # Some spots at a time, for a formula takes a dozen arrays of the size of its analyses.
    parts = list(portions(len(whole.rows), SPOTS_AT_ONCE))
    cations = side_by_side(partial(_cations, columns, whole, oxygens, ideal), parts)
    _components(columns, whole, phase)
    head = {name: ingest.column(name).take(pa.array(whole.rows)) for name in KEYS}
    elements = whole.elements
    del whole
    return {
        "convert.formula": build(CONVERT_FORMULA, {**head, **columns}),
        "convert.cations": _cation_table(head, elements, cations),
    }


def _cations(
    columns: dict[str, FloatArray], whole: Whole, oxygens: FloatArray, ideal: FloatArray, part: slice
) -> Cations:
    """The atoms per formula of some spots, whose sums and ferric iron go into `columns`."""
    atoms, sds = np.full((2, part.stop - part.start, len(whole.elements)), np.nan)
    for basis in np.unique(oxygens[part][np.isfinite(oxygens[part])]):
        own = np.flatnonzero(oxygens[part] == basis)
        rows = part.start + own
        units = atoms_from_ppm(whole.ppm[rows], whole.elements, float(basis), whole.sigma[rows])
        atoms[own], sds[own] = units.atoms, units.sigma
        columns["cation_sum"][rows] = units.cation_sum
        columns["cation_sum_sd"][rows] = units.cation_sum_sigma
        _ferric(columns, rows, units, ideal[rows])
    measured = np.isfinite(atoms)
    element = np.nonzero(measured)[1].astype(np.int8)
    return Cations(measured.sum(axis=1), element, atoms[measured], sds[measured])


def _whole_analyses(ingest: pa.Table, element: Labels, value: FloatArray, sigma: FloatArray) -> Whole:
    spot, first = spot_codes(ingest)
    share = wt_percent_per_ppm(element.texts) if element.texts else np.zeros(0)
    rough = np.zeros(len(first))
    for rows in portions(len(value)):
        parts = np.nan_to_num(share[element.codes[rows]] * value[rows], posinf=0.0, neginf=0.0)
        np.add.at(rough, spot[rows], parts)
    is_whole = rough > WHOLE_ABOVE_WT
    chosen = np.flatnonzero(is_whole)
    place = np.cumsum(is_whole) - 1
    used = np.zeros(len(element.texts), dtype=np.bool_)
    for rows in portions(len(value)):
        used[element.codes[rows][is_whole[spot[rows]] & np.isfinite(value[rows])]] = True
    used &= np.array([text != "O" for text in element.texts], dtype=np.bool_)
    column = np.cumsum(used) - 1
    elements = tuple(compress(element.texts, used))
    shape = (len(chosen), len(elements))
    ppm, sigmas = np.full(shape, np.nan), np.full(shape, np.nan)
    # In reverse, so that of an element measured twice in one spot the first column stands.
    for rows in reversed(list(portions(len(value)))):
        codes, spots = element.codes[rows], spot[rows]
        cells = np.flatnonzero(is_whole[spots] & used[codes] & np.isfinite(value[rows]))[::-1]
        target = place[spots[cells]] * len(elements) + column[codes[cells]]
        ppm.reshape(-1)[target], sigmas.reshape(-1)[target] = value[rows][cells], sigma[rows][cells]
    weights = wt_percent_per_ppm(elements) if elements else np.zeros(0)
    total, total_sd = np.empty((2, len(chosen)))
    for rows in portions(len(chosen), SPOTS_AT_ONCE):
        total[rows] = oxide_total(ppm[rows], elements)
        errors = np.where(np.isnan(ppm[rows]), 0.0, sigmas[rows]) * weights
        total_sd[rows] = np.sqrt(np.sum(errors**2, axis=1))
    return Whole(first[chosen], elements, ppm, sigmas, total, total_sd)


def _bases(phase: Labels, settings: FormulaSettings) -> tuple[FloatArray, FloatArray]:
    """Oxygens per formula, and the ideal cation sum where ferric iron is asked for, spot by spot."""
    facts = all_phases()

    def oxygens(name: str) -> float:
        known = facts[name].oxygens if name in facts else None
        return settings.oxygens.get(name, np.nan if known is None else known)

    def ideal(name: str) -> float:
        known = facts[name].cation_sum if name in facts else None
        wanted = name in settings.ferric and name not in settings.oxygens
        return np.nan if known is None or not wanted else known

    # The last entry is that of a spot without a phase.
    of_name = np.array([[fact(name) for name in phase.texts] + [np.nan] for fact in (oxygens, ideal)])
    both = of_name[:, phase.codes]
    return both[0], both[1]


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


def _components(columns: dict[str, FloatArray], whole: Whole, phase: Labels) -> None:
    """Molar ratios with their standard uncertainty: for s = a_i / sum(a), var = sum((d_ij - s)² u_j²) / sum(a)²."""
    from tieline.chemistry.elements import atomic_weight

    weight = np.array([atomic_weight(name) for name in whole.elements])
    for name, (numerator, parts) in COMPONENTS.items():
        present = [whole.elements.index(part) for part in parts if part in whole.elements]
        if numerator not in whole.elements or len(present) < 2:
            continue
        moles = np.nan_to_num(whole.ppm[:, present]) / weight[present]
        sds = np.nan_to_num(whole.sigma[:, present]) / weight[present]
        total = moles.sum(axis=1)
        safe = np.where(total > 0, total, np.nan)
        own = whole.elements.index(numerator)
        share = moles[:, present.index(own)] / safe
        slope = (np.array(present) == own)[None, :] - share[:, None]
        sd = np.sqrt(np.sum((slope * sds) ** 2, axis=1)) / safe
        fits = _fits(name, phase)
        columns[name], columns[f"{name}_sd"] = np.where(fits, share, np.nan), np.where(fits, sd, np.nan)


def _fits(component: str, phase: Labels) -> BoolArray:
    """Spots of the phases that a component is of."""
    if component in OF_PHASE:
        return phase.is_one_of(OF_PHASE[component])
    if component in PYROXENE_COMPONENTS:
        return phase.is_one_of([name for name in phase.texts if "pyroxene" in name or name == "pigeonite"])
    return np.ones(len(phase.codes), dtype=np.bool_)


def _number_columns() -> tuple[str, ...]:
    return tuple(column.name for column in CONVERT_FORMULA.columns if column.kind == "number")


def _cation_table(
    head: dict[str, pa.ChunkedArray], elements: tuple[str, ...], parts: Sequence[Cations]
) -> pa.Table:
    def column(name: str) -> pa.ChunkedArray:
        return pa.chunked_array(
            [pa.array(getattr(part, name), from_pandas=True) for part in parts], pa.float64()
        )

    if not parts:
        return empty(CONVERT_CATIONS)
    number = np.concatenate([part.number for part in parts])
    spot = np.repeat(np.arange(len(number), dtype=np.int32), number)
    element = np.concatenate([part.element for part in parts])
    return build(
        CONVERT_CATIONS,
        {
            **{name: column.take(pa.array(spot)) for name, column in head.items()},
            "element": pa.DictionaryArray.from_arrays(pa.array(element), pa.array(elements, pa.string())),
            "cations": column("atoms"),
            "cations_sd": column("sds"),
        },
    )
