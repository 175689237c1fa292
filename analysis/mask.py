"""Where the curve of a band can run whose centre frequency, Q and gain are within limits: a mask for pictures.

|H| = g / sqrt(1 + (Q x)²) and the phase -atan(Q x), x = f/f0 - f0/f, are monotonic in each figure, so everywhere
the bounds are those of single bands and exact: some band within the limits reaches each of them. The bounds themselves
are no band's curve. A band is one without delay and leakage.
"""

import numpy as np

from bandproof.analysis.types import FloatArray

__all__ = ["magnitude_mask", "phase_mask"]

Limits = tuple[float, float]  # lower, upper


def magnitude_mask(frequency: FloatArray, *, centre: Limits, q: Limits, gain: Limits) -> tuple[FloatArray, FloatArray]:
    """Return the least and the greatest |H| at frequencies (N,) Hz, each (N,); limits in Hz and ratios, positive.

    Examples
    --------
    >>> least, greatest = magnitude_mask(np.array([1e3]), centre=(900.0, 1100.0), q=(2.0, 3.0), gain=(0.9, 1.1))
    >>> print(greatest)
    [1.1]
    """
    left, right = _detuning(frequency, centre[0]), _detuning(frequency, centre[1])
    farthest = np.maximum(np.abs(left), np.abs(right))
    nearest = np.where(left * right <= 0.0, 0.0, np.minimum(np.abs(left), np.abs(right)))
    return gain[0] / np.hypot(1.0, q[1] * farthest), gain[1] / np.hypot(1.0, q[0] * nearest)


def phase_mask(frequency: FloatArray, *, centre: Limits, q: Limits) -> tuple[FloatArray, FloatArray]:
    """Return the least and the greatest phase at frequencies (N,) Hz, each (N,) in rad, 0 at the centre."""
    left, right = _detuning(frequency, centre[0]), _detuning(frequency, centre[1])
    least = -np.arctan(np.where(left > 0.0, q[1], q[0]) * left)
    greatest = -np.arctan(np.where(right > 0.0, q[0], q[1]) * right)
    return least, greatest


def _detuning(frequency: FloatArray, centre: float) -> FloatArray:
    detuning: FloatArray = frequency / centre - centre / frequency
    return detuning
