"""The band model, its derivatives, and starting values from data alone.

H(f) = (g / (1 + jQ(f/f0 - f0/f)) + l) exp(-j 2π f τ): a second-order band of complex gain g, the delay τ of the bench
and of the op-amp's finite gain-bandwidth, and on request a complex leakage l. Variables, in this order: ln f0, ln Q,
Re g, Im g, τ, Re l, Im l. Q is f0 over the -3 dB bandwidth. Source: DEVELOPERS.md, Band model.
"""

from __future__ import annotations

import numpy as np

from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray

__all__ = ["VARIABLES", "band_jacobian", "band_response", "band_start", "refer_delay", "refer_delay_jacobian"]

VARIABLES = ("ln_f0", "ln_q", "re_gain", "im_gain", "delay", "re_leakage", "im_leakage")
_TURNED = (2, 5)  # where the complex variables begin that the delay turns


def band_response(theta: FloatArray, frequency: FloatArray) -> ComplexArray:
    """Return the voltage ratio of S bands.

    Parameters
    ----------
    theta : (S, 7) float array
        Variables as in `VARIABLES` (Hz, ratio, s).
    frequency : (S, N) float array
        Hz, positive.

    Returns
    -------
    (S, N) complex array

    Examples
    --------
    >>> theta = np.array([[np.log(1e3), np.log(5.0), -2.0, 0.0, 0.0, 0.0, 0.0]])
    >>> band_response(theta, np.array([[1000.0]])).round(9)
    array([[-2.+0.j]])
    """
    gain, leakage = _complex(theta, 2), _complex(theta, 5)
    _, _, resonance = _resonance(theta, frequency)
    ratio: ComplexArray = (gain * resonance + leakage) * _turn(theta, frequency)
    return ratio


def band_jacobian(
    theta: FloatArray, frequency: FloatArray, reference: FloatArray | None = None
) -> tuple[ComplexArray, tuple[ComplexArray, ...]]:
    """Return the ratio (S, N) and its derivatives by the seven variables, each (S, N).

    With reference frequencies (S,) the delay turns nothing there: gain and leakage are those of `refer_delay`.
    """
    away = frequency if reference is None else frequency - reference[:, None]
    gain, leakage, turn = _complex(theta, 2), _complex(theta, 5), _turn(theta, away)
    q, x, resonance = _resonance(theta, frequency)
    inverse = 1 / x
    shape = resonance * turn
    bend = (-1j * q * gain) * (resonance * shape)
    value = gain * shape + leakage * turn
    return value, (
        bend * -(x + inverse),  # the detuning x - 1/x falls by x + 1/x per unit of ln f0
        bend * (x - inverse),
        shape,
        1j * shape,
        value * (-2j * np.pi * away),
        turn,
        1j * turn,
    )


def refer_delay(theta: FloatArray, reference: FloatArray) -> FloatArray:
    """Return variables (S, 7) for a delay that turns nothing at the reference frequencies (S,); back with -reference.

    Gain and leakage are turned by what the delay did there. In a narrow band far from 0 Hz the delay and the gain's
    phase are then no longer nearly the same thing.

    Examples
    --------
    >>> theta = np.array([[np.log(1e3), 0.0, -2.0, 0.0, 0.25e-3, 0.0, 0.0]])
    >>> refer_delay(theta, np.array([1e3]))[0, 2:4].round(9) + 0.0
    array([0., 2.])
    """
    referred, turn = theta.copy(), _turn(theta, reference[:, None])
    for first in _TURNED:
        value = (_complex(theta, first) * turn)[:, 0]
        referred[:, first], referred[:, first + 1] = value.real, value.imag
    return referred


def refer_delay_jacobian(theta: FloatArray, reference: FloatArray) -> FloatArray:
    """Return the derivatives (S, 7, 7) of `refer_delay`'s variables (rows) by those given."""
    angle = 2 * np.pi * reference
    turn, referred = _turn(theta, reference[:, None])[:, 0], refer_delay(theta, reference)
    jacobian = np.tile(np.eye(len(VARIABLES)), (len(theta), 1, 1))
    for first in _TURNED:
        re, im = first, first + 1
        jacobian[:, re, re], jacobian[:, re, im] = turn.real, -turn.imag
        jacobian[:, im, re], jacobian[:, im, im] = turn.imag, turn.real
        jacobian[:, re, 4], jacobian[:, im, 4] = angle * referred[:, im], -angle * referred[:, re]
    return jacobian


