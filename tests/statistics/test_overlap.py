"""Overlap scores: known truth recovered, invariances, and groups that cannot be scored."""

from dataclasses import fields

import numpy as np
import pytest
from scipy.stats import binomtest

import tieline.statistics.overlap as overlap_module
from simulate_spots import oracle_sd_fraction, phase, simulate
from tieline.statistics.overlap import ORACLE_FACTOR, clean_covariance, overlap_scores

PER_SPOT = ("fraction", "sd_fraction", "z", "residual_chi2", "residual_p", "overlapped", "foreign", "clean")


def score(spots, **changes):
    given = {
        "values": spots.values,
        "sigmas": spots.sigmas,
        "contaminant_mean": spots.glass_mean,
        "contaminant_variance": spots.glass_variance,
        "is_trace": spots.phase.is_trace,
    }
    return overlap_scores(**(given | changes))


def some_spots(seed, groups=20, spots=8, host="clinopyroxene", technique="joint", **more):
    rng = np.random.default_rng(seed)
    fraction = np.where(
        rng.uniform(size=(groups, spots)) < 0.3, 10 ** rng.uniform(-3, -1, (groups, spots)), 0.0
    )
    return simulate(rng, fraction, host=host, technique=technique, spread=0.05, **more)


@pytest.mark.parametrize("host", ["olivine", "clinopyroxene", "plagioclase"])
@pytest.mark.parametrize("fraction", [0.001, 0.03, 0.3])
def test_the_fraction_put_in_comes_out(host, fraction):
    rng = np.random.default_rng([1, int(1000 * fraction)])
    put_in = np.zeros((200, 8))
    put_in[:, 2] = fraction
    scores = score(simulate(rng, put_in, host=host, technique="laser", spread=0.05))
    found, sd = scores.fraction[:, 2], scores.sd_fraction[:, 2]
    assert np.median(found) == pytest.approx(fraction, rel=0.02, abs=0.2 * np.median(sd))
    assert scores.overlapped[:, 2].mean() > 0.9
    assert not scores.foreign[:, 2].any()


def test_z_of_clean_spots_is_nearly_standard_normal():
    spots = simulate(np.random.default_rng(2), np.zeros((500, 10)), technique="laser", spread=0.05)
    z = score(spots).z
    # The slab of possible contamination draws the level down by a sixth of a standard deviation.
    assert 0 < z.mean() < 0.25
    assert z.std() == pytest.approx(1.0, abs=0.07)
    assert binomtest(int(np.sum(z > 3)), z.size, 0.004, alternative="greater").pvalue > 1e-3


def test_the_detectable_fraction_is_detected():
    rng = np.random.default_rng(3)
    detectable = np.median(score(simulate(rng, np.zeros((200, 8)), technique="laser")).detectable_fraction)
    fraction = np.zeros((500, 8))
    fraction[:, 0] = detectable
    found = score(simulate(rng, fraction, technique="laser")).overlapped[:, 0]
    assert binomtest(int(found.sum()), 500, 0.95, alternative="less").pvalue > 1e-3
    assert detectable < 1.3 * ORACLE_FACTOR * oracle_sd_fraction(phase("olivine", "laser"))


def test_seven_of_ten_contaminated_are_found_and_three_clean_left():
    rng = np.random.default_rng(4)
    fraction = np.zeros((200, 10))
    fraction[:, :7] = 10 ** rng.uniform(-2.7, -1, (200, 7))
    scores = score(simulate(rng, fraction, host="clinopyroxene", technique="laser", spread=0.05))
    assert scores.overlapped[:, :7].mean() > 0.99
    assert scores.clean[:, 7:].mean() > 0.98
    np.testing.assert_array_equal(scores.n_clean, scores.clean.sum(axis=1))
    truth = phase("clinopyroxene", "laser").host_ppm
    assert np.median(np.abs(scores.level / truth - 1)) < 0.05


def test_scaling_elements_changes_nothing():
    spots = some_spots(5)
    factor = 10 ** np.random.default_rng(6).uniform(-4, 4, len(spots.phase.elements))
    base = score(spots)
    scaled = score(
        spots,
        values=spots.values * factor,
        sigmas=spots.sigmas * factor,
        contaminant_mean=spots.glass_mean * factor,
        contaminant_variance=spots.glass_variance * factor**2,
    )
    for name in PER_SPOT:
        np.testing.assert_allclose(getattr(scaled, name), getattr(base, name), rtol=1e-4, atol=1e-8)
    np.testing.assert_allclose(scaled.level, base.level * factor, rtol=1e-5)


