"""Formula units of the whole analyses: cations, their sums, ferric iron, and the usual components.

The equations stand in `tieline.chemistry.formula`. A whole analysis is a spot whose oxides add up to more
than `WHOLE_ABOVE_WT`; trace tables have no formula.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
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
class WholeAnalyses:
    """Where the whole analyses are among the rows of `ingest`.

    spot: (n,) number of each; rows: (n,) its first row; elements: the p elements they have. order: all rows by spot, None
    where they are so already; start: (spots + 1,) place of each spot's first row in that order; column: by code of an element
    its place in `elements`, -1 for none.
    """

    spot: IntArray
    rows: IntArray
    elements: tuple[str, ...]
    order: IntArray | None
    start: IntArray
    column: IntArray


@dataclass(frozen=True)
class Analyses:
    """Some whole analyses: elements, ppm and sigma (k, p), NaN unknown, and the phases (k,)."""

    elements: tuple[str, ...]
    ppm: FloatArray
    sigma: FloatArray
    phase: Labels


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
    whole = _whole_analyses(ingest, element, value)
    head = {name: ingest.column(name).take(pa.array(whole.rows)) for name in KEYS}
    phase = labels(pa.table({"phase": head["phase"]}), "phase")
    columns = {name: np.full(len(whole.rows), np.nan) for name in _number_columns()}
    columns["oxygens"], ideal = _bases(phase, settings)

    def cations_of(part: slice) -> Cations:
        analyses = _analyses(whole, part, element, value, sigma, phase)
        own = {name: column[part] for name, column in columns.items()}
        _totals(own, analyses)
        _components(own, analyses)
        return _cations(own, analyses, ideal[part])

    # Some spots at a time, for a formula takes a dozen arrays of the size of its analyses.
    cations = side_by_side(cations_of, list(portions(len(whole.rows), SPOTS_AT_ONCE)))
    return {
        "convert.formula": build(CONVERT_FORMULA, {**head, **columns}),
        "convert.cations": _cation_table(head, whole.elements, cations),
    }


def _whole_analyses(ingest: pa.Table, element: Labels, value: FloatArray) -> WholeAnalyses:
    spot, first = spot_codes(ingest)
    share = wt_percent_per_ppm(element.texts) if element.texts else np.zeros(0)
    rough = np.zeros(len(first))
    for rows in portions(len(value)):
        parts = np.nan_to_num(share[element.codes[rows]] * value[rows], posinf=0.0, neginf=0.0)
        np.add.at(rough, spot[rows], parts)
    is_whole = rough > WHOLE_ABOVE_WT
    used = np.zeros(len(element.texts), dtype=np.bool_)
    for rows in portions(len(value)):
        used[element.codes[rows][is_whole[spot[rows]] & np.isfinite(value[rows])]] = True
    used &= np.array([text != "O" for text in element.texts], dtype=np.bool_)
    chosen = np.flatnonzero(is_whole)
    in_order = bool(np.all(spot[1:] >= spot[:-1]))
    return WholeAnalyses(
        chosen,
        first[chosen],
        tuple(compress(element.texts, used)),
        None if in_order else np.argsort(spot, kind="stable"),
        np.concatenate([[0], np.cumsum(np.bincount(spot, minlength=len(first)))]),
        np.where(used, np.cumsum(used) - 1, -1),
    )


def _analyses(
    whole: WholeAnalyses, part: slice, element: Labels, value: FloatArray, sigma: FloatArray, phase: Labels
) -> Analyses:
    """The concentrations of some of the whole analyses, one column per element."""
    spots, first_spot, end = whole.spot[part], whole.spot[part.start], whole.spot[part.stop - 1] + 1
    start = whole.start[first_spot : end + 1]
    place = np.full(end - first_spot, -1)
    place[spots - first_spot] = np.arange(len(spots))
    analysis = np.repeat(place, np.diff(start))
    rows: slice | IntArray = slice(start[0], start[-1])
    if whole.order is not None:
        rows = whole.order[rows]
    column = whole.column[element.codes[rows]]
    # In reverse, so that of an element measured twice in one spot the first column stands.
    cells = np.flatnonzero((analysis >= 0) & (column >= 0) & np.isfinite(value[rows]))[::-1]
    target = analysis[cells] * len(whole.elements) + column[cells]
    ppm, sigmas = np.full((2, len(spots), len(whole.elements)), np.nan)
    ppm.reshape(-1)[target], sigmas.reshape(-1)[target] = value[rows][cells], sigma[rows][cells]
    return Analyses(whole.elements, ppm, sigmas, Labels(phase.codes[part], phase.texts))


def _totals(columns: dict[str, FloatArray], analyses: Analyses) -> None:
    weights = wt_percent_per_ppm(analyses.elements) if analyses.elements else np.zeros(0)
    errors = np.where(np.isnan(analyses.ppm), 0.0, analyses.sigma) * weights
    columns["total_wt"][:] = oxide_total(analyses.ppm, analyses.elements)
    columns["total_sd_wt"][:] = np.sqrt(np.sum(errors**2, axis=1))


def _cations(columns: dict[str, FloatArray], analyses: Analyses, ideal: FloatArray) -> Cations:
    """The atoms per formula, whose sums and ferric iron go into `columns`."""
    atoms, sds = np.full((2, *analyses.ppm.shape), np.nan)
    oxygens = columns["oxygens"]
    for basis in np.unique(oxygens[np.isfinite(oxygens)]):
        own = np.flatnonzero(oxygens == basis)
        units = atoms_from_ppm(analyses.ppm[own], analyses.elements, float(basis), analyses.sigma[own])
        atoms[own], sds[own] = units.atoms, units.sigma
        columns["cation_sum"][own] = units.cation_sum
        columns["cation_sum_sd"][own] = units.cation_sum_sigma
        _ferric(columns, own, units, ideal[own])
    measured = np.isfinite(atoms)
    element = np.nonzero(measured)[1].astype(np.int8)
    return Cations(measured.sum(axis=1), element, atoms[measured], sds[measured])


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


def _components(columns: dict[str, FloatArray], analyses: Analyses) -> None:
    """Molar ratios with their standard uncertainty: for s = a_i / sum(a), var = sum((d_ij - s)² u_j²) / sum(a)²."""
    from tieline.chemistry.elements import atomic_weight

    weight = np.array([atomic_weight(name) for name in analyses.elements])
    for name, (numerator, parts) in COMPONENTS.items():
        present = [analyses.elements.index(part) for part in parts if part in analyses.elements]
        if numerator not in analyses.elements or len(present) < 2:
            continue
        moles = np.nan_to_num(analyses.ppm[:, present]) / weight[present]
        sds = np.nan_to_num(analyses.sigma[:, present]) / weight[present]
        total = moles.sum(axis=1)
        safe = np.where(total > 0, total, np.nan)
        own = analyses.elements.index(numerator)
        share = moles[:, present.index(own)] / safe
        slope = (np.array(present) == own)[None, :] - share[:, None]
        sd = np.sqrt(np.sum((slope * sds) ** 2, axis=1)) / safe
        fits = _fits(name, analyses.phase)
        columns[name][:], columns[f"{name}_sd"][:] = np.where(fits, share, np.nan), np.where(fits, sd, np.nan)


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
