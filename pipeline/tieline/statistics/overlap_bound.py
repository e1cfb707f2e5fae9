"""The largest overlap that the measured partition coefficients allow, and what it leaves of each of them."""

from typing import NamedTuple

import numpy as np
from scipy.special import ndtri, stdtrit

from tieline.statistics.groups import BoolArray, FloatArray
from tieline.statistics.student import student_quantile


class OverlapBound(NamedTuple):
    """fraction (...): upper limit of the mean mass fraction of contaminant in the spots; NaN without data.

    lowest, highest (..., p): interval of the true D when that fraction may be anything from 0 to the limit;
    only_upper_limit (..., p): the limit is at least 30 % of D, so that overlap alone leaves D an upper limit.
    """

    fraction: FloatArray
    lowest: FloatArray
    highest: FloatArray
    only_upper_limit: BoolArray


def overlap_bound(
    apparent: FloatArray,
    standard_error: FloatArray,
    degrees_of_freedom: FloatArray | None = None,
    confidence: float = 0.95,
) -> OverlapBound:
    """Bound the overlap from D_app = (1 − f)·D + f and D >= 0: f cannot exceed D_app of any element.

    F = min over elements of [D_app + q(1 − (1 − confidence)/p)·s], q the normal quantile, or Student's with
    `degrees_of_freedom` (..., p) where given; Bonferroni over the p elements measured, because many may sit
    at F. D follows for both ends of its own two-sided interval and both f = 0 and f = F. Own method; needs
    no assumption but D >= 0 and that the contaminant is the denominator phase. The only protection when all
    spots contain alike.
    F covers at least `confidence` whatever the elements, about 98 % with three spots and most elements at F,
    over 99 % in simulated crystals, where few are.

    Parameters: apparent, standard_error (..., p), NaN where not measured.
    """
    known = np.isfinite(apparent) & np.isfinite(standard_error)
    number = np.maximum(known.sum(axis=-1, keepdims=True), 1)
    joint = np.broadcast_to(1 - (1 - confidence) / number, apparent.shape)
    limit = _smallest_upper_end(apparent, standard_error, degrees_of_freedom, joint, known)
    fraction = np.where(known.any(axis=-1), np.clip(limit, 0.0, 1.0), np.nan)
    half = _quantile(1 - (1 - confidence) / 2, degrees_of_freedom) * standard_error
    f = fraction[..., None]
    with np.errstate(divide="ignore", invalid="ignore"):
        low = np.minimum(apparent - half, (apparent - half - f) / (1 - f))
        high = np.maximum(apparent + half, (apparent + half - f) / (1 - f))
    all_overlap = f >= 1.0
    low = np.where(all_overlap, 0.0, np.maximum(low, 0.0))
    high = np.where(all_overlap, np.where(apparent + half > 1, np.inf, apparent + half), high)
    only_upper = known & (f >= 0.3 * apparent)
    return OverlapBound(fraction, np.where(known, low, np.nan), np.where(known, high, np.nan), only_upper)


def _smallest_upper_end(
    apparent: FloatArray,
    standard_error: FloatArray,
    degrees_of_freedom: FloatArray | None,
    probability: FloatArray,
    known: BoolArray,
) -> FloatArray:
    """min over the elements of D_app + q s, shape (...); infinite without data.

    Student's quantile takes long and is above the normal one: only elements whose normal end is below the
    smallest end found so far can have a smaller one.
    """
    normal = np.where(known, apparent + ndtri(probability) * standard_error, np.inf)
    if degrees_of_freedom is None or not apparent.size:
        return np.asarray(normal.min(axis=-1, initial=np.inf))
    smallest = normal.argmin(axis=-1)[..., None]
    first, s, dof, p = (
        np.take_along_axis(part, smallest, axis=-1)
        for part in (apparent, standard_error, degrees_of_freedom, probability)
    )
    found = np.where(np.take_along_axis(known, smallest, axis=-1), first + stdtrit(dof, p) * s, np.inf)
    asked = known & ((normal <= found) | (probability < 0.5))
    upper = np.full(apparent.shape, np.inf)
    quantile = stdtrit(degrees_of_freedom[asked], probability[asked])
    upper[asked] = apparent[asked] + quantile * standard_error[asked]
    return np.asarray(upper.min(axis=-1))


def _quantile(probability: float, degrees_of_freedom: FloatArray | None) -> FloatArray:
    if degrees_of_freedom is None:
        return np.asarray(ndtri(probability))
    return student_quantile(degrees_of_freedom, probability)
