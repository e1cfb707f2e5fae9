"""Lattice-strain fits: known truth, coverage, covariance, limits, priors, overlap, and what cannot be told."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchmarks.lattice_strain import CRYSTALS, EIGHTFOLD, curve_coverage, main, overlap_coverage
from tieline.statistics.lattice_strain import Coefficients, Prior, fit_curve, fit_curves, lattice_strain
from tieline.statistics.lattice_strain_overlap import compare_overlap, compare_overlaps, fit_both
from tieline.statistics.lattice_strain_prediction import influences, leave_one_out, predict, predictions
from tieline.statistics.lattice_strain_stack import stack
from tieline.statistics.least_squares import minimise

T = 1573.15


def exact(D0=0.5, r0=1.02, E=290.0, relative=0.05, radius=EIGHTFOLD, fraction=0.0) -> Coefficients:
    D = lattice_strain(radius, T, D0, r0, E)
    D = D + fraction * (1 - D)
    return Coefficients(radius, D, (relative * D) ** 2)


def noisy(seed: int, relative=0.05, fraction=0.0) -> Coefficients:
    data = exact(relative=relative, fraction=fraction)
    noise = 1 + relative * np.random.default_rng(seed).standard_normal(len(data.value))
    return replace(data, value=data.value * noise)


@given(st.floats(0.001, 50), st.floats(0.93, 1.1), st.floats(80, 800))
@settings(max_examples=40, deadline=None)
def test_exact_values_give_their_parameters_back(D0, r0, E):
    fit = fit_curve(exact(D0, r0, E), T)
    assert fit.verdict == "fitted"
    assert (fit.D0.value, fit.r0.value, fit.E.value) == pytest.approx((D0, r0, E), rel=1e-3)
    assert fit.chi_square < 1e-4
    assert fit.D0.low < D0 < fit.D0.high
    assert fit.E.low < E < fit.E.high


@pytest.mark.parametrize(
    ("kind", "error"), [("independent", "2-20 %"), ("proportional", 0.2), ("shared", 0.1)]
)
def test_intervals_cover(kind, error):
    cases = 40
    figures = curve_coverage(CRYSTALS[0], error, kind, cases, 5)
    assert figures["told"] == 1.0
    for name in ("D0", "r0", "E"):
        assert figures[name] > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases), name


def test_overlap_intervals_cover():
    cases = 15
    figures = overlap_coverage(CRYSTALS[1], 0.05, "independent", 0.005, cases, 6)
    lowest = 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases)
    assert figures["f"] > lowest
    assert figures["corrected"] > lowest
    assert figures["found"] > 0.9


def test_the_benchmark_runs(capsys):
    assert main(["--quick", "--cases", "2"]) == 0
    assert capsys.readouterr().out.count("clinopyroxene-like") == 5


@given(st.integers(0, 10_000))
@settings(max_examples=4, deadline=None)
def test_series_side_by_side_give_what_they_give_alone(seed):
    rng = np.random.default_rng(seed)
    data, priors = [], []
    for case in range(6):
        kept = np.sort(rng.choice(11, rng.integers(5, 12), replace=False))
        relative = 0.02 * 10.0 ** rng.uniform(size=len(kept))
        D = lattice_strain(EIGHTFOLD[kept], T, 0.5, 1.02, 290.0) * (0.99 if case % 2 else 1.0) + 0.005
        D = D * (1 + relative * rng.standard_normal(len(kept)))
        limit = {"limit_radius": np.array([1.25]), "limit": np.array([0.05]), "limit_sd": np.array([0.01])}
        data.append(
            Coefficients(
                EIGHTFOLD[kept], D, (relative * D) ** 2, np.full((len(kept),) * 2, 0.02**2),
                dof=np.full(len(kept), 5.0 + case), **(limit if case == 2 else {}),
            )
        )  # fmt: skip
        priors.append(
            {"E": Prior(300.0, 30.0)} if case == 3 else {"r0": Prior(1.02, 0.0)} if case == 4 else {}
        )
    together = compare_overlaps(data, *fit_both(data, [T] * 6, priors=priors))
    radius = np.array([1.126, 0.9])
    curves = predictions([both.plain for both in together], [radius] * 6)
    left_out = influences([both.plain for both in together])
    for both, one, known, curve, leaving in zip(together, data, priors, curves, left_out, strict=True):
        alone = compare_overlap(one, T, priors=known)
        assert (both.verdict, both.joint.verdict) == (alone.verdict, alone.joint.verdict)
        assert both.p_value == pytest.approx(alone.p_value, rel=1e-4, abs=1e-6, nan_ok=True)
        for pair in ((both.plain, alone.plain), (both.joint, alone.joint)):
            for name in ("D0", "r0", "E", "overlap"):
                first, second = (getattr(fit, name) for fit in pair)
                assert first.status == second.status
                ends = [(e.value, e.low, e.high) for e in (first, second)]
                assert ends[0] == pytest.approx(ends[1], rel=5e-3, abs=1e-6, nan_ok=True)
        np.testing.assert_allclose(both.corrected.high, alone.corrected.high, rtol=5e-3, atol=1e-6)
        np.testing.assert_allclose(
            leaving.deleted_sigmas, leave_one_out(alone.plain).deleted_sigmas, rtol=5e-3, atol=1e-3
        )
        np.testing.assert_allclose(curve.low, predict(alone.plain, radius).low, rtol=5e-3)


def test_nothing_to_fit():
    assert fit_curves([], []) == []
    assert compare_overlaps([], *fit_both([], [])) == []
    assert predictions([], []) == []


def test_values_that_are_nearly_all_floor_tell_the_floor_though_not_the_curve():
    radius = CRYSTALS[2].radius
    D = lattice_strain(radius, T, 0.15, 0.74, 360.0)
    rng = np.random.default_rng(12)
    open_curves = 0
    for _ in range(8):
        apparent = (D + 0.01 * (1 - D)) * (1 + 0.2 * rng.standard_normal(11))
        both = compare_overlap(Coefficients(radius, apparent, (0.2 * (D + 0.01)) ** 2), T)
        open_curves += both.joint.verdict == "cannot tell"
        assert both.verdict == "overlap"
        assert both.joint.overlap.low < both.joint.overlap.value < both.joint.overlap.high < 0.02
        assert np.all(both.corrected.low <= both.corrected.high)
    assert open_curves > 2


def test_order_of_elements_is_irrelevant():
    data = noisy(1)
    back = Coefficients(data.radius[::-1], data.value[::-1], data.variance[::-1])
    assert fit_curve(back, T).E.value == pytest.approx(fit_curve(data, T).E.value, rel=1e-6)


def test_scaling_every_value_scales_only_the_level():
    data = noisy(2)
    fit, ten = (
        fit_curve(data, T),
        fit_curve(Coefficients(data.radius, 10 * data.value, 100 * data.variance), T),
    )
    assert ten.D0.value == pytest.approx(10 * fit.D0.value, rel=1e-6)
    assert (ten.r0.value, ten.E.value) == pytest.approx((fit.r0.value, fit.E.value), rel=1e-6)


def test_a_shared_error_widens_the_level_and_nothing_else():
    data = noisy(3)
    plain = fit_curve(data, T)
    shared = fit_curve(replace(data, relative_covariance=np.full((11, 11), 0.1**2)), T)
    assert shared.D0.value == pytest.approx(plain.D0.value, rel=0.01)
    assert np.sqrt(shared.covariance[0, 0]) == pytest.approx(
        np.hypot(np.sqrt(plain.covariance[0, 0]), 0.1), rel=0.02
    )
    assert shared.E.sd == pytest.approx(plain.E.sd, rel=0.02)
    assert shared.r0.sd == pytest.approx(plain.r0.sd, rel=0.02)


def test_covariance_is_that_of_repeated_measurement():
    fits = [fit_curve(noisy(seed, 0.03), T) for seed in range(60)]
    drawn = np.cov([[np.log(fit.D0.value), fit.r0.value, fit.E.value] for fit in fits], rowvar=False)
    stated = np.mean([fit.covariance[:3, :3] for fit in fits], axis=0)
    scale = np.sqrt(np.outer(np.diag(stated), np.diag(stated)))
    np.testing.assert_allclose(drawn / scale, stated / scale, atol=0.45)


def test_jacobian_against_differences():
    data = replace(
        exact(fraction=0.01), limit_radius=np.array([1.2]), limit=np.array([0.05]), limit_sd=np.array([0.02])
    )
    problem, _errors = stack([data], [T], [{"r0": Prior(1.0, 0.05), "E": Prior(250.0, 80.0)}])
    theta, step = np.array([[-0.8, 1.01, 5.6, 0.02]]), 1e-6
    _residuals, jacobian = problem.residuals(theta)
    for index in range(4):
        shift = np.zeros((1, 4))
        shift[0, index] = step
        slope = (problem.residuals(theta + shift)[0] - problem.residuals(theta - shift)[0]) / (2 * step)
        np.testing.assert_allclose(jacobian[0, :, index], slope[0], rtol=1e-5, atol=1e-5)


def test_limits_act_as_bounds():
    data = noisy(4)
    kept = Coefficients(data.radius[1:], data.value[1:], data.variance[1:])
    free = fit_curve(kept, T)
    lanthanum = predict(free, np.array([1.16])).value[0]

    def with_limit(limit: float):
        return fit_curve(
            replace(
                kept, limit_radius=np.array([1.16]), limit=np.array([limit]), limit_sd=np.array([limit / 10])
            ),
            T,
        )

    assert with_limit(10 * lanthanum).E.value == pytest.approx(free.E.value, rel=1e-4)
    assert with_limit(0.5 * lanthanum).E.value > free.E.value + free.E.sd


def test_prior_fills_in_for_missing_elements_and_is_named():
    two = Coefficients(EIGHTFOLD[[0, 6]], exact().value[[0, 6]], exact().variance[[0, 6]])
    assert fit_curve(two, T).verdict == "cannot tell"
    fit = fit_curve(two, T, priors={"r0": Prior(1.02, 0.0), "E": Prior(250.0, 100.0)})
    assert fit.verdict == "fitted"
    assert fit.r0.status == "fixed"
    assert fit.E.value == pytest.approx(290, rel=0.05)
    assert fit.E.status == "fitted"
    one = Coefficients(EIGHTFOLD[[6]], exact().value[[6]], exact().variance[[6]])
    single = fit_curve(one, T, priors={"r0": Prior(1.02, 0.0), "E": Prior(250.0, 100.0)})
    assert single.E.status == "prior"
    assert single.D0.value == pytest.approx(0.5, rel=0.05)


@pytest.mark.parametrize(
    ("radius", "reason"),
    [
        ([1.16, 1.02], "different radii"),
        ([1.16, 1.16, 1.02, 1.02], "different radii"),
        ([], "different radii"),
    ],
)
def test_too_few_radii(radius, reason):
    radius = np.array(radius)
    data = Coefficients(radius, np.full(len(radius), 0.3), np.full(len(radius), 1e-4))
    fit = fit_curve(data, T)
    assert fit.verdict == "cannot tell"
    assert reason in fit.reason
    assert np.isnan(fit.D0.value)
    assert np.isnan(predict(fit, np.array([1.1])).value[0])
    assert np.isnan(leave_one_out(fit).deleted_sigmas).all()


def test_values_that_bend_the_wrong_way_have_no_curve():
    radius = np.array([0.9, 0.95, 1.0, 1.05, 1.1])
    valley = 1 / lattice_strain(radius, T, 1.0, 1.0, 300.0)
    fit = fit_curve(Coefficients(radius, valley, (0.02 * valley) ** 2), T)
    assert fit.verdict == "cannot tell"
    assert np.isnan(fit.E.value)


def test_one_side_of_r0_is_said():
    radius = EIGHTFOLD[:6]
    D = lattice_strain(radius, T, 5.0, 0.93, 600.0)
    fit = fit_curve(Coefficients(radius, D, (0.005 * D) ** 2), T)
    assert fit.verdict == "fitted"
    assert any("one side" in remark for remark in fit.remarks)
    unsure = fit_curve(Coefficients(radius[:4], D[:4], (0.2 * D[:4]) ** 2), T)
    assert unsure.verdict == "cannot tell"
    assert "no limit" in unsure.reason


def test_values_off_the_curve_widen_the_intervals_and_are_named():
    data = noisy(5, 0.02)
    broken = replace(data, value=data.value * np.array([1, 1.4, 1, 0.7, 1, 1.3, 1, 0.8, 1, 1, 1]))
    fit = fit_curve(broken, T)
    assert fit.p_value < 1e-6
    assert fit.scale == pytest.approx(fit.chi_square / fit.dof)
    assert any("more than their errors" in remark for remark in fit.remarks)
    assert fit.E.high - fit.E.low > 5 * (fit_curve(data, T).E.high - fit_curve(data, T).E.low)


def test_leave_one_out_finds_the_odd_one():
    data = noisy(6, 0.03)
    value = data.value.copy()
    value[4] *= 1.5
    odd = replace(data, value=value)
    influence = leave_one_out(fit_curve(odd, T))
    assert int(np.nanargmax(np.abs(influence.deleted_sigmas))) == 4
    direct = fit_curve(
        Coefficients(np.delete(data.radius, 4), np.delete(value, 4), np.delete(data.variance, 4)), T
    )
    fit = fit_curve(odd, T)
    assert influence.shift[4, 2] == pytest.approx(
        np.log(direct.E.value / fit.E.value) / np.sqrt(fit.log_covariance[2, 2]), rel=1e-3
    )


def test_prediction_at_a_radius_is_the_profile_there():
    data = noisy(7, 0.1)
    fit = fit_curve(data, T)
    guess = predict(fit, np.array([1.126]))
    # at its limits the best fit through that D is worse by the cut, 1.96²
    for end in (guess.low[0], guess.high[0]):
        problem = replace(fit.problem, reference=np.array([1.126]))
        start = np.array([[np.log(end), *fit.theta[1:]]])
        best = minimise(
            problem.residuals, start, np.array([[False, True, True, False]]), problem.lower, problem.upper
        )
        assert best.sum_of_squares[0] - fit.chi_square == pytest.approx(1.96**2, rel=0.01)


def test_overlap_is_told_from_a_curve():
    radius = CRYSTALS[1].radius
    D = lattice_strain(radius, T, 0.15, 0.79, 320.0)
    rng = np.random.default_rng(9)
    for fraction, verdict in ((0.0, "curve alone"), (0.005, "overlap")):
        apparent = (D + fraction * (1 - D)) * (1 + 0.05 * rng.standard_normal(len(D)))
        both = compare_overlap(Coefficients(radius, apparent, (0.05 * apparent) ** 2), T)
        assert both.verdict == verdict
        assert both.joint.overlap.low <= fraction <= both.joint.overlap.high
    assert both.plain.p_value < 0.05
    assert both.corrected.value[0] < 0.2 * apparent[0]
    assert both.corrected.low[0] <= D[0] <= both.corrected.high[0]


def test_four_values_leave_nothing_to_correct_one_by_the_others():
    D = lattice_strain(EIGHTFOLD[[0, 4, 6, 10]], T, 0.5, 1.0, 500.0) + 0.01
    both = compare_overlap(Coefficients(EIGHTFOLD[[0, 4, 6, 10]], D, (0.001 * D) ** 2), T)
    assert both.joint.dof == 0
    assert np.isnan(both.joint.p_value)
    assert both.joint.overlap.low < 0.01 < both.joint.overlap.high
    assert (both.corrected.low[0], both.corrected.high[0]) == pytest.approx((0.0, D[0]), abs=0.002)


def test_overlap_and_curve_from_four_values_or_fewer():
    data = exact(radius=EIGHTFOLD[[0, 4, 10]])
    both = compare_overlap(data, T)
    assert both.verdict == "cannot tell"
    assert both.reason
    assert np.isnan(both.corrected.value).all()


@pytest.mark.parametrize(
    "change",
    [
        {"value": np.full(11, np.nan)},
        {"variance": np.zeros(11)},
        {"radius": EIGHTFOLD[:5]},
        {"relative_covariance": np.eye(3)},
        {"limit": np.array([0.1])},
    ],
)
def test_impossible_data_are_refused(change):
    with pytest.raises(ValueError, match=r"need|finite"):
        replace(exact(), **change)


def test_impossible_settings_are_refused():
    with pytest.raises(ValueError, match="temperature"):
        fit_curve(exact(), -5.0)
    with pytest.raises(ValueError, match="prior"):
        fit_curve(exact(), T, priors={"radius": Prior(1.0, 0.1)})
    with pytest.raises(ValueError, match="prior"):
        fit_curve(exact(), T, priors={"E": Prior(-1.0, 0.1)})
