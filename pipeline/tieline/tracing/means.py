"""A phase mean with every number that its formula needs, written so that a hand can follow it.

With normalised weights p the random-effects mean of `tieline.statistics.means` reads

    m = Σ p x,    se² = Σ p² v · Σ p (x − m)² / Σ p (1 − p) v,    v = σ² + τ²
"""

from __future__ import annotations

from typing import Any

import numpy as np

from tieline.arrays import FloatArray, IntArray
from tieline.statistics.means import paule_mandel, phase_means, pooled_sigmas
from tieline.statistics.robust import HUBER_K, huber_proposal2, median_and_madn

# Value, counting variance, known variance and number of values of every spot or grain.
Units = tuple[FloatArray, FloatArray, FloatArray, FloatArray]

WEIGHTS = "p ∝ 1 / (σ² + max(τ², 4·mean(σ²)/(n − 1)))"
TAU = "τ: Σ (x − m')² / (σ² + τ²) = n − 1, m' weighted by 1/(σ² + τ²); 0 where the scatter is smaller"
MEAN = "m = Σ p x"
SE = "se² = Σp²v · Σp(x − m)² / Σp(1 − p)v, v = σ² + τ²"
COUNTING = "counting se² = Σ p² σ²"
MSWD = "mswd = Σ (x − m₀)² / σ² / (n − 1), m₀ weighted by 1/σ²"
POOLED = "σ used = σ / sqrt(max(1 + k (x − x̄), 0.1)), x̄ the plain mean: what it would be at the mean's level"
COMMON = "to both se² is added the square of what the unmixed values have in common"


def mean_account(
    value: FloatArray,
    sigma: FloatArray,
    *,
    estimator: str,
    pooled: bool = True,
    grain: IntArray | None = None,
    common_ppm: float = 0.0,
) -> dict[str, Any]:
    """Everything between the values of one group and its mean.

    value, sigma: shape (n,), ppm, sigma NaN unknown; grain: codes of the grains where these are averaged
    first; common_ppm: error that averaging does not reduce. Lists in the result have one entry per value, or
    per grain (`units`).
    """
    one = np.zeros(len(value), dtype=np.int64)
    used = pooled_sigmas(value, sigma, one, 1) if pooled else sigma
    means = phase_means(value, used, one, 1, estimator=estimator, subgroup=grain)
    common = common_ppm**2
    account: dict[str, Any] = {
        "estimator": estimator,
        "n": int(means.n[0]),
        "n_values": len(value),
        "mean_ppm": _number(means.mean[0]),
        "se_ppm": _number(np.sqrt(means.variance[0] + common)),
        "counting_se_ppm": _number(np.sqrt(means.counting_variance[0] + common)),
        "dof": _number(means.dof[0]),
        "spread_sd_ppm": _number(means.spread_sd[0]),
        "mswd": _number(means.mswd[0]),
        "sigma_used_ppm": [_number(one) for one in used],
        "sigma_slope_per_ppm": _slope(value, sigma, used),
        "units": None,
        "how": [],
    }
    if common:
        account |= {"common_ppm": common_ppm}
        account["how"].append(COMMON)
    if account["sigma_slope_per_ppm"] is not None:
        account["how"].append(POOLED)
    units = _units(value, used, grain)
    if grain is not None:
        account["units"] = [
            {
                "n": int(n),
                "mean_ppm": float(x),
                "counting_sd_ppm": _number(np.sqrt(c)),
                "sd_ppm": _number(np.sqrt(v)),
            }
            for x, c, v, n in zip(*units, strict=True)
        ]
        account["how"].append(
            "x: mean of each grain; σ² of a grain: the larger of counting and pooled scatter over n"
        )
    return account | _steps(estimator, units, account["how"])


def _units(value: FloatArray, sigma: FloatArray, grain: IntArray | None) -> Units:
    """Value, counting variance, known variance and number of values of every spot or grain."""
    known = np.isfinite(sigma)
    filled = np.where(known, sigma**2, np.mean(sigma[known] ** 2) if known.any() else 0.0)
    if grain is None:
        return value, filled, filled, np.ones(len(value))
    codes, place = np.unique(grain, return_inverse=True)
    n = np.bincount(place).astype(np.float64)
    mean = np.bincount(place, weights=value) / n
    counting = np.bincount(place, weights=filled) / n**2
    freedom = len(value) - len(codes)
    scatter = float(np.sum((value - mean[place]) ** 2)) / freedom if freedom else 0.0
    return mean, counting, np.maximum(counting, scatter / n), n


