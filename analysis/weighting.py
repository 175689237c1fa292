"""What the fit of bands minimizes: real residuals and derivatives, each divided by its standard deviation."""

from __future__ import annotations

import numpy as np

from bandproof.analysis.models import band_jacobian
from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray, IndexArray

__all__ = ["WeightedBands"]

_BLOCK = 6144  # points worked on at once: what then lies about stays in the processor's cache


class WeightedBands:
    """Weighted residuals and Jacobian of S sweeps for `least_squares`.

    The model's delay turns nothing at `centre` (S,). Variables that are not in `free` keep their values in `theta`
    (S, 7). Points that are not in `used` (S, N) count for nothing.

    Raises
    ------
    ValueError
        A used covariance is not positive definite.
    """

    def __init__(
        self,
        frequency: FloatArray,
        response: ComplexArray,
        covariance: FloatArray,
        used: BoolArray,
        centre: FloatArray,
        theta: FloatArray,
        free: list[int],
    ) -> None:
        self.frequency, self.response, self.centre, self.theta, self.free = frequency, response, centre, theta, free
        self.diagonal, self.below = _whitening(covariance, used)
        self.correlated = bool(self.below.any())
        # taken once: new memory costs more than the arithmetic
        self.rows = np.empty((len(theta), len(free) + 1, 2 * frequency.shape[1]))

    def __call__(self, variables: FloatArray, which: IndexArray) -> FloatArray:
        """Return (A, 2N, P + 1): derivatives by the P free variables, then the residuals."""
        size = max(1, _BLOCK // self.frequency.shape[1])
        for first in range(0, len(which), size):
            block = slice(first, min(first + size, len(which)))
            # which ascends: all of them are all in their order, and a slice of them needs no copy
            sweeps = block if len(which) == len(self.theta) else which[block]
            self._evaluate(variables[block], sweeps, self.rows[block])
        return self.rows[: len(which)].swapaxes(1, 2)

    def _evaluate(self, variables: FloatArray, sweeps: IndexArray | slice, out: FloatArray) -> None:
        theta = self.theta[sweeps].copy()
        theta[:, self.free] = variables
        model, derivatives = band_jacobian(theta, self.frequency[sweeps], self.centre[sweeps])
        diagonal, below = self.diagonal[sweeps], self.below[sweeps]
        columns = [*(derivatives[i] for i in self.free), model - self.response[sweeps]]
        for rows, column in zip(out.swapaxes(0, 1), columns, strict=True):
            np.multiply(diagonal, column.view(np.float64), out=rows)
            if self.correlated:
                rows[:, 1::2] += below * column.real


def _whitening(covariance: FloatArray, mask: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Return the inverse Cholesky factors: their diagonals in turn (S, 2N), and the entries 10 (S, N); 0 if unused."""
    a, b, c = covariance[..., 0, 0], covariance[..., 1, 0], covariance[..., 1, 1]
    with np.errstate(invalid="ignore", divide="ignore"):
        first = 1 / np.sqrt(a)
        second = 1 / np.sqrt(c - b * b / a)
        diagonal, below = np.stack([first, second], axis=-1), -b / a * second
    bad = ~(np.isfinite(diagonal).all(axis=-1) & np.isfinite(below)) & mask
    if bad.any():
        sweep, point = (int(i) for i in np.argwhere(bad)[0])
        raise ValueError(f"the covariance of sweep {sweep}, point {point} is not positive definite")
    diagonal[~mask], below[~mask] = 0.0, 0.0
    return diagonal.reshape(len(mask), -1), below
