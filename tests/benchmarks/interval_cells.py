"""Simulated cells for the coverage study: what is drawn, and what the program's own functions make of it.

Every function takes a cell, a number of replicates and a random generator and returns an `Outcome` of that
many ratios. The true ratio is 1 (alpha and beta both have the true level 1) unless the cell says otherwise.
"""

from dataclasses import dataclass, field, replace

import numpy as np

from tieline.statistics.censored import censored_limits
from tieline.statistics.classes import declared_class
from tieline.statistics.limits import MeanLimits, limits_ratio, mean_limits
from tieline.statistics.means import PhaseMeans, phase_means, pooled_sigmas
from tieline.statistics.ratios import UNDETERMINED, RatioInterval, probability_above, ratio_interval

Z = 1.959963984540054


@dataclass(frozen=True)
class Cell:
    """One point of the study; counting and spread sd of one spot and calibration sd are relative."""

    family: str
    n_alpha: int
    n_beta: int
    counting_alpha: float = 0.05
    counting_beta: float = 0.05
    spread_alpha: float = 0.0
    spread_beta: float = 0.0
    calibration: float = 0.0
    estimator: str = "random-effects"
    method: str = "fieller"
    counts: float = 0.0  # Poisson cells: mean counts of one alpha spot
    pooled: bool = True
    grains: bool = False
    level: float = (
        1.0  # censored cells: true alpha level over the limit; class cells: true ratio over the boundary
    )
    side: str = "alpha"  # censored cells: which mean is near its limit

    @property
    def n_min(self) -> int:
        return min(self.n_alpha, self.n_beta)


@dataclass(frozen=True)
class Outcome:
    """Intervals of the program and of mean ± 2 standard errors, and the oracle's width."""

    truth: float
    result: RatioInterval
    sheet_low: np.ndarray = field(default_factory=lambda: np.empty(0))
    sheet_high: np.ndarray = field(default_factory=lambda: np.empty(0))
    oracle_width: float = np.nan
    declared: np.ndarray | None = None


def spot_noise(n: int, replicates: int, unequal: bool, rng: np.random.Generator) -> np.ndarray:
    """Factors on the counting sd of every spot: 1, or spread evenly over 0.5-2 in the logarithm."""
    if not unequal:
        return np.ones((replicates, n))
    return np.exp(rng.uniform(np.log(0.5), np.log(2.0), (replicates, n)))


def codes(replicates: int, n: int) -> np.ndarray:
    return np.repeat(np.arange(replicates), n)


def gaussian_phase(
    n: int, counting: float, spread: float, cell: Cell, replicates: int, rng: np.random.Generator
) -> tuple[np.ndarray, PhaseMeans, float]:
    """Spots, their means, and the true variance of the mean."""
    sigma = counting * spot_noise(n, replicates, cell.family == "unequal", rng)
    values = (
        1.0 + spread * rng.standard_normal((replicates, n)) + sigma * rng.standard_normal((replicates, n))
    )
    group = codes(replicates, n)
    sigmas = pooled_sigmas(values.ravel(), sigma.ravel(), group, replicates)
    means = phase_means(values.ravel(), sigmas, group, replicates, estimator=cell.estimator)
    weight = 1.0 / (sigma**2 + spread**2)
    return values, means, float(np.median(1.0 / weight.sum(axis=1)))


def grain_phase(
    n: int, counting: float, spread: float, replicates: int, rng: np.random.Generator
) -> tuple[np.ndarray, PhaseMeans, float]:
    """n grains of 1-4 spots each: `spread` between grains, half of it inside them."""
    spots = np.array([1, 2, 3, 4, 2, 4, 3, 1])[np.arange(n) % 8]
    grain = np.repeat(np.arange(n), spots)
    between = spread * rng.standard_normal((replicates, n))
    shape = (replicates, len(grain))
    noise = np.hypot(counting, 0.5 * spread)
    values = 1.0 + between[:, grain] + noise * rng.standard_normal(shape)
    means = phase_means(
        values.ravel(),
        np.full(values.size, counting),
        codes(replicates, len(grain)),
        replicates,
        subgroup=np.tile(grain, replicates),
    )
    return values, means, float(1.0 / np.sum(1.0 / (spread**2 + noise**2 / spots)))


