"""Rescaling of a technique's values to the true internal-standard concentration of each phase.

A laser concentration is proportional to the internal-standard value assumed when the table was made
(Longerich et al. 1996, J. Anal. At. Spectrom. 11:899, from memory), so the factor actual/assumed is exact;
its uncertainty is that of the actual value, one variable per phase and experiment.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, Groups, Labels, group_rows, labels
from tieline.chemistry.oxides import parse_oxide
from tieline.errors import InputError, Problem
from tieline.results import Remark
from tieline.settings.chemistry import InternalStandard
from tieline.statistics.means import phase_means

PPM_PER_UNIT = {"wt%": 1e4, "ppm": 1.0}


@dataclass(frozen=True)
class Rescaling:
    """Factor (1 where none applies), its relative uncertainty (NaN where none), and the rows it applies to."""

    factor: FloatArray
    relative_sd: FloatArray
    applied: BoolArray
    remarks: tuple[Remark, ...] = ()

    @staticmethod
    def none(size: int) -> Rescaling:
        return Rescaling(np.ones(size), np.full(size, np.nan), np.zeros(size, dtype=np.bool_))

    def combined(self, other: Rescaling) -> Rescaling:
        """Both, for techniques that do not overlap."""
        return Rescaling(
            np.where(other.applied, other.factor, self.factor),
            np.where(other.applied, other.relative_sd, self.relative_sd),
            self.applied | other.applied,
            (*self.remarks, *other.remarks),
        )


def rescaling(
    ingest: pa.Table,
    element: Labels,
    value_ppm: npt.NDArray[np.float64],
    sigma_ppm: npt.NDArray[np.float64],
    standard: InternalStandard,
) -> Rescaling:
    """Factor actual/assumed of every row of one technique, unknown spots only.

    Raises InputError listing every phase of every experiment without an assumed or, unless the settings
    leave such values as assumed, an actual concentration.
    """
    technique, material = labels(ingest, "technique"), labels(ingest, "material")
    rows = technique.is_one_of((standard.technique,)) & (material.codes < 0)
    if not rows.any():
        raise InputError(
            Problem(
                f"no table has the technique {standard.technique!r}.",
                column="convert.internal_standard.technique",
                remedy=f"Techniques found: {', '.join(technique.texts)}.",
            )
        )
    source = _parsed(standard)
    groups = group_rows([labels(ingest, "experiment"), labels(ingest, "phase")], rows)
    own = element.is_one_of((source.element,)) & np.isfinite(value_ppm)
    assumed = _assumed(ingest, groups, own & rows, value_ppm, standard, source.element_fraction)
    actual, actual_sd = _actual(
        ingest, groups, own, (value_ppm, sigma_ppm), standard, source.element_fraction
    )
    _raise_missing(groups, assumed, actual, standard)
    left = np.isnan(actual)
    factor = np.where(left, 1.0, actual / assumed)
    relative_sd = np.where(left, np.nan, actual_sd / actual)
    remarks = [
        Remark(
            f"{key[1]} of {key[0]}: no actual {standard.element}, {standard.technique} values left as assumed"
        )
        for key, is_left in zip(groups.keys, left, strict=True)
        if is_left
    ]
    return Rescaling(
        np.append(factor, 1.0)[groups.code],
        np.append(relative_sd, np.nan)[groups.code],
        rows & ~np.append(left, True)[groups.code],
        tuple(remarks),
    )


def _parsed(standard: InternalStandard):  # type: ignore[no-untyped-def]
    try:
        return parse_oxide(standard.element)
    except ValueError as error:
        raise InputError(
            Problem(
                f"{error}.",
                column="convert.internal_standard.element",
                remedy='Write for example "CaO" or "Si".',
            )
        ) from None


def _assumed(
    ingest: pa.Table,
    groups: Groups,
    own: BoolArray,
    value_ppm: FloatArray,
    standard: InternalStandard,
    fraction: float,
) -> FloatArray:
    """Assumed element concentration of every group, ppm."""
    if standard.assumed_from == "table":
        chosen = own & (groups.code >= 0)
        total = np.bincount(groups.code[chosen], weights=value_ppm[chosen], minlength=groups.count)
        count = np.bincount(groups.code[chosen], minlength=groups.count)
        return np.where(count > 0, total / np.maximum(count, 1), np.nan)
    everywhere = standard.assumed.get("*", np.nan)
    values = [standard.assumed.get(str(phase), everywhere) for phase in groups.key(1)]
    return np.array(values, dtype=np.float64) * PPM_PER_UNIT[standard.unit] * fraction


def _actual(
    ingest: pa.Table,
    groups: Groups,
    own: BoolArray,
    concentrations: tuple[FloatArray, FloatArray],
    standard: InternalStandard,
    fraction: float,
) -> tuple[FloatArray, FloatArray]:
    """Actual element concentration of every group and its standard uncertainty, ppm."""
    if standard.actual != "probe-mean":
        scale = PPM_PER_UNIT[standard.unit] * fraction
        given = [standard.actual.get(str(phase)) for phase in groups.key(1)]
        value = np.array([np.nan if item is None else item.value for item in given])
        sd = np.array([np.nan if item is None else item.sd for item in given])
        return value * scale, sd * scale
    rows = own & labels(ingest, "technique").is_one_of((standard.source_technique,))
    known = {key: code for code, key in enumerate(groups.keys)}
    source = group_rows([labels(ingest, "experiment"), labels(ingest, "phase")], rows)
    target = np.array([known.get(key, -1) for key in source.keys], dtype=np.int64)
    code = np.append(target, -1)[source.code]
    chosen = rows & (code >= 0)
    value_ppm, sigma_ppm = concentrations
    # Screening comes later in the chain, so the mean must itself withstand a mislabelled or contaminated spot.
    means = phase_means(value_ppm[chosen], sigma_ppm[chosen], code[chosen], groups.count, estimator="huber")
    return means.mean, np.sqrt(means.variance)


def _raise_missing(
    groups: Groups, assumed: FloatArray, actual: FloatArray, standard: InternalStandard
) -> None:
    problems = []
    for key, is_assumed, is_actual in zip(
        groups.keys, np.isfinite(assumed), np.isfinite(actual), strict=True
    ):
        place = f"{key[1]} of {key[0]}"
        if not is_assumed:
            remedy = (
                f'Add {key[1]} = ... or "*" = ... to convert.internal_standard.assumed.'
                if standard.assumed_from == "settings"
                else f"The {standard.technique} table needs a {standard.element} column with the assumed values."
            )
            problems.append(
                Problem(f"no assumed {standard.element} for the internal standard.", place, remedy=remedy)
            )
        elif not is_actual and standard.missing == "stop":
            remedy = f'Measure it by {standard.source_technique}, give actual = {{ {key[1]} = {{ value = ... }} }}, or set missing = "as-assumed".'
            problems.append(
                Problem(f"no actual {standard.element} for the internal standard.", place, remedy=remedy)
            )
    if problems:
        raise InputError(problems)