def test_order_of_spots_groups_and_elements_changes_nothing():
    spots = some_spots(7)
    rng = np.random.default_rng(8)
    groups, order, elements = (
        rng.permutation(20),
        rng.permutation(8),
        rng.permutation(len(spots.phase.elements)),
    )
    base = score(spots)
    moved = score(
        spots,
        values=spots.values[groups][:, order][:, :, elements],
        sigmas=spots.sigmas[groups][:, order][:, :, elements],
        contaminant_mean=spots.glass_mean[groups][:, elements],
        contaminant_variance=spots.glass_variance[groups][:, elements],
        is_trace=spots.phase.is_trace[elements],
    )
    for name in PER_SPOT:
        np.testing.assert_allclose(
            getattr(moved, name), getattr(base, name)[groups][:, order], rtol=1e-6, atol=1e-10
        )


def test_padding_and_block_size_change_nothing(monkeypatch):
    spots = some_spots(9, groups=6)
    padded = {
        name: np.full((6, 15, values.shape[2]), np.nan)
        for name, values in (("values", spots.values), ("sigmas", spots.sigmas))
    }
    place = np.array([0, 2, 3, 7, 8, 9, 10, 12])
    padded["values"][:, place], padded["sigmas"][:, place] = spots.values, spots.sigmas
    base, wide = score(spots), score(spots, **padded)
    for name in PER_SPOT:
        np.testing.assert_allclose(getattr(wide, name)[:, place], getattr(base, name), rtol=1e-9)
    assert not wide.clean[:, 1].any()
    monkeypatch.setattr(overlap_module, "_CELLS_AT_ONCE", 1)
    alone = score(spots)
    for field in fields(alone):
        np.testing.assert_allclose(getattr(alone, field.name), getattr(base, field.name), rtol=1e-9)


def test_groups_of_different_size_are_scored_as_if_alone():
    spots = some_spots(10, groups=3, spots=9)
    values, sigmas = spots.values.copy(), spots.sigmas.copy()
    values[1, 5:], sigmas[1, 5:] = np.nan, np.nan
    together = score(spots, values=values, sigmas=sigmas)
    alone = overlap_scores(
        values[1:2, :5],
        sigmas[1:2, :5],
        spots.glass_mean[1:2],
        spots.glass_variance[1:2],
        spots.phase.is_trace,
    )
    np.testing.assert_allclose(together.z[1, :5], alone.z[0], rtol=1e-9)
    assert np.all(np.isnan(together.z[1, 5:]))
    np.testing.assert_array_equal(together.n_scored, [9, 5, 9])


def test_an_element_without_contrast_or_values_or_contaminant_does_no_harm():
    spots = some_spots(11, technique="laser")
    base = score(spots)
    extra = np.full((20, 8, 3), 7.0) + 0.1 * np.random.default_rng(12).standard_normal((20, 8, 3))
    extra[:, :, 1] = np.nan
    glass = np.array([[7.0, 50.0, np.nan]]) * np.ones((20, 1))
    scores = overlap_scores(
        np.concatenate([spots.values, extra], axis=2),
        np.concatenate([spots.sigmas, np.full(extra.shape, 0.1)], axis=2),
        np.concatenate([spots.glass_mean, glass], axis=1),
        np.concatenate([spots.glass_variance, np.full((20, 3), np.nan)], axis=1),
        np.append(spots.phase.is_trace, [False, True, True]),
    )
    # The glass of the first extra element is measured to be the crystal's value within its error: no information.
    np.testing.assert_array_equal(scores.used[:, -3:], [[True, False, False]] * 20)
    assert scores.weight_share[:, -3].max() < 1e-6
    np.testing.assert_allclose(scores.z, base.z, atol=0.05)
    assert np.all(np.isnan(scores.level[:, -2:]))


def test_values_missing_here_and_there_cost_only_their_information():
    spots = some_spots(13, technique="laser")
    missing = np.random.default_rng(14).uniform(size=spots.values.shape) < 0.1
    scores = score(spots, values=np.where(missing, np.nan, spots.values))
    assert np.all(np.isfinite(scores.z))
    strong = spots.fraction > 0.005
    assert scores.overlapped[strong].all()
    np.testing.assert_array_equal(scores.residual_dof, (~missing & scores.used[:, None, :]).sum(axis=2) - 1.0)


def test_values_below_the_limit_given_as_half_of_it_keep_power_and_false_alarms():
    of = phase("olivine", "laser")
    limit = 3 * np.sqrt(of.variance(np.zeros_like(of.host_ppm)))
    rng = np.random.default_rng(23)
    fraction = np.zeros((400, 8))
    fraction[:, 0] = 1.4 * ORACLE_FACTOR * oracle_sd_fraction(of)
    spots = simulate(rng, fraction, technique="laser")
    below = spots.values < limit
    assert below.mean() > 0.1
    halved = score(
        spots,
        values=np.where(below, limit / 2, spots.values),
        sigmas=np.where(below, limit / 2, spots.sigmas),
    )
    assert binomtest(int(halved.overlapped[:, 0].sum()), 400, 0.95, alternative="less").pvalue > 1e-3
    alarms = halved.overlapped[:, 1:]
    assert binomtest(int(alarms.sum()), alarms.size, 0.004, alternative="greater").pvalue > 1e-3


