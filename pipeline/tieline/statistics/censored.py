"""Means of groups in which some or all values are known only to lie below a limit.

- `censored_limits(values, sigmas, limits, censored, group, n_groups, *, confidence=0.95) -> MeanLimits`

Nothing is ever substituted for a censored value. Where the measured value below the limit is known, use it
with `means.phase_means` instead: it carries more information (AMC 2001, Analyst 126:256).

Noise model: the variance of value s at the level mu is b_s (1 + kappa mu), with b_s the blank's. Where no
sigma is given with a censored value, b_s = (L_s/3)², for limits are mostly three blank sigmas. kappa comes
from the sigmas of the measured values of the group; where there are none, it lets the variance grow by half
up to the smallest limit, as Poisson counts on a background of about 18 counts do.
"""

from dataclasses import dataclass

import numpy as np
from scipy import special

from tieline.statistics.groups import (
    BoolArray,
    FloatArray,
    IntArray,
    divide,
    group_count,
    group_extreme,
    group_mean,
    group_sum,
)
from tieline.statistics.limits import MeanLimits

LIMIT_IN_SIGMAS = 3.0
GROWTH_TO_LIMIT = 0.5
# Beyond 0.6 only strongly scattered groups matter; without them their limits cover 0.64 at a spread of 1.
RELATIVE_SPREADS = np.array([*np.linspace(0.0, 0.4, 9), 0.5, 0.6, 0.8, 1.0, 1.4])
RELATIVE_SPREADS_ALL_BELOW = np.array([0.0, 0.3])

# Levels at which the likelihood is first looked at, as multiples of the largest value or limit of the group.
_COARSE = np.concatenate([np.linspace(0.0, 2.0, 33), np.geomspace(2.0, 64.0, 16)[1:]])
_FINE_STEPS = 9
_REFINEMENTS = 3
_CHUNK_CELLS = 2_000_000


@dataclass(frozen=True)
class _Padded:
    """Groups as rows: values (or limits), blank variances, kappa, flags; shape (G, N), kappa (G,)."""

    level: FloatArray
    blank: FloatArray
    kappa: FloatArray
    censored: BoolArray
    present: BoolArray

    def rows(self, chosen: IntArray) -> "_Padded":
        width = int(self.present[chosen].sum(axis=1).max(initial=0))
        return _Padded(
            self.level[chosen, :width],
            self.blank[chosen, :width],
            self.kappa[chosen],
            self.censored[chosen, :width],
            self.present[chosen, :width],
        )


