"""Triangular decompositions against LAPACK's, by its own interfaces in numpy and scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import qr, solve_triangular

from bandproof.analysis.triangles import solve_triangle, triangle


def _matrices(independence: float) -> np.ndarray:
    """Five matrices (24, 6) whose third column is that far from the first."""
    matrix = np.random.default_rng(3).normal(size=(5, 24, 6))
    matrix[:, :, 2] = matrix[:, :, 0] + independence * matrix[:, :, 2]
    return matrix


def _upwards(r: np.ndarray) -> np.ndarray:
    """The same triangle, each row's sign chosen for a positive diagonal."""
    return r * np.sign(np.diagonal(r))[:, None]


# cond² times the rounding where the product is formed, cond times the rounding where it must not be
@pytest.mark.parametrize(("independence", "tolerance"), [(1.0, 1e-13), (1e-2, 1e-11), (1e-5, 1e-10), (1e-9, 1e-6)])
def test_a_triangle_is_that_of_lapack_however_dependent_the_columns(independence, tolerance):
    matrices = _matrices(independence)
    for ours, matrix in zip(triangle(matrices), matrices, strict=True):
        theirs = qr(matrix, mode="r")[0][:5]
        np.testing.assert_allclose(_upwards(ours), _upwards(theirs), rtol=tolerance, atol=tolerance * 1e-2)


@pytest.mark.parametrize("independence", [1.0, 1e-9])
def test_damping_stands_under_the_matrix(independence):
    matrices, damping = _matrices(independence), np.array([1e-14, 1e-8, 1e-3, 1.0, 1e3])
    for ours, matrix, added in zip(triangle(matrices, damping), matrices, damping, strict=True):
        theirs = qr(np.concatenate([matrix, np.sqrt(added) * np.eye(6)[:5]]), mode="r")[0][:5]
        np.testing.assert_allclose(_upwards(ours), _upwards(theirs), rtol=1e-6, atol=1e-8)


def test_a_column_of_zeros_and_too_few_rows_leave_zeros():
    empty = np.zeros((1, 4, 3))
    empty[0, :, 1:] = np.random.default_rng(4).normal(size=(4, 2))
    assert not triangle(empty)[0, :, 0].any()
    assert not triangle(np.ones((1, 1, 4)))[0, 1:].any()


def test_solutions_are_those_of_lapack():
    r = np.triu(np.random.default_rng(5).normal(size=(7, 4, 4))) + 3.0 * np.eye(4)
    right = np.random.default_rng(6).normal(size=(7, 4, 2))
    for ours, one, z in zip(solve_triangle(np.concatenate([r, right], axis=2)), r, right, strict=True):
        np.testing.assert_allclose(ours, solve_triangular(one, z), rtol=1e-12)
