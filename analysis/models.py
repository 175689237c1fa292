"""The band model, its derivatives, and starting values from data alone.

H(f) = (g / (1 + jQ(f/f0 - f0/f)) + l) exp(-j 2π f τ): a second-order band of complex gain g, the delay τ of the bench
and of the op-amp's finite gain-bandwidth, and on request a complex leakage l. Variables, in this order: ln f0, ln Q,
Re g, Im g, τ, Re l, Im l. Q is f0 over the -3 dB bandwidth. Source: DEVELOPERS.md, Band model.
"""

from __future__ import annotations

import numpy as np

from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray

__all__ = ["VARIABLES", "band_jacobian", "band_response", "band_start"]

VARIABLES = ("ln_f0", "ln_q", "re_gain", "im_gain", "delay", "re_leakage", "im_leakage")


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
    _, _, denominator = _detuning(theta, frequency)
    ratio: ComplexArray = (gain / denominator + leakage) * _turn(theta, frequency)
    return ratio


def band_jacobian(theta: FloatArray, frequency: FloatArray) -> tuple[ComplexArray, ComplexArray]:
    """Return the ratio (S, N) and its derivatives by the seven variables (S, N, 7)."""
    gain, leakage, turn = _complex(theta, 2), _complex(theta, 5), _turn(theta, frequency)
    q, x, denominator = _detuning(theta, frequency)
    shape = turn / denominator
    bend = -1j * q * gain * shape / denominator
    value = gain * shape + leakage * turn
    columns = [
        -bend * (x + 1 / x),  # the detuning x - 1/x falls by x + 1/x per unit of ln f0
        bend * (x - 1 / x),
        shape,
        1j * shape,
        -2j * np.pi * frequency * value,
        turn,
        1j * turn,
    ]
    return value, np.stack(columns, axis=-1)


def band_start(frequency: FloatArray, response: ComplexArray, used: BoolArray | None = None) -> FloatArray:
    """Return starting values (S, 7) without a guess.

    1/H = a + b f + c/f is linear; weighted by |H|² its solution gives f0² = -c/b, Q² = -b c / a², g = 1/a. Where the
    data leave no such solution, the highest point serves with Q = 1. Delay and leakage start at 0.
    """
    weight = np.abs(response) * (1.0 if used is None else used)
    centre = np.exp(np.log(frequency).mean(axis=1, keepdims=True))
    x = frequency / centre
    columns = np.stack([np.ones_like(x), x, 1 / x], axis=-1) * (weight * response)[..., None]
    scale = np.abs(response).max(axis=1)[:, None]
    coefficients = (np.linalg.pinv(columns) @ (weight * np.ones_like(response))[..., None])[..., 0]
    a, b, c = coefficients.T
    with np.errstate(all="ignore"):
        x0, q, gain = np.sqrt((-c / b).real), np.sqrt((-b * c / a**2).real), 1 / a
    rows, best = np.arange(len(x)), weight.argmax(axis=1)
    inside = (x0 > 0.5 * x.min(axis=1)) & (x0 < 2 * x.max(axis=1)) & (q > 0.01) & (q < 1e5)
    trusted = inside & (np.abs(gain) < 10 * scale[:, 0]) & np.isfinite(gain)
    f0 = np.where(trusted, x0, x[rows, best]) * centre[:, 0]
    q, gain = np.where(trusted, q, 1.0), np.where(trusted, gain, response[rows, best])
    nothing = np.zeros_like(f0)
    return np.stack([np.log(f0), np.log(q), gain.real, gain.imag, nothing, nothing, nothing], axis=-1)


def _complex(theta: FloatArray, first: int) -> ComplexArray:
    value: ComplexArray = theta[:, first, None] + 1j * theta[:, first + 1, None]
    return value


def _turn(theta: FloatArray, frequency: FloatArray) -> ComplexArray:
    value: ComplexArray = np.exp(-2j * np.pi * frequency * theta[:, 4, None])
    return value


def _detuning(theta: FloatArray, frequency: FloatArray) -> tuple[FloatArray, FloatArray, ComplexArray]:
    """Return Q (S, 1), x = f/f0 (S, N) and 1 + jQ(x - 1/x)."""
    q: FloatArray = np.exp(theta[:, 1, None])
    x: FloatArray = frequency * np.exp(-theta[:, 0, None])
    denominator = np.asarray(1 + 1j * q * (x - 1 / x), dtype=np.complex128)
    return q, x, denominator
