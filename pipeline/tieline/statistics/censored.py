"""Means of groups in which some or all values are known only to lie below a limit.

- `censored_limits(values, sigmas, limits, censored, group, n_groups, *, confidence=0.95) -> MeanLimits`

Nothing is ever substituted for a censored value. Where the measured value below the limit is known, use it
with `means.phase_means` instead: it carries more information (AMC 2001, Analyst 126:256).

Noise model: the variance of value s at the level mu is b_s (1 + kappa mu), with b_s the blank's. Where no
sigma is given with a censored value, b_s = (L_s/3)², for limits are mostly three blank sigmas. kappa comes
from the sigmas of the measured values of the group; where there are none, it lets the variance grow by half
up to the smallest limit, as Poisson counts on a background of about 18 counts do.
"""

from collections.abc import Callable
from functools import partial

import numpy as np
from scipy import special

from tieline.statistics.censored_groups import PaddedGroups, Rectangles
from tieline.statistics.groups import BoolArray, FloatArray, IntArray, group_count
from tieline.statistics.limits import MeanLimits
from tieline.statistics.search import root, summit
from tieline.statistics.threads import side_by_side

LIMIT_IN_SIGMAS = 3.0
# Beyond 0.6 only strongly scattered groups matter; without them their limits cover 0.64 at a spread of 1.
RELATIVE_SPREADS = np.array([*np.linspace(0.0, 0.4, 9), 0.5, 0.6, 0.8, 1.0, 1.4])
RELATIVE_SPREADS_ALL_BELOW = np.array([0.0, 0.3])

# Levels at which the likelihood is first looked at, as multiples of the largest value or limit of the group;
# the far ones only where the near ones do not hold the upper limit.
_NEAR = np.linspace(0.0, 2.0, 33)
_FAR = np.geomspace(2.0, 64.0, 16)[1:]
_STEPS = 2.0**16
_FAR_TAIL = -20.0
# So many groups at a time stay in the processor's cache.
_CHUNK_GROUPS = 2000


def censored_limits(
    values: FloatArray,
    sigmas: FloatArray,
    limits: FloatArray,
    censored: BoolArray,
    group: IntArray,
    n_groups: int,
    *,
    confidence: float = 0.95,
    limit_in_sigmas: float = LIMIT_IN_SIGMAS,
) -> MeanLimits:
    """Mean and limits of every group with a censored value; groups without one get NaN.

    All arrays of shape (S,). values: read where not censored; sigmas: NaN where not given; limits: > 0
    where censored, NaN allowed elsewhere; limit_in_sigmas: how many blank sigmas a limit is, where no sigma
    is given with it.

    Partly censored: profile likelihood of the mean with normal tail areas for the censored values (Cohen
    1959; Helsel 2005), the relative spread between values profiled over 0-1.4, cut where twice the drop
    exceeds n ln(1 + t²/(n-1)), t with n - 1 degrees of freedom, which gives the t interval when nothing is
    censored. All censored: the largest level at which, with relative spread 0 or 0.3, values as low as
    these still have probability (1 - confidence)/2 (ours).

    Raises ValueError where a censored value has no positive limit.
    """
    if not (limits[censored] > 0).all():
        raise ValueError("every censored value needs a limit above zero")
    n = group_count(group, n_groups)
    n_censored = group_count(group[censored], n_groups)
    mean, low, high = (np.full(n_groups, np.nan) for _ in range(3))
    rectangle = Rectangles(values, sigmas, limits, censored, group, n_groups, limit_in_sigmas)
    affected = np.flatnonzero(n_censored > 0)
    # Groups of like size together: little of a rectangle is then empty.
    affected = affected[np.lexsort((n_censored[affected], n[affected]))]
    every = n_censored[affected] == n[affected]
    for chosen, solve in ((affected[every], _all_below), (affected[~every], _partly_below)):
        parts = [chosen[first : first + _CHUNK_GROUPS] for first in range(0, len(chosen), _CHUNK_GROUPS)]
        solved = side_by_side(partial(_solved, solve, rectangle, n, confidence), parts)
        for part, limits_of_part in zip(parts, solved, strict=True):
            mean[part], low[part], high[part] = limits_of_part
    return MeanLimits(mean, low, high, n, n_censored)


