"""Nonlinear least squares, many problems at once.

Levenberg-Marquardt after J. J. Moré (The Levenberg-Marquardt algorithm, 1978): columns scaled by the largest norm seen,
each step from the QR decomposition of the augmented matrix, so that badly scaled problems keep their digits.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np

from bandproof.analysis.types import BoolArray, FloatArray, IndexArray

__all__ = ["LeastSquares", "Residual", "Status", "least_squares"]

Status: TypeAlias = Literal["converged", "no progress", "step limit", "not finite"]

Residual: TypeAlias = Callable[[FloatArray, IndexArray], tuple[FloatArray, FloatArray]]
"""Takes theta (A, P) and the numbers (A,) of the problems meant; returns residuals (A, N) and Jacobian (A, N, P)."""

# Converged, too, when the undamped step is this small beside the parameters: a residual at the rounding limit needs it.
_STEP = 1e-12
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
    ...     return model - y[which], (model * x)[..., None]
    >>> least_squares(growth, np.array([[0.1]])).theta.round(6)
    array([[0.693147]])
    """
    run = _Run(function, np.array(start, dtype=np.float64), offset)
    for _ in range(step_limit):
        if not len(run.active):
            break
        run.step()
    return run.result()


class _Run:
    """State of the problems; `active` numbers those still moving, every other array keeps all S rows."""

    def __init__(self, function: Residual, theta: FloatArray, offset: float) -> None:
        self.function, self.theta, self.offset = function, theta, offset
        count, parameters = theta.shape
        self.active = np.arange(count)
        with np.errstate(all="ignore"):
            residual, jacobian = function(theta, self.active)
        self.squares = np.einsum("sn,sn->s", residual, residual)
        self.triangle, self.projected = np.zeros((count, parameters, parameters)), np.zeros((count, parameters))
        self.scale = np.zeros((count, parameters))
        self.damping, self.growth = np.full(count, 1e-3), np.full(count, 2.0)
        self.steps, self.words = np.zeros(count), np.full(count, "step limit", dtype=object)
        self._decompose(self.active, residual, jacobian)

    def step(self) -> None:
        """Try one damped step of every active problem and keep it where the squares fall."""
        at = self.active
        step = self._damped(at, self.damping[at])
        trial = self.theta[at] + step
        with np.errstate(all="ignore"):
            residual, jacobian = self.function(trial, at)
            squares = np.einsum("sn,sn->s", residual, residual)
        moved = np.einsum("spq,sq->sp", self.triangle[at], step)
        damped = self.damping[at] * np.einsum("sp,sp->s", self.scale[at] * step, self.scale[at] * step)
        predicted = np.einsum("sp,sp->s", moved, moved) + 2 * damped
        sound = np.isfinite(squares) & np.isfinite(jacobian).all(axis=(1, 2))
        with np.errstate(all="ignore"):
            quality = np.where(sound, (self.squares[at] - squares) / predicted, -1.0)
        # This near, the squares' own rounding hides the gain: an undamped step is taken unless it does harm.
        near = np.linalg.norm(self.projected[at], axis=1) <= _NEAR * np.sqrt(self.squares[at])
        harmless = near & sound & (squares <= (1 + _NEAR**2) * self.squares[at])
        better = harmless | (quality > 1e-4)
        quality = np.where(harmless, 1.0, quality)
        self.steps[at] += 1
        self.damping[at] *= np.where(harmless, 1e-3, 1.0)
        self._adapt(at, quality, better)
        kept = at[better]
        self.theta[kept], self.squares[kept] = trial[better], squares[better]
        self._decompose(kept, residual[better], jacobian[better])
        self._stop(at[~better])

    def _adapt(self, at: IndexArray, quality: FloatArray, better: BoolArray) -> None:
        """Lower the damping as far as the step was good, else raise it ever faster (H. B. Nielsen, 1999)."""
        factor = np.maximum(0.1, 1 - (2 * np.minimum(quality, 1.0) - 1) ** 3)
        self.damping[at] *= np.where(better, np.minimum(factor, 2.0), self.growth[at])
        self.growth[at] = np.where(better, 2.0, 2 * self.growth[at])

    def _decompose(self, at: IndexArray, residual: FloatArray, jacobian: FloatArray) -> None:
        sound = np.isfinite(residual).all(axis=1) & np.isfinite(jacobian).all(axis=(1, 2))
        self.words[at[~sound]] = "not finite"
        self.active = np.setdiff1d(self.active, at[~sound], assume_unique=True)
        at, residual, jacobian = at[sound], residual[sound], jacobian[sound]
        if not len(at):
            return
        # The triangle of (J, r) holds the triangle of J and, in its last column, r projected: Q is never formed.
        triangle = _triangle(np.concatenate([jacobian, residual[..., None]], axis=2))
        self.triangle[at], self.projected[at] = triangle[..., :-1], triangle[..., -1]
        self.scale[at] = np.maximum(self.scale[at], np.linalg.norm(jacobian, axis=1))

    def _damped(self, at: IndexArray, damping: FloatArray) -> FloatArray:
        """Return the steps (A, P) of some problems, columns scaled, by QR of the triangle over the damping."""
        scale = np.where(self.scale[at] > 0, self.scale[at], 1.0)
        parameters = scale.shape[1]
        augmented = np.zeros((len(at), 2 * parameters, parameters + 1))
        augmented[:, :parameters, :-1] = self.triangle[at] / scale[:, None, :]
        augmented[:, :parameters, -1] = -self.projected[at]
        augmented[:, parameters:, :-1] = np.sqrt(damping)[:, None, None] * np.eye(parameters)
        triangle = _triangle(augmented)
        step: FloatArray = np.linalg.solve(triangle[..., :-1], triangle[..., -1:])[..., 0] / scale
        return step

    def _stop(self, refused: IndexArray) -> None:
        """Retire the problems that have arrived, and those whose damped steps have become too short to matter."""
        at = self.active
        reach = np.linalg.norm(self.projected[at], axis=1)
        arrived = reach <= self.offset * np.sqrt(self.squares[at])
        self.words[at[arrived]] = "converged"
        refused = np.intersect1d(at[~arrived], refused)
        if not len(refused):
            self.active = at[~arrived]
            return
        full = self._damped(refused, np.full(len(refused), 1e-30))
        size = np.linalg.norm(self.scale[refused] * self.theta[refused], axis=1)
        short = np.linalg.norm(self.scale[refused] * full, axis=1) <= _STEP * size
        stuck = ~short & (self.damping[refused] > 1e18)
        self.words[refused[short]], self.words[refused[stuck]] = "converged", "no progress"
        self.active = np.setdiff1d(at[~arrived], refused[short | stuck], assume_unique=True)

    def result(self) -> LeastSquares:
        """Return what was reached."""
        scale = np.where(self.scale > 0, self.scale, 1.0)
        scaled = self.triangle / scale[:, None, :]
        try:
            inverse = np.linalg.inv(scaled) / scale[..., None]
        except np.linalg.LinAlgError:  # somewhere a parameter has no effect
            inverse = np.linalg.pinv(scaled, rcond=1e-15) / scale[..., None]
        covariance: FloatArray = inverse @ np.swapaxes(inverse, 1, 2)
        return LeastSquares(self.theta, self.squares, covariance, self.steps, tuple(self.words))


def _triangle(matrix: FloatArray) -> FloatArray:
    """Return the square upper part of R for (A, N, P + 1) matrices, (A, P, P + 1), filled with zeros where N < P."""
    parameters = matrix.shape[2] - 1
    r = np.asarray(np.linalg.qr(matrix, mode="r"), dtype=np.float64)[:, :parameters]
    missing = parameters - r.shape[1]
    whole: FloatArray = np.pad(r, ((0, 0), (0, missing), (0, 0))) if missing else r
    return whole
