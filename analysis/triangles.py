"""Triangular decompositions of many small matrices at once."""

from __future__ import annotations

import numpy as np

from bandproof.analysis.types import FloatArray

__all__ = ["solve_triangle", "triangle"]

# A column's part outside the span of those before it, squared, relative to the whole: below it JᵀJ has lost more than
# six of sixteen digits. Arbitrary; ten are left, and far more than ten are never needed of one step.
_LOST = 1e-6


def triangle(matrix: FloatArray, damping: FloatArray | None = None) -> FloatArray:
    """Return the upper part of R, where matrix = QR, but for its last row.

    By the Cholesky decomposition of matrixᵀ · matrix, several times faster than Householder's reflections, and by these
    wherever a pivot tells that forming the product cost digits. The last column is meant to be a right-hand side: it
    need not be independent of the others. Rows agree up to their sign.

    Parameters
    ----------
    matrix : (A, N, P + 1) float array
    damping : (A,) float array, optional
        Under the first P columns stands the root of it times the identity, under the last stand zeros.

    Returns
    -------
    (A, P, P + 1) float array
        Filled with zeros where N < P.

    Examples
    --------
    >>> abs(triangle(np.array([[[3.0, 1.0], [4.0, 2.0]]]))).round(9)
    array([[[5. , 2.2]]])
    """
    with np.errstate(all="ignore"):
        product = matrix.swapaxes(1, 2) @ matrix
        if damping is not None:
            np.einsum("app->ap", product)[:, :-1] += damping[:, None]
        r, kept = _cholesky(product)
    lost = ~(kept > _LOST)  # true for nan
    if lost.any():
        r[lost] = _householder(matrix[lost] if damping is None else _augmented(matrix[lost], damping[lost]))
    return r


def solve_triangle(triangles: FloatArray) -> FloatArray:
    """Return x of R x = z, R the first P columns of triangles and z the K others; inf or nan where R is singular.

    Parameters
    ----------
    triangles : (A, P, P + K) float array

    Returns
    -------
    (A, P, K) float array

    Examples
    --------
    >>> solve_triangle(np.array([[[2.0, 1.0, 4.0], [0.0, 3.0, 6.0]]]))[..., 0]
    array([[1., 2.]])
    """
    parameters = triangles.shape[1]
    whole = triangles.transpose(1, 2, 0)
    r, x = whole[:, :parameters], whole[:, parameters:].copy()
    with np.errstate(all="ignore"):
        for row in reversed(range(parameters)):
            x[row] /= r[row, row]
            x[:row] -= r[:row, row, None] * x[row]
    return x.transpose(2, 0, 1)


def _cholesky(product: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the triangles (A, P, P + 1) of symmetric (A, P + 1, P + 1) and the least relative pivots (A,)."""
    rest = np.ascontiguousarray(product.transpose(1, 2, 0))  # matrices side by side: each operation serves them all
    parameters = len(rest) - 1
    whole, r = np.einsum("ppa->pa", rest).copy(), np.zeros_like(rest[:-1])
    kept = np.ones(rest.shape[2])
    for k in range(parameters):
        kept = np.minimum(kept, rest[k, k] / whole[k])
        r[k, k:] = rest[k, k:] / np.sqrt(rest[k, k])
        rest[k + 1 : -1, k + 1 :] -= r[k, k + 1 : -1, None] * r[k, None, k + 1 :]
    return np.ascontiguousarray(r.transpose(2, 0, 1)), kept


def _augmented(matrix: FloatArray, damping: FloatArray) -> FloatArray:
    below = np.sqrt(damping)[:, None, None] * np.eye(matrix.shape[2])[:-1]
    return np.concatenate([matrix, below], axis=1)


def _householder(matrix: FloatArray) -> FloatArray:
    parameters = matrix.shape[2] - 1
    r = np.asarray(np.linalg.qr(matrix, mode="r"), dtype=np.float64)[:, :parameters]
    missing = parameters - r.shape[1]
    whole: FloatArray = np.pad(r, ((0, 0), (0, missing), (0, 0))) if missing else r
    return whole
