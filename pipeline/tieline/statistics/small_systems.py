"""Many small systems of linear equations at once, each step written out over all of them.

Indices of matrix and vector come first, (m, m, ...) and (m, ...), so that one entry of all systems is one array. For
two or three unknowns this takes a tenth of the time of a call of LAPACK for every system.
"""

import numpy as np

from tieline.statistics.groups import FloatArray


def inverse_root(matrix: FloatArray) -> FloatArray:
    """Lower triangular R (m, m, ...) with RᵀR the inverse of symmetric positive definite matrices (m, m, ...).

    R is the inverse of Cholesky's factor; only the lower triangle of the matrices is read. Rounding errors grow with
    the condition of the matrix as with any other method: scale it to a unit diagonal first.
    """
    size = len(matrix)
    factor, root = np.zeros_like(matrix), np.zeros_like(matrix)
    for row in range(size):
        pivot = matrix[row, row]
        for column in range(row):
            left = matrix[row, column]
            for k in range(column):
                left = left - factor[row, k] * factor[column, k]
            factor[row, column] = left * root[column, column]
            pivot = pivot - factor[row, column] ** 2
        root[row, row] = 1.0 / np.sqrt(pivot)
        for column in range(row):
            above = factor[row, column:row] * root[column:row, column]
            root[row, column] = -root[row, row] * above.sum(axis=0)
    return root


def times(matrix: FloatArray, vector: FloatArray) -> FloatArray:
    """Matrix (k, m, ...) times vector (m, ...)."""
    product: FloatArray = (matrix * vector).sum(axis=1)
    return product
