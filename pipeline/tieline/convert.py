"""Stage `convert`: every value as element in ppm, one name per element, internal standards rescaled.

Sources of the chemistry stand in `tieline.chemistry`. Several isotopes, oxides or techniques of one
element stay apart here; `pair` forms a mean of each and `partition` chooses.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, Labels, flags, labels, narrow_labels, numbers, spot_codes
from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.chemistry.oxides import parse_oxide, wt_percent_per_ppm
from tieline.columns import CONVERT, CONVERT_STANDARDS, VALUE_KEYS
from tieline.errors import DefectError
from tieline.formula_units import formula_tables
from tieline.internal_standard import Rescaling, internal_standards
from tieline.narrowing import code_type
from tieline.results import Ledger, Remark, StageResult
from tieline.settings.chemistry import ConvertSettings
from tieline.tables import build

# FeO and Fe2O3 columns whose ratio is that of one and the same iron to this precision repeat each other.
SAME_IRON = 2e-3


@dataclass(frozen=True)
class Values:
    """Element concentrations of every row of `ingest`, in ppm, NaN unknown, shape (rows,)."""

    value: FloatArray
    sigma: FloatArray
    limit: FloatArray

    def scaled(self, factor: FloatArray) -> Values:
        return Values(self.value * factor, self.sigma * factor, self.limit * factor)


def convert(ingest: pa.Table, *, settings: ConvertSettings) -> StageResult:
    """Element concentrations in ppm from the table of `ingest`.

    Raises InputError where an internal standard has no actual or assumed value and the settings say stop.
    """
    analyte, element, factor = _analytes(ingest)
    to_ppm = factor[analyte.codes, narrow_labels(ingest, "unit").codes] if ingest.num_rows else np.zeros(0)
    values = Values(*(numbers(ingest, name) * to_ppm for name in ("value", "sigma", "limit")))
    del to_ppm
    element_labels = _element_labels(analyte, element)
    values, summed, remarks = _iron_in_two_columns(ingest, analyte, values)
    values, normalised = _normalised(ingest, element_labels, values, settings)
    formulas = formula_tables(ingest, element_labels, values.value, values.sigma, settings.formula)
    rescaled = internal_standards(
        ingest, element_labels, (values.value, values.sigma), settings.internal_standard
    )
    if rescaled.applied.any():
        values = values.scaled(rescaled.factor)
    columns = {column.name: ingest.column(column.name) for column in VALUE_KEYS}
    table = build(
        CONVERT,
        {
            **columns,
            "element": pa.DictionaryArray.from_arrays(
                pa.array(element_labels.codes), pa.array(element_labels.texts, pa.string())
            ),
            "value_ppm": values.value,
            "sigma_ppm": values.sigma,
            "limit_ppm": values.limit,
            "below_limit": ingest.column("below_limit"),
        },
    )
    ledger = _ledger(ingest, values, summed, rescaled)
    return StageResult(
        {"convert": table, "convert.standards": _standard_table(rescaled), **formulas},
        ledger,
        (*remarks, *normalised, *rescaled.remarks),
    )


def _analytes(ingest: pa.Table) -> tuple[Labels, list[str], FloatArray]:
    """The analytes in use, their elements, and the factor to ppm per analyte and unit."""
    analyte, unit = narrow_labels(ingest, "analyte"), narrow_labels(ingest, "unit")
    elements, fractions = [], []
    for name in analyte.texts:
        try:
            parsed = parse_oxide(_formula(name))
        except ValueError as error:  # ingest recognises every analyte name before it writes one
            raise DefectError(f"ingest wrote an analyte that has no element: {error}") from error
        elements.append(parsed.element)
        fractions.append(parsed.element_fraction)
    factor = np.outer(fractions, [PPM_PER_UNIT[text] for text in unit.texts])
    return analyte, elements, factor


def _formula(analyte: str) -> str:
    """`FeOT` -> `FeO`, `Ni60` -> `Ni`: the formula behind an analyte's name."""
    name = analyte.removesuffix("T") if analyte in ("FeOT", "Fe2O3T") else analyte
    return name.rstrip("0123456789") if "O" not in name[1:] else name


def _element_labels(analyte: Labels, elements: list[str]) -> Labels:
    texts = sorted(set(elements))
    position = np.array(
        [texts.index(element) for element in elements], dtype=code_type(len(texts)).to_pandas_dtype()
    )
    return Labels(position[analyte.codes] if len(analyte.codes) else analyte.codes, tuple(texts))


