"""Which phases of an experiment form a pair, and where two techniques disagree on one mean."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pyarrow as pa

from tieline.arrays import (
    BoolArray,
    FloatArray,
    IntArray,
    TextArray,
    group_rows,
    group_table,
    is_labelled,
    labels,
    narrow_labels,
    numbers,
    spot_codes,
)
from tieline.columns import PAIR_TECHNIQUES, PAIRS
from tieline.errors import InputError, Problem, nearest
from tieline.results import Remark
from tieline.settings.results import PairSettings
from tieline.tables import build

MELT = "glass"


def with_parts(convert: pa.Table, settings: PairSettings) -> tuple[pa.Table, dict[str, str]]:
    """`convert` with phases split as the settings ask, and part -> whole phase for every name that results.

    A part is named `olivine (rim)`; a spot without the label keeps its phase. With `separate` the melt stays whole;
    with `local` every phase is split, for its parts to be paired.
    """
    name = settings.local if settings.local != "none" else settings.separate
    if name == "none":
        return convert, {text: text for text in narrow_labels(convert, "phase").texts}
    phase = labels(convert, "phase")
    part = labels(convert, name)
    whole = (
        phase.is_one_of((MELT,)) if settings.local == "none" else np.zeros(convert.num_rows, dtype=np.bool_)
    )
    n_parts = len(part.texts) + 1
    code = phase.codes * n_parts + np.where(whole, -1, part.codes) + 1
    texts = [_part_name(text, suffix) for text in phase.texts for suffix in (None, *part.texts)]
    wholes = {_part_name(text, suffix): text for text in phase.texts for suffix in (None, *part.texts)}
    split = pa.DictionaryArray.from_arrays(pa.array(code.astype(np.int32)), pa.array(texts, pa.string()))
    column = convert.schema.get_field_index("phase")
    return convert.set_column(column, convert.schema.field(column).with_type(split.type), split), wholes


def _part_name(phase: str, part: str | None) -> str:
    return phase if part is None else f"{phase} ({part})"


def phase_pairs(
    convert: pa.Table, used: BoolArray, settings: PairSettings, wholes: Mapping[str, str]
) -> tuple[pa.Table, list[Remark]]:
    """One row per experiment and wanted pair: the configured ones, or every other phase over glass.

    wholes: part -> whole phase, from `with_parts`.
    Raises InputError when a configured pair names a phase that no table has.
    """
    spot, first = spot_codes(convert)
    # A spot counts once, however many of its values are used.
    has_used = np.zeros(len(first), dtype=np.bool_)
    has_used[spot[used]] = True
    spots = convert.select(["experiment", "phase"]).take(pa.array(first))
    groups = group_table(spots, ("experiment", "phase"), is_labelled(spots, "experiment"))
    spots_used = np.bincount(groups.code[has_used], minlength=groups.count)
    n_used = dict(zip(groups.keys, spots_used.tolist(), strict=True))
    phases = sorted({str(key[1]) for key in groups.keys})
    wanted = _wanted(phases, settings, wholes)
    rows = []
    for name in sorted({str(key[0]) for key in groups.keys}):
        for alpha, beta in wanted:
            n_alpha, n_beta = n_used.get((name, alpha)), n_used.get((name, beta))
            if n_alpha is None and n_beta is None:
                continue
            reason = _reason(alpha, n_alpha) or _reason(beta, n_beta)
            rows.append((name, alpha, beta, n_alpha or 0, n_beta or 0, reason is None, reason))
    columns = list(zip(*rows, strict=True)) if rows else [()] * 7
    names = ("experiment", "alpha", "beta", "n_alpha", "n_beta", "formed", "reason")
    table = build(PAIRS, {name: list(column) for name, column in zip(names, columns, strict=True)})
    return table, _not_formed(rows)


def _not_formed(rows: list[tuple[str, str, str, int, int, bool, str | None]]) -> list[Remark]:
    """One remark per pair and reason, naming the experiments."""
    if not rows:
        return [Remark("no pair of phases can be formed: no experiment has any phase beside glass")]
    experiments: dict[tuple[str, str], list[str]] = {}
    for name, alpha, beta, _, _, formed, reason in rows:
        if not formed:
            experiments.setdefault((f"{alpha}/{beta}", str(reason)), []).append(name)
    return [
        Remark(f"not formed in {', '.join(names)}: {reason}", pair)
        for (pair, reason), names in experiments.items()
    ]


def _wanted(phases: list[str], settings: PairSettings, wholes: Mapping[str, str]) -> list[tuple[str, str]]:
    if settings.pairs is None:
        alphas = dict.fromkeys(wholes[phase] for phase in phases if wholes[phase] != MELT)
        return _with_their_parts([(alpha, MELT) for alpha in alphas], phases, settings, wholes)
    known = {*phases, *(wholes[phase] for phase in phases)}
    unknown = [(pair, name) for pair in settings.pairs for name in pair if name not in known]
    if unknown:
        raise InputError(
            [
                Problem(
                    f'no table has the phase "{name}".',
                    column="pair.pairs",
                    remedy=nearest(name, phases) or f"Phases found: {', '.join(phases)}.",
                )
                for _, name in unknown
            ]
        )
    return _with_their_parts(list(settings.pairs), phases, settings, wholes)


def _with_their_parts(
    pairs: list[tuple[str, str]], phases: list[str], settings: PairSettings, wholes: Mapping[str, str]
) -> list[tuple[str, str]]:
    """The pairs with every part of their phases; parts of a local pair have the same name."""
    if settings.separate == "none" and settings.local == "none":
        return pairs

    def parts(name: str) -> list[str]:
        return [phase for phase in phases if name in (phase, wholes[phase])]

    every = [(alpha, beta) for one, other in pairs for alpha in parts(one) for beta in parts(other)]
    if settings.local == "none":
        return every
    return [
        (alpha, beta)
        for alpha, beta in every
        if alpha.removeprefix(wholes[alpha]) == beta.removeprefix(wholes[beta])
    ]


def _reason(phase: str, n_used: int | None) -> str | None:
    if n_used is None:
        return f"the experiment has no {phase} spots"
    return f"every {phase} spot was left out" if n_used == 0 else None


def technique_differences(
    pair: pa.Table, calibrate: pa.Table, settings: PairSettings
) -> tuple[pa.Table, list[Remark]]:
    """Compares the means of one element, phase and experiment from two techniques, batches or analytes.

    The deviation is the difference over its standard uncertainty: both standard errors, and both batches'
    calibration where it is known and not shared.
    """
    groups = group_rows([labels(pair, name) for name in ("experiment", "phase", "element")])
    mean, se = numbers(pair, "mean_ppm"), numbers(pair, "se_ppm")
    usable = np.flatnonzero(np.isfinite(mean) & (mean > 0))
    usable = usable[np.argsort(groups.code[usable], kind="stable")]
    code = groups.code[usable]
    is_first = np.ones(len(code), dtype=np.bool_)
    is_first[1:] = code[1:] != code[:-1]
    # The first mean of each group stands against every other of it.
    two = usable[~is_first]
    one = usable[is_first][np.cumsum(is_first) - 1][~is_first]
    shared = _relative_calibration(pair, calibrate)
    batch = labels(pair, "batch").codes
    same_batch = batch[one] == batch[two]
    calibration = np.where(same_batch, 0.0, np.hypot(shared[one] * mean[one], shared[two] * mean[two]))
    total = np.sqrt(np.nan_to_num(se[one]) ** 2 + np.nan_to_num(se[two]) ** 2 + calibration**2)
    deviation = (mean[two] - mean[one]) / np.where(total > 0, total, np.nan)
    differ = np.abs(np.nan_to_num(deviation)) > settings.difference_sigmas
    table = build(
        PAIR_TECHNIQUES,
        {
            "experiment": groups.labels[0].take(groups.code[one]),
            "phase": groups.labels[1].take(groups.code[one]),
            "element": groups.labels[2].take(groups.code[one]),
            "first": _described(pair, one),
            "second": _described(pair, two),
            "first_ppm": mean[one],
            "second_ppm": mean[two],
            "ratio": mean[two] / mean[one],
            "deviation": deviation,
            "differ": differ,
        },
    )
    remarks = []
    if differ.any():
        n = int(differ.sum())
        remarks.append(
            Remark(f"{n} of {len(differ)} phase means measured twice differ by more than "
                   f"{settings.difference_sigmas:g} standard uncertainties; see pair.techniques")
        )  # fmt: skip
    return table, remarks


def _relative_calibration(pair: pa.Table, calibrate: pa.Table) -> FloatArray:
    """Relative calibration uncertainty of every mean, matrix included; 0 where unknown."""
    from tieline.correction import calibrate_row

    rows = calibrate_row(pair, calibrate)
    shared = np.append(np.nan_to_num(numbers(calibrate, "relative_sd")), 0.0)[rows]
    matrix = np.append(numbers(calibrate, "matrix_sd"), 0.0)[rows]
    return np.asarray(np.hypot(shared, matrix))


def _texts(pair: pa.Table, name: str, rows: IntArray) -> TextArray:
    texts: TextArray = labels(pair, name).text()[rows]
    return texts


def _described(pair: pa.Table, rows: IntArray) -> list[str]:
    parts = [_texts(pair, name, rows) for name in ("technique", "batch", "analyte")]
    return [", ".join(texts) for texts in zip(*parts, strict=True)]
