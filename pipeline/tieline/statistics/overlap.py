"""How much of a neighbouring phase every spot contains: a matched filter along the mixing line.

A spot with mass fraction f of the contaminant g in the host c measures x = c + f·(g − c). The direction is
known, so the weighted projection on it is the most powerful test there is (Neyman & Pearson 1933). What is
not known is the level of the clean spots, the real spread, and harmless common factors; `overlap_scores`
estimates them together.

    scores = overlap_scores(values, sigmas, contaminant_mean, contaminant_variance, is_trace,
                            nuisance="yield-and-growth", z_limit=3.0, p_limit=0.001)

values, sigmas           (G, n, p) NaN = not measured; groups padded to n spots; sigma: one sd from counting
contaminant_mean         (G, p)    NaN = not known: the element is then not used
contaminant_variance     (G, p)    of one local composition: real spread plus error of the mean
is_trace                 (p,)      bool; classes with spreads of their own; harmless directions act on traces
"""

from dataclasses import dataclass, fields

import numpy as np

from tieline.statistics.groups import BoolArray, FloatArray, IntArray
from tieline.statistics.overlap_findings import ORACLE_FACTOR, PER_SPOT, Results, findings
from tieline.statistics.overlap_fit import fit_group_block, mixing_directions
from tieline.statistics.threads import side_by_side

__all__ = ["ORACLE_FACTOR", "OverlapScores", "clean_covariance", "overlap_scores"]

_FEWEST_SPOTS = 3
_CELLS_AT_ONCE = 150_000


@dataclass(frozen=True)
class OverlapScores:
    """What the matched filter says of every spot and group; NaN (or False) where a group could not be scored.

    Per spot (G, n): fraction of the contaminant and its standard deviation; z, the excess over the clean
    level found without this spot; residual_chi2, residual_dof, residual_p of what mixing does not explain;
    overlapped (z above the limit), foreign (residual p below the limit: something else than this
    contaminant), clean (scored, neither).

    Per group and element (G, p): used; level, the clean composition; level_variance, its independent part
    (the full covariance: `clean_covariance`); contrast g − c; spot_variance, the diagonal part of one clean
    spot's covariance; weight_share, the element's part of the information on the fraction.

    Per group (G,): level_fraction_variance, the posterior variance of the clean level in units of fraction;
    detectable_fraction, found in 95 % of cases at one false alarm in 1,000; overdispersion_chi2, _dof and _p
    of all coordinates about their mean (small p: spots contain varying, possibly all some, contaminant);
    n_scored, n_clean.

    Per group and class (G, 2), majors then traces: spread, relative; mswd, scatter left by the directions
    over the stated sigma (far above 1: real spread or sigma understated; far below: overstated), mswd_dof.
    nuisance (G, p, 2), nuisance_amplitude (G, n, 2): the harmless directions and each spot's part of them.
    """

    fraction: FloatArray
    sd_fraction: FloatArray
    z: FloatArray
    residual_chi2: FloatArray
    residual_dof: FloatArray
    residual_p: FloatArray
    overlapped: BoolArray
    foreign: BoolArray
    clean: BoolArray
    used: BoolArray
    level: FloatArray
    level_variance: FloatArray
    contrast: FloatArray
    spot_variance: FloatArray
    weight_share: FloatArray
    level_fraction_variance: FloatArray
    detectable_fraction: FloatArray
    overdispersion_chi2: FloatArray
    overdispersion_dof: FloatArray
    overdispersion_p: FloatArray
    n_scored: IntArray
    n_clean: IntArray
    spread: FloatArray
    mswd: FloatArray
    mswd_dof: FloatArray
    nuisance: FloatArray
    nuisance_amplitude: FloatArray


