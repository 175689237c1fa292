"""The multiple-feedback band-pass with a one-pole op-amp: its figures in closed form, and the parts for wanted ones.

The op-amp amplifies by gbw / (j f). The response is then -(s/R_in) / (a3 s^3 + a2 s^2 + a1 s + a0), and with u the
square of the angular frequency 1/|H|^2 is convex in u: one peak, two half-power edges, each the root of a cubic that
Newton's method meets from one side. Source: nodal analysis of the circuit in `circuits`; the witness is `curve`.
"""

from __future__ import annotations

from collections.abc import Callable
from math import inf, pi
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike

from bandproof.analysis.types import FloatArray

__all__ = ["one_pole_design", "one_pole_figures"]

_ValueAndSlope: TypeAlias = Callable[[FloatArray], tuple[FloatArray, FloatArray]]

_ROUNDS = 60  # Newton's method needs 4 to 12
_DESIGN_ROUNDS = 200  # arbitrary; gain 2 and Q 5 settle up to Q f0/gbw = 0.7
_SETTLED = 1e-12


def one_pole_figures(
    R_in: ArrayLike,
    R_shunt: ArrayLike,
    R_feedback: ArrayLike,
    C_1: ArrayLike,
    C_2: ArrayLike,
    *,
    gbw: float = inf,
) -> FloatArray:
    """Return the figures of stages by their definitions.

    Parameters
    ----------
    R_in, R_shunt, R_feedback, C_1, C_2 : arrays of one shape or of shapes that broadcast
        Ohm and farad, positive.
    gbw : float
        Gain-bandwidth product of the op-amp in Hz; infinite for an ideal one.

    Returns
    -------
    (3, ...) float array
        f0 in Hz (greatest |H|), Q = f0 / (-3 dB bandwidth), and |H| at f0.

    Examples
    --------
    >>> f0, q, gain = one_pole_figures(7957.7472, 80.381284, 31830.9886, 100e-9, 100e-9, gbw=1e6)
    >>> print(f"{f0:.2f} {gain:.4f}")
    990.15 1.9996
    """
    g_in, g_shunt, g_feedback = (1.0 / np.asarray(r, dtype=float) for r in (R_in, R_shunt, R_feedback))
    return _figures(g_in, g_in + g_shunt, g_feedback, np.asarray(C_1, dtype=float), np.asarray(C_2, dtype=float), gbw)


def one_pole_design(wanted: FloatArray, *, gbw: float = inf) -> FloatArray:
    """Return the conductances that give wanted figures with two capacitors of 1 F.

    Parameters
    ----------
    wanted : (3, K) float array
        f0 in Hz, Q and |H| at f0 of K stages.
    gbw : float
        Hz, infinite for an ideal op-amp.

    Returns
    -------
    (3, K) float array
        1/R_in, 1/R_in + 1/R_shunt and 1/R_feedback in siemens; for a capacitance C times C. The first is not
        below the second where the figures are beyond the circuit; all three are NaN where the op-amp is too slow.

    Examples
    --------
    >>> with_capacitor = 100e-9 * one_pole_design(np.array([[1000.0], [10.0], [2.0]]))
    >>> print(f"{1 / with_capacitor[0, 0]:.4f} {1 / with_capacitor[2, 0]:.4f}")
    7957.7472 31830.9886
    """
    aim = np.log(np.asarray(wanted, dtype=float))
    logs = _ideal_logs(aim)
    one = np.ones(aim.shape[1])
    for _ in range(_DESIGN_ROUNDS if gbw < inf else 0):
        with np.errstate(all="ignore"):  # a stage that runs away ends as NaN
            g_in, g_node, g_feedback = np.exp(logs)
            off = aim - np.log(_figures(g_in, g_node, g_feedback, one, one, gbw))
            logs = logs + _conductance_changes(off)
        if not (np.abs(off) > _SETTLED).any():
            break
    if gbw < inf:
        logs = np.where((np.abs(off) <= 1e3 * _SETTLED).all(axis=0), logs, np.nan)
    result: FloatArray = np.exp(logs)
    return result


def _ideal_logs(aim: FloatArray) -> FloatArray:
    f0, q, gain = aim
    node, feedback = np.log(4 * pi) + f0 + q, np.log(pi) + f0 - q
    return np.stack([np.log(2) + gain + feedback, node, feedback])


def _conductance_changes(off: FloatArray) -> FloatArray:
    """Return what an ideal stage would change, in logarithms, to make up for errors of its figures."""
    f0, q, gain = off
    return np.stack([gain + f0 - q, f0 + q, f0 - q])


def _figures(
    g_in: FloatArray, g_node: FloatArray, g_feedback: FloatArray, C_1: FloatArray, C_2: FloatArray, gbw: float
) -> FloatArray:
    lag = 1.0 / (2 * pi * gbw)  # s; 0 for an ideal op-amp
    rate = g_feedback / C_2
    a0, a1 = g_node * rate, rate * (C_1 + C_2 + lag * g_node)
    a2, a3 = C_1 + lag * (g_node + rate * (C_1 + C_2)), lag * C_1
    # 1/|H|^2 = R_in^2 (a0^2/u + k + b u + c u^2)
    k, b, c = a1 * a1 - 2 * a0 * a2, a2 * a2 - 2 * a1 * a3, a3 * a3 + 0.0 * a0
    peak = _newton(a0 / np.sqrt(b), lambda u: ((b + 2 * c * u) * u * u - a0 * a0, (2 * b + 6 * c * u) * u))
    # (a0 - a2 u)^2/u + (a1 - a3 u)^2 rather than the sum of powers: the parts of k cancel near the peak
    least = (a0 - a2 * peak) ** 2 / peak + (a1 - a3 * peak) ** 2
    half = 0.5 * (2 * least - k)
    lower = a0 * a0 / (half + np.sqrt(half * half - b * a0 * a0))  # edges if c were 0: the true ones lie between them

    def over(u: FloatArray) -> tuple[FloatArray, FloatArray]:
        return a0 * a0 / u - 2 * half + (b + c * u) * u, b + 2 * c * u - a0 * a0 / (u * u)

    low, high = _newton(lower, over), _newton(a0 * a0 / (b * lower), over)
    f0 = np.sqrt(peak)
    result: FloatArray = np.stack([f0 / (2 * pi), f0 / (np.sqrt(high) - np.sqrt(low)), g_in / np.sqrt(least)])
    return result


def _newton(u: FloatArray, function: _ValueAndSlope) -> FloatArray:
    for _ in range(_ROUNDS):
        value, slope = function(u)
        step = value / slope
        u = u - step
        if not (np.abs(step) > 1e-13 * np.abs(u)).any():
            break
    return u
