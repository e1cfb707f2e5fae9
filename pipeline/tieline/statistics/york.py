"""Straight line through points with errors in both variables.

Public: `york_line`, `predict_line`, `predict_new`, `line_without_each`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

FloatArray = NDArray[np.float64]

FITTED, CANNOT_TELL = "fitted", "cannot tell"
_EXCESS = 0.05


@dataclass(frozen=True)
class Line:
    """y = intercept + slope x, or the reason why there is none.

    intercept_se, slope_se: standard errors if the stated errors are right; *_se_scatter: those times sqrt(mswd), which
    take the size of the errors from the scatter instead (nan for two points). covariance: of intercept and slope, as
    stated. centre_x: where the line is known best, with mean_se its standard error there. chi_square on dof, mswd their
    ratio, p_value the chance of as much scatter. scale: 1, or mswd where it is too large (p < 0.05): the variance factor
    that intervals use, then with Student's t. weighted_sigmas: (n,) residuals in standard deviations.
    """

    verdict: str
    reason: str
    intercept: float
    slope: float
    intercept_se: float
    slope_se: float
    intercept_se_scatter: float
    slope_se_scatter: float
    covariance: float
    centre_x: float
    mean_se: float
    chi_square: float
    dof: int
    mswd: float
    p_value: float
    scale: float
    weighted_sigmas: FloatArray

    def quantile(self, confidence: float) -> float:
        """Half-width of a two-sided interval in (scaled) standard errors."""
        tail = 0.5 + 0.5 * confidence
        return float(special.stdtrit(self.dof, tail) if self.scale > 1 else special.ndtri(tail))


def york_line(
    x: FloatArray,
    y: FloatArray,
    sd_x: FloatArray,
    sd_y: FloatArray,
    correlation: FloatArray | float = 0.0,
) -> Line:
    """Best line by York et al. (2004), Am. J. Phys. 72:367, eqs. 13-15: maximum likelihood for normal errors.

    x, y, sd_x, sd_y: (n,), correlation of the two errors of each point: (n,) or one number. Errors may be zero in one of
    the two variables. Iteration starts from the best of many slopes, so that it cannot end in the wrong root. "cannot
    tell" for fewer than two different x, or where the line is vertical within the numbers' accuracy. Raises ValueError for
    arrays that do not fit each other, negative or missing numbers, or a point without any error.
    """
    x, y, sd_x, sd_y = (np.asarray(array, dtype=np.float64) for array in (x, y, sd_x, sd_y))
    correlation = np.broadcast_to(np.asarray(correlation, dtype=np.float64), x.shape)
    _check(x, y, sd_x, sd_y, correlation)
    if len(x) < 2 or np.ptp(x) == 0:
        return _no_line(len(x), "fewer than two different values of x")
    var_x, var_y, joint = sd_x**2, sd_y**2, correlation * sd_x * sd_y
    slope = _start(x, y, var_x, var_y, joint)
    for _ in range(200):
        weight = _weights(slope, var_x, var_y, joint)
        u, v = x - np.sum(weight * x) / weight.sum(), y - np.sum(weight * y) / weight.sum()
        beta = weight * (u * var_y + slope * v * var_x - (slope * u + v) * joint)
        bottom = np.sum(weight * beta * u)
        if not np.isfinite(bottom) or bottom == 0:
            return _no_line(len(x), "no finite slope fits the points")
        previous, slope = slope, float(np.sum(weight * beta * v) / bottom)
        if abs(slope - previous) <= 1e-13 * abs(slope):
            break
    if not np.isfinite(slope) or abs(slope) * np.ptp(x) > 1e9 * (np.ptp(y) + sd_y.max()):
        return _no_line(len(x), "no finite slope fits the points")
    return _line(x, y, var_x, var_y, joint, slope)


def _check(x: FloatArray, y: FloatArray, sd_x: FloatArray, sd_y: FloatArray, correlation: FloatArray) -> None:
    if x.ndim != 1 or any(array.shape != x.shape for array in (y, sd_x, sd_y)):
        raise ValueError("x, y and their errors must be one-dimensional and of the same length")
    if not all(np.all(np.isfinite(array)) for array in (x, y, sd_x, sd_y, correlation)):
        raise ValueError("x, y, their errors and correlations must be finite")
    if np.any(sd_x < 0) or np.any(sd_y < 0) or np.any(np.abs(correlation) >= 1):
        raise ValueError("errors must not be negative and correlations must lie between -1 and 1")
    if np.any((sd_x == 0) & (sd_y == 0)):
        raise ValueError("every point needs an error in x or in y")


def _weights(slope: float, var_x: FloatArray, var_y: FloatArray, joint: FloatArray) -> FloatArray:
    variance = var_y + slope**2 * var_x - 2.0 * slope * joint
    return np.asarray(1.0 / np.maximum(variance, 1e-300))


def _start(x: FloatArray, y: FloatArray, var_x: FloatArray, var_y: FloatArray, joint: FloatArray) -> float:
    """The slope of least chi-square among 721 directions, in units of the spreads of x and y."""
    ratio = (np.ptp(y) or float(np.sqrt(var_y.max())) or 1.0) / np.ptp(x)
    slopes = ratio * np.tan(np.linspace(-0.5, 0.5, 721)[1:-1] * np.pi)
    variance = var_y + slopes[:, None] ** 2 * var_x - 2.0 * slopes[:, None] * joint
    weight = 1.0 / np.maximum(variance, 1e-300)
    residual = y - slopes[:, None] * x
    residual = residual - np.sum(weight * residual, axis=1, keepdims=True) / weight.sum(axis=1, keepdims=True)
    return float(slopes[np.argmin(np.sum(weight * residual**2, axis=1))])


def _line(
    x: FloatArray, y: FloatArray, var_x: FloatArray, var_y: FloatArray, joint: FloatArray, slope: float
) -> Line:
    weight = _weights(slope, var_x, var_y, joint)
    mean_x, mean_y = np.sum(weight * x) / weight.sum(), np.sum(weight * y) / weight.sum()
    u, v = x - mean_x, y - mean_y
    adjusted = mean_x + weight * (u * var_y + slope * v * var_x - (slope * u + v) * joint)
    intercept = float(mean_y - slope * mean_x)
    centre = float(np.sum(weight * adjusted) / weight.sum())
    slope_variance = float(1.0 / np.sum(weight * (adjusted - centre) ** 2))
    mean_variance = float(1.0 / weight.sum())
    sigmas = np.sqrt(weight) * (y - intercept - slope * x)
    chi_square, dof = float(np.sum(sigmas**2)), len(x) - 2
    mswd = chi_square / dof if dof else np.nan
    p_value = float(special.chdtrc(dof, chi_square)) if dof else np.nan
    intercept_se = float(np.sqrt(mean_variance + centre**2 * slope_variance))
    slope_se = float(np.sqrt(slope_variance))
    return Line(
        FITTED, "", intercept, slope, intercept_se, slope_se,
        float(intercept_se * np.sqrt(mswd)), float(slope_se * np.sqrt(mswd)), -centre * slope_variance, centre,
        float(np.sqrt(mean_variance)), chi_square, dof, mswd, p_value,
        mswd if dof and p_value < _EXCESS else 1.0, sigmas,
    )  # fmt: skip


def _no_line(count: int, reason: str) -> Line:
    nan = np.nan
    return Line(
        CANNOT_TELL, reason, nan, nan, nan, nan, nan, nan, nan, nan, nan, nan, 0, nan, nan, 1.0, np.full(count, nan)
    )  # fmt: skip


@dataclass(frozen=True)
class OnLine:
    """y on a line at given x, (k,), with its standard deviation and interval."""

    value: FloatArray
    sd: FloatArray
    low: FloatArray
    high: FloatArray


def predict_line(
    line: Line, x: FloatArray, sd_x: FloatArray | float = 0.0, confidence: float = 0.95
) -> OnLine:
    """y = intercept + slope x at x (k,) known to sd_x, to first order; nan where there is no line.

    The line's part of the variance is times its scale. A new point scatters about the line by its own error besides.
    """
    x = np.asarray(x, dtype=np.float64)
    value = line.intercept + line.slope * x
    own = (line.slope * np.asarray(sd_x)) ** 2
    sd = np.sqrt(line.scale * (line.mean_se**2 + ((x - line.centre_x) * line.slope_se) ** 2) + own)
    half = line.quantile(confidence) * sd
    return OnLine(value, sd, value - half, value + half)


def predict_new(
    line: Line, x: FloatArray, sd_x: FloatArray | float = 0.0, confidence: float = 0.95
) -> OnLine:
    """As `predict_line`, for a further case and not the line: with the scatter of the points beyond their errors.

    That scatter is taken as (scale - 1) times the points' typical variance, n / sum of weights; none where scale is 1.
    """
    on_line = predict_line(line, x, sd_x, confidence)
    points = line.dof + 2
    scatter = (line.scale - 1.0) * points * line.mean_se**2
    sd = np.sqrt(on_line.sd**2 + scatter)
    half = line.quantile(confidence) * sd
    return OnLine(on_line.value, sd, on_line.value - half, on_line.value + half)


def line_without_each(
    x: FloatArray,
    y: FloatArray,
    sd_x: FloatArray,
    sd_y: FloatArray,
    correlation: FloatArray | float = 0.0,
) -> list[Line]:
    """The line without each point in turn, (n,)."""
    correlation = np.broadcast_to(np.asarray(correlation, dtype=np.float64), np.shape(x))
    kept = [np.arange(len(x)) != index for index in range(len(x))]
    return [york_line(x[keep], y[keep], sd_x[keep], sd_y[keep], correlation[keep]) for keep in kept]