def overlap_scores(
    values: FloatArray,
    sigmas: FloatArray,
    contaminant_mean: FloatArray,
    contaminant_variance: FloatArray,
    is_trace: BoolArray,
    *,
    nuisance: str = "yield-and-growth",
    z_limit: float = 3.0,
    p_limit: float = 0.001,
) -> OverlapScores:
    """Score every spot for a known contaminant; shapes and results in the module and class descriptions.

    An element takes part in a group when its contaminant is known and at least three spots and half of the
    group have it; a spot when it has two such elements; a group when it has three such spots. A value
    reported only as below its limit L is best passed as L/2 with sigma L/2: left out, it would make the
    clean level that of the spots that show the element because they are contaminated. For crystal in glass
    pass the crystal as contaminant and nuisance="yield", once per candidate.

    Raises ValueError for shapes that do not fit. Own method on classical parts (Neyman & Pearson 1933;
    Paule & Mandel 1982; Henderson 1975). Holds for up to about 80 % contaminated spots of differing
    fraction; when all are contaminated no test finds the clean level, and `overlap_bound` is what remains.
    """
    _check(values, sigmas, contaminant_mean, contaminant_variance, is_trace)
    if nuisance not in ("yield-and-growth", "yield"):
        raise ValueError(f"nuisance is {nuisance!r}; expected 'yield-and-growth' or 'yield'")
    groups, spots, elements = values.shape
    result = _empty_scores(groups, spots, elements)
    occupied: BoolArray = np.any(np.isfinite(values), axis=2)
    last = np.where(occupied.any(axis=1), spots - np.argmax(occupied[:, ::-1], axis=1), 0)
    order = np.argsort(last, kind="stable")
    step = max(1, _CELLS_AT_ONCE // max(1, spots * elements))
    blocks = [order[start : start + step] for start in range(0, groups, step)]
    blocks = [rows for rows in blocks if last[rows].max(initial=0) >= _FEWEST_SPOTS]

    def score(rows: IntArray) -> Results:
        width = int(last[rows].max())
        state = fit_group_block(
            values[rows, :width],
            sigmas[rows, :width],
            contaminant_mean[rows],
            np.nan_to_num(contaminant_variance[rows]),
            is_trace,
            nuisance,
        )
        return findings(state, *mixing_directions(state, is_trace, nuisance), z_limit, p_limit)

    for rows, part in zip(blocks, side_by_side(score, blocks), strict=True):
        for name, value in part.items():
            target = getattr(result, name)
            if name in PER_SPOT:
                target[rows, : value.shape[1]] = value
            else:
                target[rows] = value
    return result


def _check(
    values: FloatArray,
    sigmas: FloatArray,
    contaminant_mean: FloatArray,
    contaminant_variance: FloatArray,
    is_trace: BoolArray,
) -> None:
    groups, _, elements = values.shape
    per_group = (groups, elements)
    for name, given, expected in (
        ("sigmas", sigmas.shape, values.shape),
        ("contaminant_mean", contaminant_mean.shape, per_group),
        ("contaminant_variance", contaminant_variance.shape, per_group),
        ("is_trace", is_trace.shape, (elements,)),
    ):
        if given != expected:
            raise ValueError(f"{name} has shape {given}; expected {expected}")


def clean_covariance(scores: OverlapScores) -> FloatArray:
    """Covariance (G, p, p) of the clean level: independent errors, place on the mixing line, common factors.

    The common factors enter with the variance of their observed amplitudes divided by the number of clean
    spots.
    """
    independent = scores.level_variance[:, :, None] * np.eye(scores.level.shape[1])
    along = (
        scores.level_fraction_variance[:, None, None]
        * scores.contrast[:, :, None]
        * scores.contrast[:, None, :]
    )
    weight = scores.clean[..., None] * 1.0
    count = np.maximum(weight.sum(axis=1), 2.0)
    amplitude = np.where(scores.clean[..., None], np.nan_to_num(scores.nuisance_amplitude), 0.0)
    mean = amplitude.sum(axis=1) / count
    variance = np.sum(weight * (amplitude - mean[:, None, :]) ** 2, axis=1) / ((count - 1.0) * count)
    common = np.einsum("gpi,gi,gqi->gpq", scores.nuisance, variance, scores.nuisance)
    return np.asarray(independent + along + common)


def _empty_scores(groups: int, spots: int, elements: int) -> OverlapScores:
    per_class = ["spread", "mswd", "mswd_dof"]
    per_element = ["used", "level", "level_variance", "contrast", "spot_variance", "weight_share"]
    shapes: dict[str, tuple[int, ...]] = dict.fromkeys((f.name for f in fields(OverlapScores)), (groups,))
    shapes |= dict.fromkeys(PER_SPOT, (groups, spots))
    shapes |= dict.fromkeys(per_class, (groups, 2))
    shapes |= dict.fromkeys(per_element, (groups, elements))
    shapes |= {"nuisance": (groups, elements, 2), "nuisance_amplitude": (groups, spots, 2)}
    masks = ("overlapped", "foreign", "clean", "used")
    made = {name: np.full(shape, False if name in masks else np.nan) for name, shape in shapes.items()}
    made |= {name: np.zeros(groups, dtype=np.int64) for name in ("n_scored", "n_clean")}
    return OverlapScores(**made)