def censored_limits(
    values: FloatArray,
    sigmas: FloatArray,
    limits: FloatArray,
    censored: BoolArray,
    group: IntArray,
    n_groups: int,
    *,
    confidence: float = 0.95,
) -> MeanLimits:
    """Mean and limits of every group with a censored value; groups without one get NaN.

    All arrays of shape (S,). values: read where not censored; sigmas: NaN where not given; limits: > 0
    where censored, NaN allowed elsewhere.

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
    affected = np.flatnonzero(n_censored > 0)
    if len(affected):
        padded = _pad(values, sigmas, limits, censored, group, n_groups, affected)
        every = n_censored[affected] == n[affected]
        below = affected[every]
        mean[below] = low[below] = 0.0
        high[below] = _highest_level(padded.rows(np.flatnonzero(every)), 0.5 * (1.0 - confidence))
        partly = affected[~every]
        mean[partly], low[partly], high[partly] = _profile(
            padded, np.flatnonzero(~every), n[partly], confidence
        )
    return MeanLimits(mean, low, high, n, n_censored)


def _pad(
    values: FloatArray,
    sigmas: FloatArray,
    limits: FloatArray,
    censored: BoolArray,
    group: IntArray,
    n_groups: int,
    affected: IntArray,
) -> _Padded:
    """The affected groups as rows of a rectangle, with their noise model."""
    blank, kappa = _noise_model(values, sigmas, limits, censored, group, n_groups)
    row_of_group = np.full(n_groups, -1)
    row_of_group[affected] = np.arange(len(affected))
    kept = np.flatnonzero(row_of_group[group] >= 0)
    kept = kept[np.argsort(group[kept], kind="stable")]
    count = group_count(group, n_groups)[affected]
    column = np.arange(len(kept)) - np.repeat(np.cumsum(count) - count, count)
    row = row_of_group[group[kept]]
    shape = (len(affected), int(count.max()))

    def rectangle(flat: FloatArray | BoolArray, fill: float) -> FloatArray:
        out = np.full(shape, fill)
        out[row, column] = flat[kept]
        return out

    return _Padded(
        level=rectangle(np.where(censored, limits, values), 0.0),
        blank=rectangle(blank, 1.0),
        kappa=kappa[affected],
        censored=rectangle(censored, 0.0) > 0,
        present=rectangle(np.ones(len(values)), 0.0) > 0,
    )


def _noise_model(
    values: FloatArray,
    sigmas: FloatArray,
    limits: FloatArray,
    censored: BoolArray,
    group: IntArray,
    n_groups: int,
) -> tuple[FloatArray, FloatArray]:
    """Blank variance of every value, shape (S,), and kappa of every group, shape (n_groups,)."""
    from_limit = (limits / LIMIT_IN_SIGMAS) ** 2
    blank = np.where(censored & ~np.isnan(sigmas), sigmas**2, from_limit)
    known = ~np.isnan(blank)
    usual = group_mean(blank[known], group[known], n_groups)
    blank = np.where(known, blank, usual[group])
    measured = ~censored & ~np.isnan(sigmas)
    code, level = group[measured], np.maximum(values[measured], 0.0)
    excess = group_sum(sigmas[measured] ** 2 - blank[measured], code, n_groups)
    weight = group_sum(blank[measured] * level, code, n_groups)
    smallest_limit = group_extreme(limits[censored], group[censored], n_groups, largest=False)
    default = divide(np.full(n_groups, GROWTH_TO_LIMIT), np.nan_to_num(smallest_limit), otherwise=0.0)
    has_measured = weight > 0
    kappa = np.where(has_measured, divide(np.maximum(excess, 0.0), weight, 0.0), default)
    # Sigmas below the blank's: the limit was more than three blank sigmas.
    reported = group_sum(sigmas[measured] ** 2, code, n_groups)
    modelled = group_sum(blank[measured] * (1.0 + kappa[code] * level), code, n_groups)
    shrink = np.where(has_measured, np.minimum(divide(reported, modelled, 1.0), 1.0), 1.0)
    given = censored & ~np.isnan(sigmas)
    return np.where(given, blank, blank * shrink[group]), kappa


def _log_likelihood(groups: _Padded, level: FloatArray, spreads: FloatArray) -> FloatArray:
    """Log-likelihood maximised over the relative spreads; level: (G, M) -> (G, M)."""
    best = np.full(level.shape, -np.inf)
    mu = level[:, :, None]
    counting = groups.blank[:, None, :] * (1.0 + groups.kappa[:, None, None] * mu)
    distance = groups.level[:, None, :] - mu
    weight = groups.present[:, None, :]
    for spread in spreads:
        variance = counting + (spread * mu) ** 2
        deviate = distance / np.sqrt(variance)
        density = -0.5 * deviate**2 - 0.5 * np.log(variance)
        terms = np.where(groups.censored[:, None, :], special.log_ndtr(deviate), density)
        best = np.maximum(best, np.where(weight, terms, 0.0).sum(axis=2))
    return best


def _highest_level(groups: _Padded, tail: float) -> FloatArray:
    """Largest level at which all values fall below their limits with probability `tail`, shape (G,)."""
    highest = np.zeros(len(groups.level))
    top = 64.0 * np.where(groups.present, groups.level, 0.0).max(axis=1, initial=0.0)
    for spread in RELATIVE_SPREADS_ALL_BELOW:
        low, high = np.zeros(len(top)), top.copy()
        for _ in range(60):
            middle = 0.5 * (low + high)
            possible = _log_likelihood(groups, middle[:, None], np.array([spread]))[:, 0] > np.log(tail)
            low, high = np.where(possible, middle, low), np.where(possible, high, middle)
        highest = np.maximum(highest, high)
    return highest


def _profile(
    padded: _Padded, chosen: IntArray, n: IntArray, confidence: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Maximum and limits of the profile likelihood of the chosen rows, a bounded number at a time."""
    t = special.stdtrit(np.maximum(n - 1, 1), 0.5 + 0.5 * confidence)
    drop = 0.5 * n * np.log1p(t**2 / np.maximum(n - 1, 1))
    mean, low, high = (np.empty(len(chosen)) for _ in range(3))
    by_size = np.argsort(n, kind="stable")
    step = max(1, _CHUNK_CELLS // (len(_COARSE) * max(1, int(n.max(initial=1)))))
    for first in range(0, len(chosen), step):
        rows = by_size[first : first + step]
        mean[rows], low[rows], high[rows] = _profile_rows(padded.rows(chosen[rows]), drop[rows])
    return mean, low, high


def _profile_rows(groups: _Padded, drop: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    scale = np.where(groups.present, np.abs(groups.level), 0.0).max(axis=1)
    level = scale[:, None] * _COARSE
    curve = _log_likelihood(groups, level, RELATIVE_SPREADS)
    at = np.arange(len(scale))
    peak = curve.argmax(axis=1)
    left, right = level[at, np.maximum(peak - 1, 0)], level[at, np.minimum(peak + 1, len(_COARSE) - 1)]
    for _ in range(_REFINEMENTS + 2):
        fine = np.linspace(left, right, _FINE_STEPS, axis=1)
        likelihood = _log_likelihood(groups, fine, RELATIVE_SPREADS)
        best = likelihood.argmax(axis=1)
        left, right = fine[at, np.maximum(best - 1, 0)], fine[at, np.minimum(best + 1, _FINE_STEPS - 1)]
    mean = fine[at, best]
    cut = likelihood.max(axis=1) - drop
    allowed = curve >= cut[:, None]
    allowed[at, peak] = True
    first, last = allowed.argmax(axis=1), len(_COARSE) - 1 - allowed[:, ::-1].argmax(axis=1)
    low = _crossing(groups, cut, level[at, np.maximum(first - 1, 0)], level[at, first])
    high = _crossing(groups, cut, level[at, np.minimum(last + 1, len(_COARSE) - 1)], level[at, last])
    return (
        mean,
        np.where(first == 0, 0.0, np.minimum(low, mean)),
        np.where(last == len(_COARSE) - 1, np.inf, np.maximum(high, mean)),
    )


def _crossing(groups: _Padded, cut: FloatArray, outside: FloatArray, inside: FloatArray) -> FloatArray:
    """Level between `outside` and `inside` where the likelihood passes the cut, the outermost if several."""
    at = np.arange(len(cut))
    for _ in range(_REFINEMENTS):
        fine = np.linspace(outside, inside, _FINE_STEPS, axis=1)
        above = _log_likelihood(groups, fine, RELATIVE_SPREADS) >= cut[:, None]
        above[:, -1] = True
        first = np.maximum(above.argmax(axis=1), 1)
        outside, inside = fine[at, first - 1], fine[at, first]
    return 0.5 * (outside + inside)
