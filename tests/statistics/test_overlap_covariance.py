"""The variance function, generalized least squares against dense algebra, and the spread against Paule & Mandel."""

import numpy as np
import pytest

from tieline.statistics.means import paule_mandel
from tieline.statistics.overlap_covariance import (
    VarianceFunction,
    element_inflation,
    fit_directions,
    fit_variance_function,
    leverages,
    nuisance_directions,
    raise_spread,
)


def test_variance_function_recovers_exact_coefficients():
    x = np.linspace(0.1, 50, 20)[None, :, None] * np.ones((3, 1, 2))
    truth = np.array([0.5, 0.2, 0.001])
    sigma = np.sqrt(truth[0] + truth[1] * x + truth[2] * x**2)
    function = fit_variance_function(x, sigma)
    np.testing.assert_allclose(function.constant, truth[0], rtol=1e-3)
    np.testing.assert_allclose(function.linear, truth[1], rtol=1e-3)
    np.testing.assert_allclose(function.quadratic, truth[2], rtol=1e-3)
    np.testing.assert_allclose(function.at(x), sigma**2, rtol=1e-4)
    np.testing.assert_allclose(function.at(np.full((3, 2), 7.0)), truth @ [1, 7, 49], rtol=1e-4)


def test_variance_at_the_mean_is_unbiased_for_few_counts():
    """Sigmas from observed counts follow their own value; the function at the mean must not be low for it."""
    rng = np.random.default_rng(4)
    counts = rng.poisson(12.0, (4000, 6, 1)) * 1.0
    function = fit_variance_function(counts, np.sqrt(np.maximum(counts, 1)))
    at_truth = function.at(np.full((4000, 1), 12.0))
    assert at_truth.mean() == pytest.approx(12.0, rel=0.05)
    own_weight = np.sum(counts / np.maximum(counts, 1), axis=1) / np.sum(1 / np.maximum(counts, 1), axis=1)
    assert own_weight.mean() < 11.4  # what weights from the spot's own sigma do to the mean


@pytest.mark.parametrize("order", ["falling", "flat"])
def test_no_term_is_negative_whatever_the_sigmas(order):
    x = np.linspace(1, 2, 8)[None, :, None] * np.ones((1, 1, 1))
    sigma = 3.0 - x if order == "falling" else np.full_like(x, 0.7)
    function = fit_variance_function(x, sigma)
    assert function.constant >= 0
    assert function.linear >= 0
    assert function.quadratic >= 0
    if order == "flat":
        np.testing.assert_allclose(function.at(np.full((1, 1), 1.5)), 0.49, rtol=1e-6)


def test_one_known_sigma_is_the_same_at_every_concentration():
    """All terms do equally well then; which is taken must not be left to rounding."""
    rng = np.random.default_rng(5)
    x = rng.uniform(1.0, 90.0, (200, 5, 1))
    sigma = np.full(x.shape, np.nan)
    sigma[:, 2] = rng.uniform(0.1, 2.0, (200, 1))
    function = fit_variance_function(x, sigma)
    np.testing.assert_allclose(function.constant, sigma[:, 2] ** 2, rtol=1e-8)
    assert not function.linear.any()
    assert not function.quadratic.any()


def test_terms_are_the_best_non_negative_ones_whatever_the_scatter():
    from scipy.optimize import nnls

    rng = np.random.default_rng(6)
    x, sigma = rng.uniform(1.0, 50.0, (1, 12, 30)), rng.uniform(0.5, 2.0, (1, 12, 30))
    function = fit_variance_function(x, sigma)
    for element in range(30):
        at, variance = x[0, :, element], sigma[0, :, element] ** 2
        weight, terms = 1 / variance, np.stack([at**0, at, at**2], axis=1)
        for _ in range(2):
            found = nnls(terms * weight[:, None], variance * weight)[0]
            weight = 1 / np.maximum(terms @ found, 0.05 * variance.mean())
        np.testing.assert_allclose(function.at(x)[0, :, element], terms @ found, rtol=1e-6)


def test_variance_along_a_line_is_that_at_its_points():
    """Also where the line comes from or leads to negative concentrations, or runs along the floor."""
    rng = np.random.default_rng(7)
    shape = (40, 6)
    function = VarianceFunction(
        *(rng.uniform(0.0, 1.0, shape) * rng.integers(0, 2, shape) for _ in range(3)),
        rng.uniform(0, 0.5, shape),
    )
    start, direction = rng.uniform(-2.0, 5.0, shape), rng.uniform(-9.0, 9.0, shape)
    fraction = rng.uniform(0.0, 1.0, (40, 7))
    fraction[:, :2] = [0.0, 1.0]
    points = start[:, None, :] + fraction[..., None] * direction[:, None, :]
    np.testing.assert_allclose(function.along(start, direction, fraction), function.at(points), rtol=1e-12)


def test_unknown_sigmas_give_no_function_and_partly_known_ones_do():
    x = np.ones((1, 4, 2))
    sigma = np.full((1, 4, 2), np.nan)
    sigma[0, :2, 1] = 0.3
    function = fit_variance_function(x, sigma)
    assert np.isnan(function.constant[0, 0])
    np.testing.assert_allclose(function.at(np.ones((1, 2)))[0, 1], 0.09, rtol=1e-6)