def _steps(estimator: str, units: Units, how: list[str]) -> dict[str, Any]:
    x, counting, variance, _ = units
    n = len(x)
    if n == 0:
        return {"how": [*how, "no values"]}
    if n == 1:
        return {"weights": [1.0], "how": [*how, "one value: m = x, se = σ, no degrees of freedom"]}
    if estimator == "median":
        _, scale = median_and_madn(x, np.zeros(n, dtype=np.int64), 1)
        return _robust(n, float(scale[0]), "m = median(x), scale = 1.4826 · median |x − m|", how)
    if estimator == "huber":
        _, scale = huber_proposal2(x, np.zeros(n, dtype=np.int64), 1)
        reach = f"x drawn in to within {HUBER_K:g} scales of m"
        text = f"m = mean of the {reach}; scale² = Σ(those − m)² / (n − 1) / 0.778465"
        return _robust(n, float(scale[0]), text, how)
    if estimator == "arithmetic":
        return {"weights": [1.0 / n] * n, "how": [*how, "m = Σ x / n", "se² = Σ (x − m)² / (n (n − 1))"]}
    return _random_effects(x, counting, variance, how)


def _random_effects(
    x: FloatArray, counting: FloatArray, variance: FloatArray, how: list[str]
) -> dict[str, Any]:
    n = len(x)
    tau_squared = float(paule_mandel(x, variance, np.zeros(n, dtype=np.int64), 1)[0])
    floor = 4.0 * float(np.mean(variance)) / (n - 1)
    total = variance + max(tau_squared, floor)
    weight = 1.0 / total if (total > 0).all() else np.ones(n)
    p = weight / weight.sum()
    v = variance + tau_squared
    mean = float(np.sum(p * x))
    return {
        "weights": [float(one) for one in p],
        "tau_ppm": float(np.sqrt(tau_squared)),
        "sum_p2_v": float(np.sum(p**2 * v)),
        "sum_p_d2": float(np.sum(p * (x - mean) ** 2)),
        "sum_p_1p_v": float(np.sum(p * (1.0 - p) * v)),
        "sum_p2_counting": float(np.sum(p**2 * counting)),
        "how": [*how, TAU, WEIGHTS, MEAN, SE, COUNTING, MSWD],
    }


def _robust(n: int, scale: float, text: str, how: list[str]) -> dict[str, Any]:
    if n == 2:
        return {"weights": [0.5, 0.5], "how": [*how, "two values: m = Σ x / 2, se² = Σ (x − m)² / 2"]}
    return {
        "scale_ppm": scale,
        "how": [*how, text, "se² = c · scale² / n, c the constant for n (small samples)"],
    }


def with_constant(account: dict[str, Any]) -> dict[str, Any]:
    """For robust means the constant c of se² = c · scale² / n."""
    scale, se = account.get("scale_ppm"), account["se_ppm"]
    if not scale or se is None:
        return account
    squared = se**2 - account.get("common_ppm", 0.0) ** 2
    return account | {"constant": squared * account["n"] / scale**2}


def _slope(value: FloatArray, sigma: FloatArray, used: FloatArray) -> float | None:
    """Relative slope k of the variance line that the sigmas were freed from; None where they are as reported."""
    known = np.isfinite(sigma) & (used > 0) & (sigma > 0)
    if not known.any() or np.array_equal(sigma[known], used[known]):
        return None
    line = (sigma[known] / used[known]) ** 2
    distance = value[known] - np.mean(value[known])
    # A line kept above its floor says nothing of the slope; the farthest other value says it best.
    free = np.flatnonzero(line > 0.1000001)
    best = free[np.argmax(np.abs(distance[free]))]
    return float((line[best] - 1.0) / distance[best]) if distance[best] != 0 else None


def _number(x: float) -> float | None:
    return float(x) if np.isfinite(x) else None
