"""Student's quantile by interpolation against the library's root search."""

import numpy as np
import pytest
from scipy import special

from tieline.statistics.student import student_quantile


@pytest.mark.parametrize("probability", [0.6, 0.75, 0.9, 0.975, 0.995, 0.9995])
def test_equal_to_the_root_search(probability: float):
    rng = np.random.default_rng(1)
    dof = np.concatenate([rng.uniform(1.0, 5.0, 400), np.exp(rng.uniform(0.0, 20.0, 400)), [1.0, 2.0, 1e9]])
    np.testing.assert_allclose(
        student_quantile(dof, probability), special.stdtrit(dof, probability), rtol=1e-9
    )


def test_below_one_degree_of_freedom_and_without_any():
    dof = np.concatenate([np.full(300, 4.0), [0.5, np.nan, np.inf]])
    found = student_quantile(dof, 0.975)
    assert found[300] == special.stdtrit(0.5, 0.975)
    assert np.isnan(found[301])
    assert found[302] == pytest.approx(special.ndtri(0.975), rel=1e-11)


def test_extreme_probabilities_are_left_to_the_library():
    dof = np.linspace(0.5, 9.0, 300)
    np.testing.assert_array_equal(student_quantile(dof, 0.99999), special.stdtrit(dof, 0.99999))


def test_the_place_in_the_array_does_not_show():
    dof = np.random.default_rng(2).uniform(1.0, 30.0, 1001)
    together = student_quantile(dof, 0.975)
    alone = [student_quantile(dof[place : place + 1], 0.975)[0] for place in range(0, 1001, 50)]
    assert together[::50].tobytes() == np.array(alone).tobytes()
