"""Small systems of equations against LAPACK, one by one."""

import numpy as np
import pytest

from tieline.statistics.small_systems import inverse_root, times


@pytest.mark.parametrize("size", [1, 2, 3, 4])
def test_root_gives_inverse_and_solution(size):
    rng = np.random.default_rng(size)
    parts = rng.standard_normal((5, 7, size, size + 2))
    matrix = parts @ np.swapaxes(parts, -1, -2)
    vector = rng.standard_normal((5, 7, size))
    root = inverse_root(np.moveaxis(matrix, (-2, -1), (0, 1)))
    inverse = np.einsum("kigs,kjgs->gsij", root, root)
    np.testing.assert_allclose(inverse @ matrix, np.broadcast_to(np.eye(size), matrix.shape), atol=1e-9)
    solved = times(np.swapaxes(root, 0, 1), times(root, np.moveaxis(vector, -1, 0)))
    expected = np.linalg.solve(matrix, vector[..., None])[..., 0]
    np.testing.assert_allclose(np.moveaxis(solved, 0, -1), expected, rtol=1e-7, atol=1e-9)
    assert not root[np.triu_indices(size, 1)].any()


def test_an_almost_singular_matrix_has_the_inverse_that_its_ridge_allows():
    ridge = 1e-9
    matrix = np.array([[1.0 + ridge, 1.0], [1.0, 1.0 + ridge]])
    root = inverse_root(matrix[..., None])[..., 0]
    np.testing.assert_allclose(root.T @ root @ [1.0, 1.0], 0.5, rtol=1e-6)
    np.testing.assert_allclose(root.T @ root @ [1.0, -1.0], [1 / ridge, -1 / ridge], rtol=1e-6)
