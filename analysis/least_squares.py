"""Nonlinear least squares, many problems at once.

Levenberg-Marquardt after J. J. Moré (The Levenberg-Marquardt algorithm, 1978): columns scaled by the largest norm seen,
each step from the triangle of the augmented matrix, so that badly scaled problems keep their digits.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np

from bandproof.analysis.triangles import solve_triangle, triangle
from bandproof.analysis.types import BoolArray, FloatArray, IndexArray

__all__ = ["LeastSquares", "Residual", "Status", "least_squares"]

Status: TypeAlias = Literal["converged", "no progress", "step limit", "not finite"]

Residual: TypeAlias = Callable[[FloatArray, IndexArray], FloatArray]
"""Takes theta (A, P) and the numbers (A,) of the problems meant; returns (A, N, P + 1): Jacobian, residuals last.

The next call may overwrite what was returned.
"""

# Converged, too, when the undamped step is this small beside the parameters: a residual at the rounding limit needs it.
_STEP = 1e-12
_DAMPING = 1e-3  # of the columns' norms, at the start
_NEAR = 1e-5  # arbitrary; its square lies well above the rounding of a sum of squares


@dataclass(frozen=True, slots=True, eq=False)
class LeastSquares:
    """Solutions of S problems.

    theta (S, P); squares (S,), the sums of squared residuals; covariance (S, P, P), inverse of JᵀJ, not multiplied
    by any residual variance; steps (S,), accepted and refused; status, S words.
    """

    theta: FloatArray
    squares: FloatArray
    covariance: FloatArray
    steps: FloatArray
    status: tuple[Status, ...]


def least_squares(
    function: Residual, start: FloatArray, *, step_limit: int = 500, offset: float = 1e-8
) -> LeastSquares:
    """Minimize the sums of squared residuals of S problems at once.

    Parameters
    ----------
    function : callable
        See `Residual`.
    start : (S, P) float array
    step_limit : int
        Most steps for any problem.
    offset : float
        Converged when the cosine between the residual and what the parameters can still reach is below it: the distance
        to the minimum is then this fraction of the parameters' own uncertainty (D. M. Bates, D. G. Watts).

    Returns
    -------
    LeastSquares

    Examples
    --------
    >>> x, y = np.array([1.0, 2.0, 3.0]), np.array([[2.0, 4.0, 8.0]])
    >>> def growth(theta, which):
    ...     model = np.exp(theta * x)
    ...     return np.stack([model * x, model - y[which]], axis=-1)
    >>> least_squares(growth, np.array([[0.1]])).theta.round(6)
    array([[0.693147]])
    """
    run = _Run(function, np.array(start, dtype=np.float64), offset)
    for _ in range(step_limit):
        if not run.moving.any():
            break
        run.step()
    return run.result()


class _Run:
    """State of the S problems; each array keeps all rows, `moving` tells those not yet retired."""

    def __init__(self, function: Residual, theta: FloatArray, offset: float) -> None:
        self.function, self.theta, self.offset = function, theta, offset
        count, parameters = theta.shape
        self.triangle, self.squares = np.zeros((count, parameters, parameters + 1)), np.zeros(count)
        self.scale = np.zeros((count, parameters))
        self.damping, self.growth = np.full(count, _DAMPING), np.full(count, 2.0)
        self.steps, self.words = np.zeros(count), np.full(count, "step limit", dtype=object)
        self.moving = np.ones(count, dtype=np.bool_)
        everything = np.arange(count)
        whole, squares, sound = self._evaluate(theta, everything)
        self._retire(everything[~sound], "not finite")
        self._keep(everything[sound], whole[sound], squares[sound])

    def step(self) -> None:
        """Try one damped step of every active problem and keep it where the squares fall."""
        at = np.flatnonzero(self.moving)
        step = self._damped(at, self.damping[at])
        trial = self.theta[at] + step
        whole, squares, sound = self._evaluate(trial, at)
        before = self.triangle[at]
        moved = np.einsum("spq,sq->sp", before[..., :-1], step)
        scaled = self.scale[at] * step
        predicted = _square(moved) + 2 * self.damping[at] * _square(scaled)
        with np.errstate(all="ignore"):
            quality = np.where(sound, (self.squares[at] - squares) / predicted, -1.0)
        # This near, the squares' own rounding hides the gain: an undamped step is taken unless it does harm.
        near = _norm(before[..., -1]) <= _NEAR * np.sqrt(self.squares[at])
        harmless = near & sound & (squares <= (1 + _NEAR**2) * self.squares[at])
        better = harmless | (quality > 1e-4)
        quality = np.where(harmless, 1.0, quality)
        self.steps[at] += 1
        self.damping[at] *= np.where(harmless, 1e-3, 1.0)
        self._adapt(at, quality, better)
        self.theta[at[better]] = trial[better]
        self._keep(at[better], whole[better], squares[better])
        self._stop(at, ~better)

    def _evaluate(self, theta: FloatArray, at: IndexArray) -> tuple[FloatArray, FloatArray, BoolArray]:
        """Return the triangles of (J, r), the squares and whether all of it is finite.

        Such a triangle holds that of J and, in its last column, r projected on J: Q is never formed.
        """
        with np.errstate(all="ignore"):
            rows = self.function(theta, at)
            squares = _square(rows[..., -1])
        whole = triangle(rows)
        return whole, squares, np.isfinite(squares) & np.isfinite(whole).all(axis=(1, 2))

    def _keep(self, at: IndexArray, whole: FloatArray, squares: FloatArray) -> None:
        self.triangle[at], self.squares[at] = whole, squares
        self.scale[at] = np.maximum(self.scale[at], _norm(whole[..., :-1].swapaxes(1, 2)))

    def _adapt(self, at: IndexArray, quality: FloatArray, better: BoolArray) -> None:
        """Lower the damping as far as the step was good, else raise it ever faster (H. B. Nielsen, 1999)."""
        factor = np.maximum(0.1, 1 - (2 * np.minimum(quality, 1.0) - 1) ** 3)
        self.damping[at] *= np.where(better, np.minimum(factor, 2.0), self.growth[at])
        self.growth[at] = np.where(better, 2.0, 2 * self.growth[at])

    def _damped(self, at: IndexArray, damping: FloatArray) -> FloatArray:
        """Return the steps (A, P) of some problems, columns scaled, from the triangle over the damping."""
        scale = np.where(self.scale[at] > 0, self.scale[at], 1.0)
        scaled = self.triangle[at]
        scaled[..., :-1] /= scale[:, None, :]
        step: FloatArray = -solve_triangle(triangle(scaled, damping))[..., 0] / scale
        return step

    def _stop(self, at: IndexArray, refused: BoolArray) -> None:
        """Retire the problems that have arrived, and those whose damped steps have become too short to matter."""
        arrived = _norm(self.triangle[at, :, -1]) <= self.offset * np.sqrt(self.squares[at])
        self._retire(at[arrived], "converged")
        self._refine(at[arrived])
        at = at[refused & ~arrived]
        if not len(at):
            return
        full = self._damped(at, np.full(len(at), 1e-30))
        short = _norm(self.scale[at] * full) <= _STEP * _norm(self.scale[at] * self.theta[at])
        stuck = ~short & (self.damping[at] > 1e18)
        self._retire(at[short], "converged")
        self._retire(at[stuck], "no progress")

    def _retire(self, at: IndexArray, word: Status) -> None:
        self.moving[at], self.words[at] = False, word

    def _refine(self, arrived: IndexArray) -> None:
        """Take the last step, shorter than `offset` uncertainties, unseen: it costs nothing and gains digits."""
        step = -solve_triangle(self.triangle[arrived])[..., 0]
        self.theta[arrived] += np.where(np.isfinite(step), step, 0.0)

    def result(self) -> LeastSquares:
        """Return what was reached."""
        scale = np.where(self.scale > 0, self.scale, 1.0)
        scaled = self.triangle[..., :-1] / scale[:, None, :]
        unit = np.broadcast_to(np.eye(scale.shape[1]), scaled.shape)
        inverse = solve_triangle(np.concatenate([scaled, unit], axis=2))
        singular = ~np.isfinite(inverse).all(axis=(1, 2))  # a parameter has no effect
        if singular.any():
            inverse[singular] = np.linalg.pinv(scaled[singular], rcond=1e-15)
        inverse /= scale[..., None]
        covariance: FloatArray = inverse @ inverse.swapaxes(1, 2)
        return LeastSquares(self.theta, self.squares, covariance, self.steps, tuple(self.words))


def _square(vectors: FloatArray) -> FloatArray:
    square: FloatArray = np.einsum("...p,...p->...", vectors, vectors)
    return square


def _norm(vectors: FloatArray) -> FloatArray:
    norm: FloatArray = np.sqrt(_square(vectors))
    return norm