@pytest.mark.parametrize("case", ["two spots", "no contaminant", "one element", "nothing"])
def test_what_cannot_be_scored_has_no_score_and_no_finding(case):
    spots = some_spots(15, groups=2)
    values, glass = spots.values.copy(), spots.glass_mean.copy()
    if case == "two spots":
        values[0, 2:] = np.nan
    elif case == "no contaminant":
        glass[0] = np.nan
    elif case == "one element":
        values[0, :, 1:] = np.nan
    else:
        values[0] = np.nan
    scores = score(spots, values=values, contaminant_mean=glass)
    assert np.all(np.isnan(scores.z[0]))
    assert not (scores.overlapped[0] | scores.foreign[0] | scores.clean[0]).any()
    assert scores.n_scored[0] == 0
    assert np.isnan(scores.detectable_fraction[0])
    assert np.all(np.isfinite(scores.z[1]))


def test_identical_directions_without_any_contrast_are_not_scored():
    values = 5.0 + 0.1 * np.random.default_rng(16).standard_normal((1, 6, 4))
    clean = np.full((1, 4), 5.0)
    scores = overlap_scores(
        values, np.full(values.shape, 0.1), clean, np.zeros((1, 4)), np.ones(4, dtype=bool)
    )
    assert not scores.overlapped.any()


def test_an_inclusion_is_something_else():
    rng = np.random.default_rng(17)
    spots = simulate(rng, np.zeros((200, 8)), host="olivine", technique="laser", spread=0.05)
    names = list(spots.phase.elements)
    for name, factor in (("V", 3.0), ("Sc", 2.0), ("Co", 0.5)):
        spots.values[:, 1, names.index(name)] *= factor
    scores = score(spots)
    assert scores.foreign[:, 1].mean() > 0.99
    assert np.delete(scores.foreign, 1, axis=1).mean() < 0.01
    assert np.delete(scores.overlapped, 1, axis=1).mean() < 0.01


def test_scatter_against_the_stated_sigma_is_told():
    spots = simulate(np.random.default_rng(18), np.zeros((200, 10)), technique="laser")
    for factor in (0.5, 1.0, 1.5):
        scores = score(spots, sigmas=factor * spots.sigmas)
        assert np.median(scores.mswd[:, 1]) == pytest.approx(factor**-2, rel=0.08)
        assert np.all(np.isnan(scores.mswd[:, 0]))
        assert scores.overlapped.mean() < 0.01


def test_all_spots_somewhat_contaminated_are_overdispersed():
    rng = np.random.default_rng(19)
    sd = oracle_sd_fraction(phase("olivine", "laser"))
    some = score(simulate(rng, sd * rng.exponential(3.0, (300, 10)), technique="laser"))
    none = score(simulate(rng, np.zeros((300, 10)), technique="laser"))
    assert (some.overdispersion_p < 0.01).mean() > 0.8
    assert (
        binomtest(int(np.sum(none.overdispersion_p < 0.01)), 300, 0.02, alternative="greater").pvalue > 1e-3
    )
    assert np.all(none.overdispersion_dof <= 9)


@pytest.mark.parametrize("host", ["olivine", "clinopyroxene", "plagioclase"])
def test_crystal_in_glass(host):
    rng = np.random.default_rng(20)
    fraction = np.zeros((200, 10))
    fraction[:, 0] = 0.08
    spots = simulate(rng, fraction, host=host, technique="probe", exchanged=True)
    scores = score(spots, nuisance="yield")
    assert scores.overlapped[:, 0].mean() > 0.99
    assert scores.overlapped[:, 1:].mean() < 0.006
    assert np.median(scores.fraction[:, 0]) == pytest.approx(0.08, rel=0.05)


def test_covariance_of_the_level_is_that_of_repeated_groups():
    spots = simulate(np.random.default_rng(21), np.zeros((400, 8)), host="clinopyroxene", technique="laser")
    scores = score(spots)
    stated = clean_covariance(scores)
    observed = np.cov(scores.level.T)
    ratio = np.sqrt(np.diagonal(stated, axis1=1, axis2=2).mean(axis=0) / np.diag(observed))
    assert 0.85 < np.median(ratio) < 1.25
    assert np.all(np.linalg.eigvalsh(stated / scores.level[:, :, None] / scores.level[:, None, :]) > -1e-12)


def test_wrong_shapes_and_names_are_refused():
    spots = some_spots(22, groups=2)
    with pytest.raises(ValueError, match="is_trace has shape"):
        score(spots, is_trace=np.array([True]))
    with pytest.raises(ValueError, match="contaminant_mean"):
        score(spots, contaminant_mean=spots.glass_mean[:1])
    with pytest.raises(ValueError, match="nuisance"):
        score(spots, nuisance="growth")