def band_start(frequency: FloatArray, response: ComplexArray, used: BoolArray | None = None) -> FloatArray:
    """Return starting values (S, 7) without a guess.

    With t = f/r - r/f, r near f0, 1/H = a + b t is nearly linear and exact at r = f0: a/b = -j/Q - t0, g = jQ/b. Solved
    with weights |H|² from r = the highest point and repeated. Where the data leave no such solution, the highest point
    serves with Q = 1. Delay and leakage start at 0.
    """
    weight = np.abs(response) * (1.0 if used is None else used)
    rows, best = np.arange(len(weight)), weight.argmax(axis=1)
    peak, gain = frequency[rows, best], response[rows, best]
    f0, q = peak, np.ones_like(peak)
    for _ in range(4):  # each pass reduces the error of r by far more than ten
        detuning, width, height = _linear_band(frequency / f0[:, None], response, weight)
        with np.errstate(all="ignore"):
            moved = f0 * (0.5 * detuning + np.sqrt(1 + 0.25 * detuning**2))
            inside = (moved > 0.5 * frequency.min(axis=1)) & (moved < 2 * frequency.max(axis=1))
            trusted = inside & (width > 0.01) & (width < 1e5) & (np.abs(height) < 10 * np.abs(response[rows, best]))
        f0, q = np.where(trusted, moved, peak), np.where(trusted, width, 1.0)
        gain = np.where(trusted, height, response[rows, best])
    nothing = np.zeros_like(f0)
    return np.stack([np.log(f0), np.log(q), gain.real, gain.imag, nothing, nothing, nothing], axis=-1)


def _linear_band(
    x: FloatArray, response: ComplexArray, weight: FloatArray
) -> tuple[FloatArray, FloatArray, ComplexArray]:
    """Return the detuning t0 of the centre, Q and gain, (S,) each, from the line 1 = (a + b t) H."""
    t = x - 1 / x
    power = weight**2
    h2 = power * np.abs(response) ** 2
    s0, s1, s2 = h2.sum(axis=1), (h2 * t).sum(axis=1), (h2 * t * t).sum(axis=1)
    right = power * response.conj()
    r0, r1 = right.sum(axis=1), (right * t).sum(axis=1)
    with np.errstate(all="ignore"):
        determinant = s0 * s2 - s1 * s1
        a, b = (s2 * r0 - s1 * r1) / determinant, (s0 * r1 - s1 * r0) / determinant
        q = -1 / (a / b).imag
        return -(a / b).real, q, np.asarray(1j * q / b, dtype=np.complex128)


def _complex(theta: FloatArray, first: int) -> ComplexArray:
    value: ComplexArray = theta[:, first, None] + 1j * theta[:, first + 1, None]
    return value


def _turn(theta: FloatArray, frequency: FloatArray) -> ComplexArray:
    angle = frequency * (2 * np.pi * theta[:, 4, None])
    return _of_parts(np.cos(angle), -np.sin(angle))


def _resonance(theta: FloatArray, frequency: FloatArray) -> tuple[FloatArray, FloatArray, ComplexArray]:
    """Return Q (S, 1), x = f/f0 (S, N) and 1 / (1 + jQ(x - 1/x))."""
    q: FloatArray = np.exp(theta[:, 1, None])
    x: FloatArray = frequency * np.exp(-theta[:, 0, None])
    detuning = q * (x - 1 / x)
    power = 1 / (1 + detuning * detuning)
    return q, x, _of_parts(power, -detuning * power)


def _of_parts(real: FloatArray, imag: FloatArray) -> ComplexArray:
    value = np.empty(real.shape, dtype=np.complex128)  # several times faster than real + 1j * imag
    value.real, value.imag = real, imag
    return value