def _iron_in_two_columns(
    ingest: pa.Table, analyte: Labels, values: Values
) -> tuple[Values, BoolArray, list[Remark]]:
    """Adds Fe2O3 to FeO where a spot has both as parts of its iron; the Fe2O3 row then has no value of its own.

    Where the two are the same iron written twice, or one is declared total iron, nothing is added.
    """
    ferrous, ferric = analyte.is_one_of(("FeO",)), analyte.is_one_of(("Fe2O3",))
    nothing = np.zeros(len(values.value), dtype=np.bool_)
    if not ferrous.any() or not ferric.any():
        return values, nothing, []
    spot, _ = spot_codes(ingest)
    row_of_ferrous = np.full(spot.max(initial=-1) + 1, -1)
    row_of_ferrous[spot[ferrous]] = np.flatnonzero(ferrous)
    ferric_rows = np.flatnonzero(ferric & np.isfinite(values.value))
    partner = row_of_ferrous[spot[ferric_rows]]
    both = (partner >= 0) & np.isfinite(values.value[partner])
    added, total = ferric_rows[both], partner[both]
    if not len(total):
        return values, nothing, []
    ratio = values.value[added] / np.where(values.value[total] != 0, values.value[total], np.nan)
    if np.nanmedian(np.abs(ratio - 1.0)) < SAME_IRON:
        remark = Remark("FeO and Fe2O3 hold the same iron twice; they are kept apart and one is used")
        return values, nothing, [remark]
    value, sigma, limit = values.value.copy(), values.sigma.copy(), values.limit.copy()
    value[total] += value[added]
    sigma[total] = np.hypot(sigma[total], np.nan_to_num(sigma[added]))
    value[added] = np.nan
    nothing[added] = True
    # Of the other spots that have Fe2O3, the ferrous part is unknown or only a limit, and so is the whole.
    alone = ferric_rows[~both]
    unknown = np.concatenate([alone, partner[~both][partner[~both] >= 0]])
    value[unknown] = limit[unknown] = np.nan
    remarks = [Remark(f"FeO and Fe2O3 of {len(total)} spots are added up to total iron in the FeO rows")]
    if len(alone):
        remarks.append(
            Remark(
                f"the iron of {len(alone)} spots is unknown: they have Fe2O3 but no measured FeO beside it"
            )
        )
    return Values(value, sigma, limit), nothing, remarks


def _normalised(
    ingest: pa.Table, element: Labels, values: Values, settings: ConvertSettings
) -> tuple[Values, list[Remark]]:
    """Every spot of the named techniques scaled to a stated oxide total.

    The variance of x/S follows from S = sum(k x) with independent x:
    u²(x/S) = [u²(x) (1 - 2 k x/S) + (x/S)² u²(S)] / S².
    """
    if not settings.normalise:
        return values, []
    technique, remarks = labels(ingest, "technique"), []
    spot, first = spot_codes(ingest)
    share = wt_percent_per_ppm(element.texts)[element.codes] if len(element.codes) else np.zeros(0)
    for name, target in sorted(settings.normalise.items()):
        rows = technique.is_one_of((name,))
        parts = np.where(rows & np.isfinite(values.value), share * values.value, 0.0)
        total = np.bincount(spot, weights=parts, minlength=len(first))[spot]
        squares = np.where(rows, (share * np.nan_to_num(values.sigma)) ** 2, 0.0)
        variance = np.bincount(spot, weights=squares, minlength=len(first))[spot]
        usable = rows & (total > 0)
        safe = np.where(usable, total, 1.0)
        ratio = values.value / safe
        own = values.sigma**2 * (1.0 - 2.0 * share * ratio)
        # Never negative but for rounding, where one oxide is the whole total.
        sigma = target / safe * np.sqrt(np.maximum(own + ratio**2 * variance, 0.0))
        values = Values(
            np.where(usable, target * ratio, values.value),
            np.where(usable, sigma, values.sigma),
            np.where(usable, values.limit * target / safe, values.limit),
        )
        n_spots = len(np.unique(spot[usable]))
        remarks.append(Remark(f"{n_spots} {name} spots are normalised to an oxide total of {target:g} wt%"))
    return values, remarks


def _standard_table(rescaled: Rescaling) -> pa.Table:
    rows = rescaled.standards
    columns: dict[str, object] = {
        name: [getattr(row, name) for row in rows]
        for name in ("experiment", "phase", "technique", "analyte", "actual_ppm", "relative_sd")
    }
    columns["dof"] = np.array([row.dof if np.isfinite(row.dof) else np.nan for row in rows], dtype=np.float64)
    for place, name in enumerate(("source_technique", "source_batch", "source_analyte")):
        columns[name] = [row.source[place] for row in rows]
    return build(CONVERT_STANDARDS, columns)


def _ledger(ingest: pa.Table, values: Values, summed: BoolArray, rescaled: Rescaling) -> Ledger:
    has_value = np.isfinite(values.value)
    only_limit = ~has_value & flags(ingest, "below_limit")
    outcomes = {
        "values": int((has_value & ~rescaled.applied).sum()),
        "values rescaled to the internal standard": int((has_value & rescaled.applied).sum()),
        "only a limit": int(only_limit.sum()),
        "added to FeO": int(summed.sum()),
        "not measured": int((~has_value & ~only_limit & ~summed).sum()),
    }
    return Ledger("values", ingest.num_rows, outcomes)