def gaussian(cell: Cell, replicates: int, rng: np.random.Generator) -> Outcome:
    """Normal counting and spread; the calibration factors of the two means are independent."""
    a, b = (
        (cell.n_alpha, cell.counting_alpha, cell.spread_alpha),
        (cell.n_beta, cell.counting_beta, cell.spread_beta),
    )
    if cell.grains:
        values_a, means_a, variance_a = grain_phase(*a, replicates, rng)
        values_b, means_b, variance_b = grain_phase(*b, replicates, rng)
    else:
        values_a, means_a, variance_a = gaussian_phase(*a, cell, replicates, rng)
        values_b, means_b, variance_b = gaussian_phase(*b, cell, replicates, rng)
    factor = np.exp(cell.calibration * rng.standard_normal((2, replicates)))
    every = np.arange(replicates)
    alpha, beta = scaled(means_a, factor[0]).estimate(every), scaled(means_b, factor[1]).estimate(every)
    options = {"u_alpha": cell.calibration, "u_beta": cell.calibration, "method": cell.method}
    result = ratio_interval(alpha, beta, **options)
    declared = None
    if cell.family == "class":
        probability = probability_above(alpha, beta, np.array([1.0 / cell.level]), **options)
        declared = declared_class(probability, result.kind)
    low, high = spreadsheet(values_a * factor[0][:, None], values_b * factor[1][:, None])
    reach = Z**2 * np.array([variance_a + cell.calibration**2, variance_b + cell.calibration**2])
    oracle = 2 * np.sqrt(max(reach[0] + reach[1] - reach[0] * reach[1], 0)) / (1 - reach[1])
    return Outcome(1.0, result, low, high, float(oracle), declared)


def scaled(means: PhaseMeans, factor: np.ndarray) -> PhaseMeans:
    return replace(
        means,
        mean=means.mean * factor,
        variance=means.variance * factor**2,
        counting_variance=means.counting_variance * factor**2,
    )


