"""Variances estimated from few values each, drawn towards what they have in common."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def moderated_variance(variance: FloatArray, dof: FloatArray) -> FloatArray:
    """The variances of `moderate`."""
    return moderate(variance, dof)[0]


def moderate(variance: FloatArray, dof: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Empirical-Bayes variances (d0 s0² + d s²) / (d0 + d) and their degrees of freedom d0 + d (Smyth 2004, Stat. Appl.
    Genet. Mol. Biol. 3:3, eq. 6).

    variance: (n,) estimates above zero on a common scale (relative ones, say), dof: (n,) their degrees of freedom. s0² and
    d0, the centre and the sureness of the common part, come from mean and variance of ln s² (ibid. section 6.2): where the
    estimates differ no more than their dof explain, d0 is infinite and all become s0², with the dof of all together. A
    weight 1/s² from few values is large where the scatter happened to be small; moderated ones are not. Estimates with
    infinite or no dof, and fewer than 3 others, are returned as they are.
    """
    from scipy.special import digamma, polygamma

    result, moderated_dof = np.array(variance, dtype=np.float64), np.array(dof, dtype=np.float64)
    usable = np.isfinite(variance) & (variance > 0) & np.isfinite(dof) & (dof > 0)
    if usable.sum() < 3:
        return result, moderated_dof
    half = dof[usable] / 2.0
    centred = np.log(variance[usable]) - digamma(half) + np.log(half)
    mean = float(np.mean(centred))
    excess = float(np.var(centred, ddof=1) - np.mean(polygamma(1, half)))
    if excess <= 0:
        result[usable] = np.exp(mean)
        moderated_dof[usable] = np.sum(dof[usable])
        return result, moderated_dof
    half_prior = _inverse_trigamma(excess)
    common = np.exp(mean + float(digamma(half_prior)) - np.log(half_prior))
    result[usable] = (half_prior * common + half * variance[usable]) / (half_prior + half)
    moderated_dof[usable] = np.minimum(2.0 * (half_prior + half), np.sum(dof[usable]))
    return result, moderated_dof


def _inverse_trigamma(value: float) -> float:
    """x with trigamma(x) = value, by Newton's method on 1/trigamma, which is nearly straight (ibid., appendix)."""
    from scipy.special import polygamma

    x = 0.5 + 1.0 / value
    for _ in range(50):
        trigamma = float(polygamma(1, x))
        step = trigamma * (1.0 - trigamma / value) / float(polygamma(2, x))
        x += step
        if abs(step) < 1e-10 * x:
            break
    return x
