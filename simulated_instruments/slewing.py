"""Op-amp outputs that cannot follow: one period of a wave behind a slew-rate limit.

The output runs after the wave at no more than the slew rate, and keeps to it wherever it can. Of a sine far beyond the
limit a triangle is left, peak slew / (4 f).
"""

import numpy as np
from numpy.typing import NDArray

from bandproof.simulated_instruments.dynamics import ComplexArray, FloatArray

__all__ = ["excess"]

POINTS = 2048  # of a period, at least; arbitrary: straight lines between them are 1e-6 of a sine's peak off
OVERSAMPLING = 16  # points in a period of the highest harmonic, arbitrary
HALVINGS = 50  # of the interval in which the beginning of the period is searched


def excess(
    phasors: ComplexArray, orders: NDArray[np.int_], frequency: float, slew: float, phase: FloatArray
) -> FloatArray:
    """Return the volts by which a periodic wave differs from what an op-amp makes of it in the steady state.

    Parameters
    ----------
    phasors : (K,) complex array
        V peak; the wave is Im(sum of phasor exp(j 2 pi order phase)).
    orders : (K,) int array
        Multiples of the fundamental, from 1.
    frequency : float
        Hz, of the fundamental.
    slew : float
        V/s.
    phase : (N,) float array
        Instants, in periods of the fundamental.

    Returns
    -------
    (N,) float array
        V; nothing but 0 where the wave is nowhere steeper than the limit.
    """
    if 2 * np.pi * frequency * np.abs(orders * phasors).sum() <= slew:
        return np.zeros(len(phase))
    count = max(POINTS, OVERSAMPLING * int(orders.max()))
    spectrum = np.zeros(count, dtype=complex)
    spectrum[orders] = phasors
    wave = np.fft.ifft(spectrum).imag * count
    limited = _limited(wave.tolist(), slew / (frequency * count))
    return np.interp(phase, np.arange(count) / count, wave - limited, period=1.0)


def _limited(wave: list[float], step: float) -> FloatArray:
    """Return what follows one period of a wave with no more than `step` from point to point, after endless periods.

    The end of a period never falls when its beginning rises, nor faster than that: so bisection finds the beginning
    that comes back.
    """
    low, high = min(wave), max(wave)
    for _ in range(HALVINGS):
        middle = (low + high) / 2
        if _follow(wave, step, middle)[-1] > middle:
            low = middle
        else:
            high = middle
    return np.array(_follow(wave, step, (low + high) / 2)[:-1])


def _follow(wave: list[float], step: float, start: float) -> list[float]:
    """Return the points of one period and the one after it, from `start` on; exact for straight lines between."""
    volts, found = start, [start]
    for here, there in zip(wave, [*wave[1:], wave[0]], strict=True):
        sign = 1.0 if here > volts or (here == volts and there > here) else -1.0
        gap, slope = sign * (here - volts), sign * (there - here)  # as if the wave were above
        meeting = gap / (step - slope) if slope < step else 1.0  # in parts of this interval
        if meeting >= 1.0:
            volts += sign * step
        elif abs(slope) <= step:
            volts = there
        else:
            volts += sign * step * (2 * meeting - 1.0)
        found.append(volts)
    return found