def spreadsheet(values_a: np.ndarray, values_b: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Ratio of arithmetic means ± 2 standard errors added in quadrature."""
    a, b = values_a.mean(axis=1), values_b.mean(axis=1)
    relative = np.hypot(
        *(np.std(v, axis=1, ddof=1) / np.sqrt(v.shape[1]) / v.mean(axis=1) for v in (values_a, values_b))
    )
    ratio = a / b
    return ratio - 2 * np.abs(ratio) * relative, ratio + 2 * np.abs(ratio) * relative


def poisson(cell: Cell, replicates: int, rng: np.random.Generator) -> Outcome:
    """Alpha spots are counts with sigma from the spot's own counts; beta is precise."""
    n = cell.n_alpha
    level = np.maximum(1.0 + cell.spread_alpha * rng.standard_normal((replicates, n)), 0.0)
    counted = rng.poisson(cell.counts * level)
    values, sigma = counted / cell.counts, np.sqrt(np.maximum(counted, 1)) / cell.counts
    group = codes(replicates, n)
    flat = sigma.ravel()
    sigmas = pooled_sigmas(values.ravel(), flat, group, replicates) if cell.pooled else flat
    means = phase_means(values.ravel(), sigmas, group, replicates)
    values_b, means_b, variance_b = gaussian_phase(cell.n_beta, 0.01, 0.01, cell, replicates, rng)
    every = np.arange(replicates)
    result = ratio_interval(means.estimate(every), means_b.estimate(every))
    low, high = spreadsheet(values, values_b)
    variance_a = (1.0 / cell.counts + cell.spread_alpha**2) / n
    return Outcome(1.0, result, low, high, float(2 * Z * np.sqrt(variance_a + variance_b)))


def censored(cell: Cell, replicates: int, rng: np.random.Generator) -> Outcome:
    """One mean near its detection limit; values below their limit are reported as below it and nothing else.

    Limits differ by up to 1.3 either way from spot to spot; each is three blank sigmas, and the variance
    grows by half from blank to limit (the counts of a background of 18).
    """
    n = cell.n_alpha if cell.side == "alpha" else cell.n_beta
    limits = np.exp(rng.uniform(-np.log(1.3), np.log(1.3), (replicates, n)))
    true_level = cell.level * np.maximum(1.0 + cell.spread_alpha * rng.standard_normal((replicates, n)), 0.0)
    sigma_true = limits / 3.0 * np.sqrt(1.0 + 0.5 * true_level / limits)
    values = true_level + sigma_true * rng.standard_normal((replicates, n))
    sigma = limits / 3.0 * np.sqrt(1.0 + 0.5 * np.maximum(values, 0.0) / limits)
    below = values < limits
    near = near_limit(values, sigma, limits, below, replicates)
    other_n = cell.n_beta if cell.side == "alpha" else cell.n_alpha
    _, other, _ = gaussian_phase(other_n, cell.counting_beta, cell.spread_beta, cell, replicates, rng)
    far = mean_limits(other.estimate(np.arange(replicates)))
    if cell.side == "alpha":
        return Outcome(cell.level, limits_ratio(near, far))
    return Outcome(1.0 / cell.level, limits_ratio(far, near))


def near_limit(
    values: np.ndarray, sigma: np.ndarray, limits: np.ndarray, below: np.ndarray, replicates: int
) -> MeanLimits:
    """Limits of every mean: from the likelihood where something is censored, from t where nothing is."""
    group = codes(replicates, values.shape[1])
    reported = np.where(below, np.nan, sigma).ravel()
    part = censored_limits(
        np.where(below, np.nan, values).ravel(), reported, limits.ravel(), below.ravel(), group, replicates
    )
    sigmas = pooled_sigmas(values.ravel(), sigma.ravel(), group, replicates)
    whole = mean_limits(
        phase_means(values.ravel(), sigmas, group, replicates).estimate(np.arange(replicates))
    )
    some = part.n_censored > 0
    return MeanLimits(
        np.where(some, part.mean, whole.mean),
        np.where(some, part.low, whole.low),
        np.where(some, part.high, whole.high),
        part.n,
        part.n_censored,
    )


SIMULATIONS = {"poisson": poisson, "censored": censored}


def simulate(cell: Cell, replicates: int, rng: np.random.Generator) -> Outcome:
    """Draw the cell and reduce it."""
    return SIMULATIONS.get(cell.family, gaussian)(cell, replicates, rng)


def summary(outcome: Outcome) -> dict[str, float]:
    """Coverage, misses on either side, median width over the oracle's, and shares of the kinds.

    A ratio without an interval claims nothing: it counts as covering, and its share is given.
    """
    result, truth = outcome.result, outcome.truth
    too_high, too_low = result.low > truth, result.high < truth
    none = result.kind == UNDETERMINED
    width = np.where(none, np.inf, result.high - result.low)
    upper = result.kind == "upper-limit"
    row = {
        "coverage": 1.0 - float((too_high | too_low).mean()),
        "interval_above_truth": float(too_high.mean()),
        "interval_below_truth": float(too_low.mean()),
        "width_ratio": float(np.median(width)) / outcome.oracle_width,
        "share_value": float((result.kind == "value").mean()),
        "share_upper": float(upper.mean()),
        "share_lower": float((result.kind == "lower-limit").mean()),
        "share_undetermined": float(none.mean()),
        "upper_limit_too_low": float((upper & too_low).mean()),
        "lower_limit_too_high": float(((result.kind == "lower-limit") & too_high).mean()),
    }
    if len(outcome.sheet_low):
        row["sheet_coverage"] = float(((outcome.sheet_low <= truth) & (truth <= outcome.sheet_high)).mean())
    if outcome.declared is not None:
        row["declared_above"] = float((outcome.declared == 1).mean())
        row["declared_below"] = float((outcome.declared == 0).mean())
    return row
