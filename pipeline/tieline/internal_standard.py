"""Rescaling of a technique's values to the true internal-standard concentration of each phase.

A laser concentration is proportional to the internal-standard value assumed when the table was made
(Longerich et al. 1996, J. Anal. At. Spectrom. 11:899, from memory), so the factor actual/assumed is exact;
its uncertainty is that of the actual value, one variable per phase and experiment. Where the actual value is
a mean of another technique, that technique's calibration error comes with it: `Standard.source` names whose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.arrays import BoolArray, FloatArray, Groups, IntArray, Labels, group_rows, labels, spot_codes
from tieline.chemistry.header_words import PPM_PER_UNIT
from tieline.chemistry.oxides import Oxide, parse_oxide
from tieline.errors import InputError, Problem
from tieline.results import Remark
from tieline.settings.chemistry import InternalStandard
from tieline.statistics.means import phase_means


@dataclass(frozen=True)
class Standard:
    """The internal standard of one experiment, phase and technique.

    `relative_sd` is the relative standard uncertainty of the actual value, NaN where unknown; `dof` its degrees of
    freedom, infinite for a given value; `source` technique, batch and analyte of the mean it comes from.
    """

    experiment: str | None
    phase: str | None
    technique: str
    analyte: str
    actual_ppm: float
    relative_sd: float
    dof: float
    source: tuple[str | None, str | None, str | None]


@dataclass(frozen=True)
class Rescaling:
    """The factor of every row (1 where none applies), the rows it applies to, and the standards behind it."""

    factor: FloatArray
    applied: BoolArray
    standards: tuple[Standard, ...] = ()
    remarks: tuple[Remark, ...] = ()

    def combined(self, other: Rescaling) -> Rescaling:
        """Both, for standards that do not apply to the same rows."""
        return Rescaling(
            np.where(other.applied, other.factor, self.factor),
            self.applied | other.applied,
            (*self.standards, *other.standards),
            (*self.remarks, *other.remarks),
        )


@dataclass(frozen=True)
class Actual:
    """Actual concentrations of every group in ppm, shape (groups,), with what is known of them."""

    value: FloatArray
    sd: FloatArray
    dof: FloatArray
    source: tuple[tuple[str | None, str | None, str | None], ...]


NOWHERE = (None, None, None)


def internal_standards(
    ingest: pa.Table,
    element: Labels,
    concentrations: tuple[FloatArray, FloatArray],
    standards: Sequence[InternalStandard],
) -> Rescaling:
    """Factor actual/assumed of every row, for all internal standards together.

    concentrations: element ppm and sigma of every row of `ingest`. Several standards may serve one technique,
    each its own phases. Raises InputError listing every phase of every experiment without an assumed or,
    unless the settings leave such values as assumed, an actual concentration.
    """
    # One number that stands for all rows, for mostly there is nothing to rescale.
    ones, none = np.broadcast_to(1.0, ingest.num_rows), np.broadcast_to(np.False_, ingest.num_rows)
    combined = Rescaling(ones, none)
    problems: list[Problem] = []
    for number, standard in enumerate(standards):
        others = [other for place, other in enumerate(standards) if place != number]
        try:
            rows = _own_rows(ingest, standard, others)
            combined = combined.combined(_rescaling(ingest, element, concentrations, standard, rows))
        except InputError as error:
            problems += error.problems
    if problems:
        raise InputError(dict.fromkeys(problems))
    return combined


def _own_rows(ingest: pa.Table, standard: InternalStandard, others: Sequence[InternalStandard]) -> BoolArray:
    """The rows a standard serves: its technique's unknowns, less the phases that another one names."""
    technique, material, phase = (labels(ingest, name) for name in ("technique", "material", "phase"))
    rows: BoolArray = technique.is_one_of((standard.technique,)) & (material.codes < 0)
    if not rows.any():
        raise InputError(
            Problem(
                f"no table has the technique {standard.technique!r}.",
                column="convert.internal_standard.technique",
                remedy=f"Techniques found: {', '.join(technique.texts)}.",
            )
        )
    rivals = [other for other in others if other.technique == standard.technique]
    if not rivals:
        return rows
    named = {name for other in rivals for name in other.assumed}
    twice = sorted(set(standard.assumed) & named)
    if twice or any("*" not in one.assumed and not one.assumed for one in (standard, *rivals)):
        what = f"{', '.join(twice)} twice" if twice else "no phase"
        raise InputError(
            Problem(
                f"the internal standards of {standard.technique} name {what} in assumed.",
                column="convert.internal_standard",
                remedy="With several standards for one technique, each names its own phases.",
            )
        )
    return rows & (
        phase.is_one_of(tuple(standard.assumed))
        if "*" not in standard.assumed
        else ~phase.is_one_of(tuple(named))
    )