def test_fit_directions_is_generalized_least_squares_with_the_full_covariance():
    rng = np.random.default_rng(8)
    groups, spots, elements = 3, 5, 7
    variance = 10 ** rng.uniform(-2, 4, (groups, elements))
    directions = rng.standard_normal((groups, elements, 3)) * np.sqrt(variance)[..., None]
    deviations = rng.standard_normal((groups, spots, elements)) * np.sqrt(variance)[:, None, :]
    measured = rng.uniform(size=deviations.shape) > 0.2
    prior = np.array([np.inf, 0.3, 0.7])
    inverse = np.where(measured, 1 / variance[:, None, :], 0.0)
    fit = fit_directions(np.where(measured, deviations, 0.0), inverse, directions, prior)
    for g in range(groups):
        for s in range(spots):
            here = measured[g, s]
            line = directions[g, here]
            harmless = line[:, 1:]
            covariance = np.diag(variance[g, here]) + harmless @ np.diag(prior[1:]) @ harmless.T
            y = deviations[g, s, here]
            information = line[:, 0] @ np.linalg.solve(covariance, line[:, 0])
            amplitude = line[:, 0] @ np.linalg.solve(covariance, y) / information
            rest = y - amplitude * line[:, 0]
            assert fit.amplitudes[g, s, 0] == pytest.approx(amplitude, rel=1e-6)
            assert fit.variances[g, s, 0] == pytest.approx(1 / information, rel=1e-6)
            assert fit.residual_chi2[g, s] == pytest.approx(
                rest @ np.linalg.solve(covariance, rest), rel=1e-6
            )
            assert fit.degrees_of_freedom[g, s] == here.sum() - 1


def test_a_direction_no_element_sees_has_no_amplitude():
    directions = np.zeros((1, 4, 2))
    directions[0, :, 1] = 1.0
    fit = fit_directions(np.ones((1, 2, 4)), np.ones((1, 2, 4)), directions, np.array([np.inf, 1.0]))
    assert np.all(np.isnan(fit.amplitudes[..., 0]))
    assert np.all(np.isfinite(fit.amplitudes[..., 1]))
    np.testing.assert_array_equal(fit.degrees_of_freedom, 4)


def test_leverages_of_free_directions_sum_to_their_number():
    rng = np.random.default_rng(1)
    inverse = 10 ** rng.uniform(-3, 3, (4, 20))
    directions = rng.standard_normal((4, 20, 3)) / np.sqrt(inverse)[..., None]
    taken = leverages(inverse, directions, np.full(3, np.inf))
    np.testing.assert_allclose(taken.sum(axis=1), 3.0, rtol=1e-6)


def test_spread_equals_paule_and_mandel_for_one_element():
    rng = np.random.default_rng(12)
    level, sigma, spots = 40.0, 1.5, 6
    x = level * (1 + 0.1 * rng.standard_normal((50, spots))) + sigma * rng.standard_normal((50, spots))
    group = np.repeat(np.arange(50), spots)
    expected = paule_mandel(x.ravel(), np.full(x.size, sigma**2), group, 50)
    squared = (x - x.mean(axis=1, keepdims=True))[..., None] ** 2
    constant = np.full(squared.shape, sigma**2)
    one = np.ones((50, 1))
    spread = raise_spread(
        squared, constant, one * level**2, np.ones((50, 1, 1)), one * (spots - 1.0), np.zeros((50, 1)), 8
    )
    np.testing.assert_allclose(spread[:, 0] * level**2, expected, rtol=1e-6, atol=1e-9)


def test_each_class_has_the_spread_it_has_alone_and_elements_of_none_have_no_say():
    rng = np.random.default_rng(13)
    squared, counting = rng.chisquare(1, (2, 30, 6, 5)) * 9.0, rng.uniform(0.5, 2.0, (30, 6, 5))
    level_squared = rng.uniform(1.0, 9.0, (30, 5))
    in_class = np.array([[1.0, 0.0], [1.0, 0.0], [0.0, 1.0], [0.0, 1.0], [0.0, 0.0]]) * np.ones((30, 1, 1))
    expected, start = np.full((30, 2), 10.0), np.zeros((30, 2))
    both = raise_spread(squared[0], counting, level_squared, in_class, expected, start)
    assert np.all(both > 0)
    for column, elements in ((0, slice(0, 2)), (1, slice(2, 4))):
        one = np.ones((30, 2, 1))
        alone = raise_spread(
            squared[0][..., elements],
            counting[..., elements],
            level_squared[:, elements],
            one,
            expected[:, :1],
            start[:, :1],
        )
        np.testing.assert_allclose(both[:, column], alone[:, 0], rtol=1e-12)


def test_inflation_is_one_for_expected_scatter_and_follows_clear_excess():
    degrees = np.array([[9.0, 9.0, 9.0]])
    factor = element_inflation(np.array([[4.0, 9.0, 90.0]]), degrees)
    np.testing.assert_allclose(factor, [[1.0, 1.0, 98 / 17]])


def test_nuisance_directions():
    clean, contaminant = np.array([[2.0, 50.0, 1.0]]), np.array([[200.0, 10.0, 100.0]])
    is_trace = np.array([True, True, False])
    lines, allowed = nuisance_directions(clean, contaminant, is_trace, "yield-and-growth")
    np.testing.assert_allclose(lines[0], [[2.0, 2.0 * 0.99], [50.0, -75.0], [0.0, 0.0]])
    assert allowed == 0.5
    lines, allowed = nuisance_directions(clean, contaminant, is_trace, "yield")
    np.testing.assert_allclose(lines[0, :, 0], clean[0])
    assert np.all(lines[..., 1] == 0)
    assert allowed == 0.03
    with pytest.raises(ValueError, match="growth"):
        nuisance_directions(clean, contaminant, is_trace, "none")