def _solved(
    solve: Callable[[PaddedGroups, IntArray, float], tuple[FloatArray, FloatArray, FloatArray]],
    rectangle: "Rectangles",
    n: IntArray,
    confidence: float,
    part: IntArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    return solve(rectangle(part), n[part], confidence)


def _log_likelihood(groups: PaddedGroups, level: FloatArray, spread: FloatArray | float) -> FloatArray:
    """Log-likelihood of one level and one relative spread of every group, shape (G,) each."""
    growth, extra = (1.0 + groups.kappa * level)[:, None], ((spread * level) ** 2)[:, None]
    mu, measured, below = level[:, None], groups.measured, groups.below
    variance = measured.blank * growth + extra
    deviance = (measured.level - mu) ** 2 / variance + np.log(variance)
    tail = _log_probability((below.level - mu) / np.sqrt(below.blank * growth + extra))
    return _row_sums(tail, below.present) - 0.5 * _row_sums(deviance, measured.present)


def _log_probability(x: FloatArray) -> FloatArray:
    """log Φ(x) to 1e-13, in half the time of `special.log_ndtr`, which is left the far tail where Φ vanishes."""
    far = x < _FAR_TAIL
    log = np.log(special.ndtr(np.maximum(x, _FAR_TAIL)))
    if far.any():
        log[far] = special.log_ndtr(x[far])
    return np.asarray(log, dtype=np.float64)


def _row_sums(terms: FloatArray, present: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("gn,gn->g", terms, present), dtype=np.float64)


class _Profile:
    """Log-likelihood of levels, maximised over the relative spreads.

    The best spread moves slowly with the level: it is looked for uphill from where it was at the last one.
    """

    def __init__(self, groups: PaddedGroups) -> None:
        self.groups = groups
        self.spread = np.zeros(len(groups.kappa), dtype=np.int64)

    def __call__(self, level: FloatArray, chosen: IntArray) -> FloatArray:
        """One level of each of the chosen groups."""
        groups, spread = self.groups.of(chosen), self.spread[chosen]
        best = _log_likelihood(groups, level, RELATIVE_SPREADS[spread])
        started = spread.copy()
        for step in (1, -1):
            moving = np.flatnonzero(spread == started)
            while len(moving := moving[_is_place(spread[moving] + step)]):
                trial = _log_likelihood(
                    groups.of(moving), level[moving], RELATIVE_SPREADS[spread[moving] + step]
                )
                better = trial > best[moving]
                moving = moving[better]
                best[moving], spread[moving] = trial[better], spread[moving] + step
        self.spread[chosen] = spread
        return best


def _is_place(position: IntArray) -> BoolArray:
    return np.asarray((position >= 0) & (position < len(RELATIVE_SPREADS)))


def _all_below(
    groups: PaddedGroups, n: IntArray, confidence: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean and low are 0; high is the largest level at which all values still fall below their limits."""
    none, top = np.zeros(len(n)), 64.0 * groups.scale
    cut = np.log(0.5 * (1.0 - confidence))
    highest = none
    for spread in RELATIVE_SPREADS_ALL_BELOW:

        def above(level: FloatArray, chosen: IntArray, spread: float = spread) -> FloatArray:
            return np.asarray(_log_likelihood(groups.of(chosen), level, spread) - cut)

        every = np.arange(len(n))
        ends = above(none, every), above(top, every)
        highest = np.maximum(highest, root(above, none, top, *ends, 1e-11))
    return none, none, highest


def _partly_below(
    groups: PaddedGroups, n: IntArray, confidence: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Maximum and limits of the profile likelihood."""
    t = special.stdtrit(np.maximum(n - 1, 1), 0.5 + 0.5 * confidence)
    drop = 0.5 * n * np.log1p(t**2 / np.maximum(n - 1, 1))
    profile, at, scale = _Profile(groups), np.arange(len(n)), groups.scale
    level = scale[:, None] * np.concatenate([_NEAR, _FAR])
    curve, spread = np.full(level.shape, -np.inf), np.zeros(level.shape, dtype=np.int64)
    for column in range(len(_NEAR)):
        curve[:, column], spread[:, column] = profile(level[:, column], at), profile.spread
    # Where the likelihood is still within reach of its cut at the last level, it may be so beyond.
    for column in range(len(_NEAR), level.shape[1]):
        far = np.flatnonzero(curve[:, column - 1] >= curve.max(axis=1) - drop)
        curve[far, column], spread[:, column] = profile(level[far, column], far), profile.spread
    peak = curve.argmax(axis=1)
    profile.spread = spread[at, peak]
    mean, highest = summit(
        profile, *(level[at, np.clip(peak + step, 0, level.shape[1] - 1)] for step in (-1, 1))
    )
    cut = highest - drop
    allowed = curve >= cut[:, None]
    allowed[at, peak] = True
    first, last = allowed.argmax(axis=1), level.shape[1] - 1 - allowed[:, ::-1].argmax(axis=1)

    def below_cut(level: FloatArray, chosen: IntArray) -> FloatArray:
        return np.asarray(cut[chosen] - profile(level, chosen))

    def crossing(outside: IntArray, inside: IntArray) -> FloatArray:
        a, b = (np.where(place == peak, mean, level[at, place]) for place in (outside, inside))
        f_a, f_b = (cut - np.where(place == peak, highest, curve[at, place]) for place in (outside, inside))
        return root(below_cut, a, b, f_a, f_b, 1e-7)

    low = crossing(np.maximum(first - 1, 0), first)
    high = crossing(np.minimum(last + 1, level.shape[1] - 1), last)
    # Rounded far below what the likelihood can tell: the same whatever the unit and the order of the rows.
    mean, low, high = (np.round(place / scale * _STEPS) / _STEPS * scale for place in (mean, low, high))
    return (
        mean,
        np.where(first == 0, 0.0, np.minimum(low, mean)),
        np.where(last == level.shape[1] - 1, np.inf, np.maximum(high, mean)),
    )
