"""Errors known from few values: the formulas where they are known for a mean, and what they do to a curve."""

from dataclasses import replace

import numpy as np
import pytest

from benchmarks.lattice_strain import CRYSTALS, EIGHTFOLD, curve_coverage
from tieline.statistics.lattice_strain import Coefficients, Prior, fit_curve, fit_curves, lattice_strain
from tieline.statistics.lattice_strain_few import Linear, f_tail, quantile
from tieline.statistics.lattice_strain_overlap import compare_overlap

T = 1573.15
VARIANCE, DOF = np.array([0.01, 0.02, 0.05, 0.04]), np.array([4.0, 6.0, 3.0, 10.0])


def mean_of_four() -> Linear:
    """ln D0 alone from four values of D = 1: a weighted mean."""
    data = Coefficients(np.full(4, 1.0), np.ones(4), VARIANCE, dof=DOF)
    fit = fit_curve(data, T, priors={"r0": Prior(1.0, 0.0), "E": Prior(300.0, 0.0)})
    return Linear.of(fit.problem, fit.theta[None], fit.log_covariance[None])


def test_a_weighted_mean_has_meiers_variance_and_degrees_of_freedom():
    factor, dof = mean_of_four().few(np.eye(4)[[0]])
    share = (1 / VARIANCE) / np.sum(1 / VARIANCE)
    assert factor[0] == pytest.approx(1 + 4 * np.sum(share * (1 - share) / DOF))
    assert dof[0] == pytest.approx(1 / np.sum(share**2 / DOF))


def test_the_scatter_about_a_weighted_mean_is_judged_as_by_welch():
    divisor, second = mean_of_four().scatter(np.array([3.0]))
    share = (1 / VARIANCE) / np.sum(1 / VARIANCE)
    left = np.sum((1 - share) ** 2 / DOF)
    assert divisor[0] == pytest.approx(1 + 2 * (4 - 2) / (4**2 - 1) * left)
    assert second[0] == pytest.approx((4**2 - 1) / (3 * left))


def test_known_errors_leave_the_normal_quantile():
    data = Coefficients(EIGHTFOLD, lattice_strain(EIGHTFOLD, T, 0.5, 1.02, 290.0), np.full(11, 1e-4))
    fit = fit_curve(data, T)
    linear = Linear.of(fit.problem, fit.theta[None], fit.log_covariance[None])
    factor, dof = linear.few(np.eye(4)[[1]])
    assert factor[0] == 1.0
    assert quantile(dof, 0.95)[0] == pytest.approx(1.959964)
    assert fit_curve(replace(data, dof=np.full(11, 1e8)), T).E.high == pytest.approx(fit.E.high, rel=1e-5)


def test_fewer_degrees_of_freedom_widen_every_interval_and_no_value():
    D = lattice_strain(EIGHTFOLD, T, 0.5, 1.02, 290.0)
    noise = 1 + 0.05 * np.random.default_rng(3).standard_normal(11)
    known = Coefficients(EIGHTFOLD, D * noise, (0.05 * D) ** 2)
    wide, wider = (replace(known, dof=np.full(11, dof)) for dof in (12.0, 4.0))
    fits = fit_curves([known, wide, wider], [T] * 3)
    for name in ("D0", "r0", "E"):
        values = [getattr(fit, name) for fit in fits]
        assert [one.value for one in values] == pytest.approx([values[0].value] * 3)
        widths = [one.high - one.low for one in values]
        assert widths[0] < widths[1] < widths[2]
    assert fits[0].p_value < fits[2].p_value
    assert fits[0].excess < fits[2].excess
    both = [compare_overlap(one, T) for one in (known, wider)]
    assert both[0].joint.overlap.high < both[1].joint.overlap.high


def test_the_tail_goes_over_into_chi_square():
    dof, ratio = np.full(3, 8.0), np.full(3, 1.9)
    tails = f_tail(dof, np.array([1e5, 1e6, 1e9]), ratio)
    assert tails == pytest.approx([tails[2]] * 3, rel=2e-3)


def test_intervals_cover_where_errors_come_from_few_spots():
    # with the normal quantile these cover about 0.92
    cases = 1500
    figures = curve_coverage(CRYSTALS[0], "2-20 %", "few spots", cases, 12)
    lowest = 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases)
    for name in ("D0", "r0", "E", "predicted"):
        assert lowest < figures[name] < 0.985, name