def _rescaling(
    ingest: pa.Table,
    element: Labels,
    concentrations: tuple[FloatArray, FloatArray],
    standard: InternalStandard,
    rows: BoolArray,
) -> Rescaling:
    oxide = _parsed(standard)
    groups = group_rows([labels(ingest, "experiment"), labels(ingest, "phase")], rows)
    own = element.is_one_of((oxide.element,)) & np.isfinite(concentrations[0])
    assumed = _assumed(ingest, groups, own & rows, concentrations[0], standard, oxide.element_fraction)
    if standard.actual == "probe-mean":
        actual = _measured_actual(ingest, groups, own, concentrations, standard)
    else:
        actual = _given_actual(groups, standard, oxide.element_fraction)
    code = groups.code
    _raise_missing(groups, _any_missing(assumed, code, groups.count), actual.value, standard)
    left = np.append(np.isnan(actual.value), True)[code]
    with np.errstate(divide="ignore", invalid="ignore"):
        factor = np.where(left, 1.0, np.append(actual.value, np.nan)[code] / assumed)
    found = np.isfinite(actual.value)
    name = f"{standard.element}, {standard.technique} values left as assumed"
    remarks = [
        Remark(f"{key[1]} of {key[0]}: no actual {name}")
        for key, is_found in zip(groups.keys, found, strict=True)
        if not is_found
    ]
    standards = [
        Standard(
            experiment=groups.keys[group][0],
            phase=groups.keys[group][1],
            technique=standard.technique,
            analyte=standard.element,
            actual_ppm=float(actual.value[group]),
            relative_sd=float(actual.sd[group] / actual.value[group]),
            dof=float(actual.dof[group]),
            source=actual.source[group],
        )
        for group in np.flatnonzero(found)
    ]
    return Rescaling(factor, rows & ~left, tuple(standards), tuple(remarks))


def _parsed(standard: InternalStandard) -> Oxide:
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
    """Assumed element concentration behind every row, ppm; NaN where it is not known."""
    if standard.assumed_from == "table":
        # The table holds, spot by spot, the value it was made with.
        spot, first = spot_codes(ingest)
        of_spot = np.full(len(first), np.nan)
        of_spot[spot[own]] = value_ppm[own]
        return np.where(groups.code >= 0, of_spot[spot], np.nan)
    everywhere = standard.assumed.get("*", np.nan)
    values = [standard.assumed.get(str(phase), everywhere) for phase in groups.key(1)]
    scale = PPM_PER_UNIT[standard.unit] * fraction
    per_row: FloatArray = np.append(np.array(values, dtype=np.float64) * scale, np.nan)[groups.code]
    return per_row


def _any_missing(assumed: FloatArray, code: IntArray, n_groups: int) -> BoolArray:
    missing = np.zeros(n_groups, dtype=np.bool_)
    missing[code[(code >= 0) & ~(assumed > 0)]] = True
    return missing


def _given_actual(groups: Groups, standard: InternalStandard, fraction: float) -> Actual:
    scale = PPM_PER_UNIT[standard.unit] * fraction
    by_phase = {} if isinstance(standard.actual, str) else standard.actual
    given = [by_phase.get(str(phase)) for phase in groups.key(1)]
    value = np.array([np.nan if item is None else item.value for item in given])
    sd = np.array([np.nan if item is None else item.sd for item in given])
    return Actual(value * scale, sd * scale, np.full(groups.count, np.inf), (NOWHERE,) * groups.count)


def _measured_actual(
    ingest: pa.Table,
    groups: Groups,
    own: BoolArray,
    concentrations: tuple[FloatArray, FloatArray],
    standard: InternalStandard,
) -> Actual:
    """Robust mean of the phase's spots by the source technique, in the batch that has most of them."""
    names = ("experiment", "phase", "technique", "batch", "analyte")
    rows = own & labels(ingest, "technique").is_one_of((standard.source_technique,))
    source = group_rows([labels(ingest, name) for name in names], rows)
    known = {key: code for code, key in enumerate(groups.keys)}
    target = np.array([known.get(key[:2], -1) for key in source.keys], dtype=np.int64)
    size = np.bincount(source.code[rows], minlength=source.count)
    best = np.full(groups.count, -1, dtype=np.int64)
    # By rising size, and by name among equals, so that the last written is the largest.
    for code in sorted(range(source.count), key=lambda c: (size[c], source.keys[c][2:])):
        if target[code] >= 0:
            best[target[code]] = code
    # Screening comes later in the chain, so the mean must itself withstand a mislabelled or contaminated spot.
    value_ppm, sigma_ppm = concentrations
    means = phase_means(value_ppm[rows], sigma_ppm[rows], source.code[rows], source.count, estimator="huber")
    # Few spots may by luck scatter less than their counting allows.
    variance = np.fmax(means.variance, means.counting_variance)
    dof = np.where(means.n > 1, means.dof, np.inf)
    keys = [(key[2], key[3], key[4]) for key in source.keys]

    def of_best(array: FloatArray) -> FloatArray:
        chosen: FloatArray = np.append(array, np.nan)[best]
        return chosen

    sources = tuple(keys[code] if code >= 0 else NOWHERE for code in best)
    return Actual(of_best(means.mean), of_best(np.sqrt(variance)), of_best(dof), sources)


def _raise_missing(
    groups: Groups, no_assumed: BoolArray, actual: FloatArray, standard: InternalStandard
) -> None:
    problems = []
    for key, is_missing, is_actual in zip(groups.keys, no_assumed, np.isfinite(actual), strict=True):
        place = f"{key[1]} of {key[0]}"
        if is_missing:
            remedy = (
                f'Add {key[1]} = ... or "*" = ... to convert.internal_standard.assumed.'
                if standard.assumed_from == "settings"
                else f"The {standard.technique} table needs a {standard.element} column with the assumed values."
            )
            problems.append(
                Problem(f"no assumed {standard.element} for the internal standard.", place, remedy=remedy)
            )
        elif not is_actual and standard.missing == "stop":
            remedy = (
                f"Measure it by {standard.source_technique}, give actual = {{ {key[1]} = {{ value = ... }} }}, "
                'or set missing = "as-assumed".'
            )
            problems.append(
                Problem(f"no actual {standard.element} for the internal standard.", place, remedy=remedy)
            )
    if problems:
        raise InputError(problems)
