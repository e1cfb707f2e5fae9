"""Mixing proportions: known truth, coverage, non-negativity, losses, and systems without a single answer."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.statistics.mass_balance import mix, shortfall

# invented compositions, oxide wt%: SiO2 TiO2 Al2O3 FeO MgO CaO Na2O K2O
CRYSTAL_A = [40.0, 0.05, 0.05, 10.0, 49.0, 0.2, 0.01, 0.0]
CRYSTAL_B = [51.0, 0.6, 4.5, 5.0, 16.5, 21.5, 0.3, 0.0]
MELT = [50.0, 1.5, 16.0, 9.0, 7.0, 11.5, 2.8, 0.3]
PHASES = np.array([CRYSTAL_A, CRYSTAL_B, MELT]).T


def errors(values: np.ndarray) -> np.ndarray:
    return 0.01 * values + 0.03


@given(st.floats(0.01, 1), st.floats(0.01, 1), st.floats(0.01, 1))
@settings(max_examples=30, deadline=None)
def test_exact_mixtures_come_apart(a, b, c):
    truth = np.array([a, b, c])
    start = PHASES @ truth
    found = mix(start, errors(start), PHASES, errors(PHASES))
    np.testing.assert_allclose(found.proportions, truth, atol=1e-5)
    np.testing.assert_allclose(found.unweighted, truth, atol=1e-5)
    assert found.squares < 1e-6
    assert found.total == pytest.approx(truth.sum(), abs=1e-5)


@pytest.mark.parametrize("truth", [[0.2, 0.15, 0.65], [0.2, 0.0, 0.8]])
@pytest.mark.parametrize("sum_to_one", [True, False])
def test_intervals_cover(truth, sum_to_one):
    rng = np.random.default_rng(4)
    truth, start = np.array(truth), PHASES @ np.array(truth)
    hits, rejected, cases = np.zeros(3), 0, 60
    for _ in range(cases):
        found = mix(
            start + errors(start) * rng.standard_normal(8), errors(start),
            PHASES + errors(PHASES) * rng.standard_normal(PHASES.shape), errors(PHASES), sum_to_one=sum_to_one,
        )  # fmt: skip
        hits += (found.low <= truth) & (truth <= found.high)
        rejected += found.p_value < 0.05
        assert np.all(found.proportions >= 0)
        if sum_to_one:
            assert found.total == pytest.approx(1.0, abs=3e-4)
    assert np.all(hits / cases > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases))
    assert rejected / cases < 0.05 + 3.5 * np.sqrt(0.95 * 0.05 / cases)


def test_errors_in_the_phases_count():
    start = PHASES @ np.array([0.2, 0.15, 0.65])
    sure = mix(start, errors(start), PHASES, 1e-6 + 0 * PHASES)
    unsure = mix(start, errors(start), PHASES, errors(PHASES))
    assert np.all(unsure.sd > 1.1 * sure.sd)


def test_a_phase_that_is_not_there_gets_an_upper_limit():
    start = PHASES[:, [0, 2]] @ np.array([0.3, 0.7]) - 0.02 * PHASES[:, 1]
    found = mix(start, errors(start), PHASES, errors(PHASES))
    assert found.proportions[1] == 0
    assert found.low[1] == 0
    assert np.isnan(found.sd[1])
    assert 0 < found.high[1] < 0.1


def test_a_missing_phase_shows_in_the_residuals():
    start = PHASES @ np.array([0.2, 0.2, 0.6])
    found = mix(start, errors(start), PHASES[:, [0, 2]], errors(PHASES[:, [0, 2]]))
    assert found.p_value < 1e-6
    assert found.scale > 1
    assert found.sigmas[5] == max(found.sigmas)  # CaO, which only the missing crystal is rich in


def test_loss_of_an_element_and_its_significance():
    rng = np.random.default_rng(8)
    truth, iron = np.array([0.2, 0.15, 0.65]), 3
    kept = np.arange(8) != iron
    start = PHASES @ truth
    measured = PHASES.copy()
    measured[iron] *= 0.85  # the charge lost 15 % of its iron
    hits, seen, cases = 0, 0, 80
    for _ in range(cases):
        phases = measured + errors(measured) * rng.standard_normal(measured.shape)
        given_ = start + errors(start) * rng.standard_normal(8)
        found = mix(given_[kept], errors(start)[kept], phases[kept], errors(phases)[kept])
        lost = shortfall(found, given_[~kept], errors(start)[~kept], phases[~kept], errors(phases)[~kept])
        hits += lost.low[0] <= 0.15 <= lost.high[0]
        seen += lost.p_value[0] < 0.05
    assert hits / cases > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases)
    assert seen == cases


def test_systems_without_a_single_answer_say_so():
    start = PHASES @ np.array([0.2, 0.15, 0.65])
    twice = np.column_stack([PHASES, PHASES[:, 0] * 0.5 + PHASES[:, 2] * 0.5])
    for components, rows in ((twice, 8), (PHASES, 2)):
        found = mix(start[:rows], errors(start[:rows]), components[:rows], errors(components[:rows]))
        assert found.verdict == "cannot tell"
        assert found.reason
        assert np.isnan(found.proportions).all()
    assert mix(start, errors(start), np.zeros((8, 0)), np.zeros((8, 0))).verdict == "cannot tell"


def test_as_many_phases_as_elements_leave_nothing_to_test():
    start = PHASES[:3] @ np.array([0.2, 0.15, 0.65])
    found = mix(start, errors(start), PHASES[:3], errors(PHASES[:3]))
    assert found.dof == 0
    assert np.isnan(found.p_value)


@pytest.mark.parametrize("change", ["nan", "negative", "shape", "certain"])
def test_impossible_input_is_refused(change):
    start, sd = PHASES @ np.array([0.2, 0.15, 0.65]), np.ones(8)
    phases_sd = np.ones_like(PHASES)
    if change == "nan":
        start[0] = np.nan
    elif change == "negative":
        sd[0] = -1
    elif change == "shape":
        sd = sd[:5]
    else:
        sd[0], phases_sd[0] = 0, 0
    with pytest.raises(ValueError, match=r"error|shape|finite"):
        mix(start, sd, PHASES, phases_sd)


def test_an_error_that_all_phases_share_is_one_of_the_sum():
    """A calibration common to all phases is known no better for being counted once per phase."""
    start, sd = PHASES @ np.array([0.2, 0.15, 0.65]), errors(PHASES @ np.array([0.2, 0.15, 0.65]))
    none = np.zeros_like(PHASES)
    start[4] *= 1.03
    common = mix(start, sd, PHASES, none, shared_sd=0.02 * PHASES[None])
    # The same variance of the sum, said of the starting composition.
    found = common.proportions
    as_start = mix(start, np.hypot(sd, 0.02 * PHASES @ found), PHASES, none)
    np.testing.assert_allclose(common.proportions, as_start.proportions, atol=0.002)
    assert common.chi_square == pytest.approx(as_start.chi_square, rel=0.01)
    apart = mix(start, sd, PHASES, 0.02 * PHASES)
    assert apart.chi_square > 1.1 * common.chi_square
    sessions = np.zeros((2, *PHASES.shape))
    sessions[0, :, :2], sessions[1, :, 2] = 0.02 * PHASES[:, :2], 0.02 * PHASES[:, 2]
    two = mix(start, sd, PHASES, none, shared_sd=sessions)
    assert common.chi_square < two.chi_square < apart.chi_square


def test_shared_errors_cover():
    rng = np.random.default_rng(14)
    truth = np.array([0.2, 0.15, 0.65])
    start, hits, cases = PHASES @ truth, np.zeros(3), 80
    for _ in range(cases):
        phases = PHASES * (1 + 0.02 * rng.standard_normal(8))[:, None]
        spots = 0.005 * phases + 0.01
        phases = phases + spots * rng.standard_normal(phases.shape)
        own = 0.002 * start + 0.01
        found = mix(start + own * rng.standard_normal(8), own, phases, spots, shared_sd=0.02 * phases[None])
        hits += (found.low <= truth) & (truth <= found.high)
    assert np.all(hits / cases > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases))


def test_shared_errors_of_another_shape_are_refused():
    start, sd = PHASES @ np.array([0.2, 0.15, 0.65]), np.ones(8)
    with pytest.raises(ValueError, match="shape"):
        mix(start, sd, PHASES, np.ones_like(PHASES), shared_sd=np.ones((8, 3)))
