"""On which side of given boundaries a ratio lies, and how sure that is.

- `class_probabilities(p_above) -> (K, B + 1)`
- `declared_class(p_above, kind, confidence=0.95) -> class numbers, -1 unresolved`
- `probability_above_from_limits(value, low, high, kind, boundaries, confidence=0.95) -> (K, B)`

`p_above`: probability that the ratio exceeds each of B ascending boundaries, shape (K, B); class 0 lies
below the first boundary, class B above the last. For ratios of two means it comes from
`ratios.probability_above`, for ratios with a censored mean from `probability_above_from_limits`.
"""

import numpy as np
from scipy import special

from tieline.statistics.groups import FloatArray, IntArray
from tieline.statistics.ratios import LOWER_LIMIT, UNDETERMINED, UPPER_LIMIT, VALUE, Texts

UNRESOLVED = -1


def class_probabilities(p_above: FloatArray) -> FloatArray:
    """Probability of every class, shape (K, B + 1), rows sum to 1; NaN where the boundaries' are NaN."""
    edge = np.ones((len(p_above), 1))
    bounded = np.concatenate([edge, p_above, 0.0 * edge], axis=1)
    probabilities: FloatArray = np.clip(bounded[:, :-1] - bounded[:, 1:], 0.0, 1.0)
    probabilities[np.isnan(p_above).any(axis=1)] = np.nan
    return probabilities


def declared_class(p_above: FloatArray, kind: Texts, confidence: float = 0.95) -> IntArray:
    """Number of the class that can be declared, shape (K,); -1 where none can.

    A class is declared when the ratio lies above its lower boundary and below its upper one, each with
    probability (1 + confidence)/2 or more: just when the interval at that confidence lies inside the class.
    A ratio on a boundary is then put on a given side in (1 - confidence)/2 of cases. `kind` "undetermined"
    is never declared.
    """
    sure = 0.5 + 0.5 * confidence
    n_classes = p_above.shape[1] + 1
    above, below = np.ones((2, len(p_above), n_classes), dtype=np.bool_)
    above[:, 1:] = p_above >= sure
    below[:, :-1] = 1.0 - p_above >= sure
    inside = above & below
    inside[kind == UNDETERMINED] = False
    number: IntArray = np.where(inside, np.arange(n_classes), UNRESOLVED).max(axis=1)
    return number


def probability_above_from_limits(
    value: FloatArray,
    low: FloatArray,
    high: FloatArray,
    kind: Texts,
    boundaries: FloatArray,
    confidence: float = 0.95,
) -> FloatArray:
    """Probability that a ratio known by its limits only exceeds each boundary, shape (K, B); NaN when
    undetermined.

    A normal pivot on each side of the value, scaled so that the interval's end has the interval's tail; for
    an upper limit counted from zero, for a lower limit the same for the reciprocal. Exact at the ends, so
    that classes follow the interval; an approximation (ours) elsewhere.
    """
    quantile = float(special.ndtri(0.5 + 0.5 * confidence))
    value, low, high = value[:, None], low[:, None], high[:, None]
    boundary = np.broadcast_to(np.asarray(boundaries, dtype=np.float64), (len(value), len(boundaries)))
    which = np.broadcast_to(np.asarray(kind)[:, None], boundary.shape)
    deviate = np.full(boundary.shape, np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        side = np.where(boundary > value, high - value, value - low)
        deviate = np.where(which == VALUE, (value - boundary) / side, deviate)
        deviate = np.where(which == UPPER_LIMIT, -boundary / high, deviate)
        deviate = np.where(which == LOWER_LIMIT, low / boundary, deviate)
    probability: FloatArray = special.ndtr(quantile * deviate)
    return probability
