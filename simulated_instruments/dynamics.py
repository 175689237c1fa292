"""Exact solutions of x' = a x + b u: steady states, and what is left of the last change at later times.

The usual road is the eigen-decomposition of `a`. Where eigenvectors nearly coincide (two equal stages in a row, for
instance) it would lose digits, and the matrix exponential serves instead.
"""

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["REMAINDER", "ComplexArray", "Dynamics", "FloatArray", "sum_of_exponentials"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

REMAINDER = 1e-9  # V: what decays is dropped below
WORST_CONDITION = 1e7  # of the eigenvectors; at 1e7 the modes are still good to about 1e-9 of the state


class Dynamics:
    """One linear time-invariant system with volts as states and outputs.

    Parameters
    ----------
    a, b, c, d : (n, n), (n, K), (M, n), (M, K) float arrays
        x' = a x + b u, outputs c x + d u; input 0 is the EMF.

    Raises
    ------
    ValueError
        The system has no steady state for constant inputs, or it grows.
    """

    def __init__(self, a: FloatArray, b: FloatArray, c: FloatArray, d: FloatArray) -> None:
        self.a, self.b, self.c, self.d = a, b, c, d
        rates, vectors = np.linalg.eig(a)
        self.rates: ComplexArray = rates.astype(np.complex128)
        if np.any(self.rates.real >= 0):
            raise ValueError(f"the network has no steady state: a mode grows by {self.rates.real.max():g} 1/s")
        self._modal = len(a) == 0 or bool(np.linalg.cond(vectors) < WORST_CONDITION)
        self._vectors: ComplexArray = vectors.astype(np.complex128)
        if self._modal:
            self._inverse: ComplexArray = np.linalg.inv(self._vectors).astype(np.complex128)
            self._taps = self.c @ self._vectors

    def constant(self, inputs: FloatArray) -> FloatArray:
        """Return the (n,) steady state of constant inputs (K,)."""
        return np.asarray(np.linalg.solve(self.a, -self.b @ inputs), dtype=np.float64)

    def phasor(self, frequency: float) -> ComplexArray:
        """Return the (n,) steady state, peak, of an EMF of 1 V peak at frequency in Hz."""
        system = 2j * np.pi * frequency * np.eye(len(self.a)) - self.a
        return np.asarray(np.linalg.solve(system, self.b[:, 0]), dtype=np.complex128)

    def free(self, state: FloatArray) -> ComplexArray:
        """Return a deviation (n,) from the steady state in the coordinates `later` and `outputs` take."""
        return self._inverse @ state if self._modal else state.astype(np.complex128)

    def later(self, free: ComplexArray, elapsed: float) -> FloatArray:
        """Return the deviation (n,) after some s; what is below REMAINDER is forgotten for good.

        So a bench that was switched on later agrees to the last bit with one that has seen more.
        """
        if self._modal:
            modes = free * np.exp(self.rates * elapsed)
            modes[np.abs(modes) < REMAINDER] = 0.0  # vectors have length 1: no state is larger
            return np.asarray((self._vectors @ modes).real)
        state = np.asarray(self._exponential(elapsed) @ free.real)
        return state if np.abs(state).max(initial=0.0) > REMAINDER else np.zeros_like(state)

    def outputs(
        self, free: ComplexArray, rows: NDArray[np.intp], elapsed: float, interval: float, count: int
    ) -> FloatArray:
        """Return (len(rows), count) volts that a deviation adds to outputs, from `elapsed` s on at equal intervals."""
        if not self._modal:
            return self._by_doubling(self.later(free, elapsed), rows, interval, count)
        weights = self._taps[rows] * (free * np.exp(self.rates * elapsed))
        alive = np.any(np.abs(weights) > REMAINDER, axis=0)
        return sum_of_exponentials(weights[:, alive], self.rates[alive] * interval, count)

    def _by_doubling(self, state: FloatArray, rows: NDArray[np.intp], interval: float, count: int) -> FloatArray:
        taps = self.c[rows]
        if np.abs(taps).sum(axis=1).max() * np.abs(state).max(initial=0.0) < REMAINDER:
            return np.zeros((len(rows), count))
        states, power = state[:, None], self._exponential(interval)
        while states.shape[1] < count:
            states = np.hstack([states, power @ states])
            power = power @ power
        return np.asarray(taps @ states[:, :count])

    def _exponential(self, elapsed: float) -> FloatArray:
        from scipy.linalg import expm  # rarely needed, and slow to import

        return np.asarray(expm(self.a * elapsed), dtype=np.float64)


def sum_of_exponentials(weights: ComplexArray, steps: ComplexArray, count: int) -> FloatArray:
    """Return the real parts of sums of weight exp(step n) for n = 0 ... count - 1.

    Parameters
    ----------
    weights : (M, P) complex array
    steps : (P,) complex array
    count : int

    Returns
    -------
    (M, count) float array
        As products of two short tables of exponentials, which takes far fewer of them than samples.
    """
    inner = max(1, math.isqrt(count))
    outer = -(-count // inner)
    coarse = weights[:, None, :] * np.exp(np.outer(inner * np.arange(outer), steps))
    fine = np.exp(np.outer(steps, np.arange(inner)))
    return np.asarray((coarse @ fine).real.reshape(len(weights), -1)[:, :count])
