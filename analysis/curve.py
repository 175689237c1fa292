"""Figures of a band by their definitions, read from any curve.

f0 is the frequency of greatest |H|, gain is |H| there, the edges are where |H| has fallen to gain / sqrt(2), and
Q = f0 / (f_high - f_low). Many curves are read at once; the first axis counts them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from bandproof.analysis.network import Network, response
from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray

__all__ = ["Curve", "CurveFigures", "curve_figures", "figure_slopes", "network_figures", "stage_response"]

Curve: TypeAlias = Callable[[FloatArray], ComplexArray]  # (S, N) Hz to (S, N) ratio

_Level: TypeAlias = Callable[[FloatArray], FloatArray]  # (S, N) ln Hz to (S, N) ln |H|
_Bracket: TypeAlias = tuple[FloatArray, FloatArray]

_GRID = 401  # arbitrary; a band of Q = 30 still spans four points of the widest search, nine octaves
_DERIVATIVE = np.array([-1.0, 9.0, -45.0, 0.0, 45.0, -9.0, 1.0]) / 60  # central difference of sixth order


@dataclass(frozen=True, slots=True, eq=False)
class CurveFigures:
    """Figures of S curves, each field (S,): f0, f_low and f_high in Hz, q and gain ratios."""

    f0: FloatArray
    q: FloatArray
    gain: FloatArray
    f_low: FloatArray
    f_high: FloatArray


def curve_figures(curve: Curve, low: float, high: float, *, count: int = 1, precision: float = 0.0) -> CurveFigures:
    """Return the figures of `count` curves whose highest point lies between two frequencies.

    Parameters
    ----------
    curve : callable
        Takes (S, N) frequencies in Hz and returns (S, N) complex ratios, S = count.
    low, high : float
        Hz; the peak and both edges are looked for between them.
    precision : float
        How near to 0 the slope at the peak, and to half power the edges, must be in ln |H|.

    Returns
    -------
    CurveFigures
        Solved to about 1e-11 of the width of the band, with a precision of 0.

    Raises
    ------
    ValueError
        A greatest |H| or a half-power edge is not inside the range; names the first curve concerned.

    Examples
    --------
    >>> band = lambda f: 2 / (1 + 5j * (f / 1e3 - 1e3 / f))
    >>> figures = curve_figures(band, 100.0, 10e3)
    >>> print(f"{figures.f0[0]:.6f} {figures.q[0]:.6f} {figures.gain[0]:.6f}")
    1000.000000 5.000000 2.000000
    """

    def level(x: FloatArray) -> FloatArray:
        """Ln |H| at (S, N) logarithms of frequency."""
        with np.errstate(divide="ignore"):  # a curve that vanishes somewhere has no peak there: ln 0 = -inf
            result: FloatArray = np.log(np.abs(curve(np.exp(x))))
        return result

    x = np.broadcast_to(np.linspace(np.log(low), np.log(high), _GRID), (count, _GRID))
    rough, step = _rough_peak(level, x)
    left, right = _edge_brackets(level, x, rough)
    slope_step = 0.005 * np.minimum(rough - left[0], right[1] - rough)  # error h^6, rounding 1/h: both below 1e-12

    def slope(at: FloatArray) -> FloatArray:
        around = at[:, None] + slope_step[:, None] * np.arange(-3, 4)
        result: FloatArray = level(around) @ _DERIVATIVE
        return result

    peak = _root(slope, rough - step, rough + step, precision)
    top = level(peak[:, None])[:, 0]

    def over_half(at: FloatArray) -> FloatArray:
        height: FloatArray = level(at) - top[:, None] + 0.5 * np.log(2.0)
        return height

    edges = [np.stack(pair, axis=1) for pair in zip(left, right, strict=True)]
    f_low, f_high = np.exp(_root(over_half, edges[0], edges[1], precision)).T
    f0 = np.exp(peak)
    return CurveFigures(f0=f0, q=f0 / (f_high - f_low), gain=np.exp(top), f_low=f_low, f_high=f_high)


def stage_response(
    network: Network,
    frequency: FloatArray,
    *,
    node_in: str,
    node_out: str,
    values: Mapping[str, FloatArray] | None = None,
) -> ComplexArray:
    """Return H(node_out) / H(node_in): (N,), or (K, N) with K values of some parts (see `network.response`)."""
    volts = response(network, frequency, [node_in, node_out], values=values)
    ratio: ComplexArray = volts[..., 1, :] / volts[..., 0, :]
    return ratio


def network_figures(
    network: Network,
    *,
    node_in: str,
    node_out: str,
    low: float,
    high: float,
    values: Mapping[str, FloatArray] | None = None,
    precision: float = 0.0,
) -> CurveFigures:
    """Return the figures of a stage between two taps, for K values of some parts at once (without values K = 1)."""
    some = next(iter(network.parts.items()))
    table = dict(values) if values else {some[0]: np.array([some[1]])}
    count = max(np.size(column) for column in table.values())

    def curve(frequency: FloatArray) -> ComplexArray:
        return stage_response(network, frequency, node_in=node_in, node_out=node_out, values=table)

    return curve_figures(curve, low, high, count=count, precision=precision)


def figure_slopes(
    network: Network, figures: FloatArray, *, node_in: str, node_out: str, values: Mapping[str, FloatArray]
) -> FloatArray:
    """Return how ln f0, ln Q and ln gain of a stage change with the ln of each part's value, around known figures.

    The peak and the edges are where a condition on ln |H| holds, so they move as an implicit function does. The edges
    are those that Q gives a second-order band.

    Parameters
    ----------
    figures : (K, 3) float array
        ln f0, ln Q, ln gain with the values; NaN gives NaN.
    values : mapping of P names to (K,) float arrays
        Values of the parts that the slopes are wanted for.

    Returns
    -------
    (K, 3, P) float array
    """
    names, known = list(values), np.nan_to_num(figures)
    half = np.arcsinh(0.5 * np.exp(-known[:, 1]))  # ln of an edge over f0: sinh(half) = 1 / (2 Q)
    near = 0.02 * half
    x = known[:, :1] + np.outer(near, [0, -1, 1] * 3) + np.outer(half, [0] * 3 + [-1] * 3 + [1] * 3)
    step, rows = 1e-3, 2 * len(names) + 1
    table = {name: np.repeat(np.asarray(column, dtype=float), rows) for name, column in values.items()}
    for i, name in enumerate(names):
        table[name][2 * i + 1 :: rows] *= np.exp(step)
        table[name][2 * i + 2 :: rows] *= np.exp(-step)
    h = stage_response(network, np.repeat(np.exp(x), rows, axis=0), node_in=node_in, node_out=node_out, values=table)
    level = np.log(np.abs(h)).reshape(len(known), rows, -1)
    by_part = (level[:, 1::2] - level[:, 2::2]) / (2.0 * step)  # (K, P, 9)
    at, near = level[:, :1], near[:, None]
    peak = (
        -(by_part[..., 2] - by_part[..., 1]) / (2.0 * near) / ((at[..., 2] - 2.0 * at[..., 0] + at[..., 1]) / near**2)
    )
    edges = [-(by_part[..., i] - by_part[..., 0]) / ((at[..., i + 2] - at[..., i + 1]) / (2.0 * near)) for i in (3, 6)]
    low, high = np.exp(-half)[:, None], np.exp(half)[:, None]
    q = peak - (high * edges[1] - low * edges[0]) / (high - low)
    slopes = np.stack([peak, q, by_part[..., 0]], axis=1)
    result: FloatArray = np.where(np.isfinite(figures)[:, :, None], slopes, np.nan)
    return result


def _rough_peak(level: _Level, x: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the highest grid point of each curve on a grid refined twice, and the refined step."""
    for _ in range(2):
        height = level(x)
        best = height.argmax(axis=1)
        _refuse((best == 0) | (best == x.shape[1] - 1), "has its greatest |H| at an end of the range searched")
        rough = np.take_along_axis(x, best[:, None], axis=1)[:, 0]
        step = x[:, 1] - x[:, 0]
        x = rough[:, None] + step[:, None] * np.linspace(-1.5, 1.5, 31)
    return rough, 1.5 * step


def _edge_brackets(level: _Level, x: FloatArray, peak: FloatArray) -> tuple[_Bracket, _Bracket]:
    """Return, below and above the peak, the nearest grid points between which |H| crosses half power."""
    below_half = level(x) < level(peak[:, None]) - 0.5 * np.log(2.0)
    lower, upper = below_half & (x < peak[:, None]), below_half & (x > peak[:, None])
    _refuse(~(lower.any(axis=1) & upper.any(axis=1)), "does not fall to half power on both sides within the range")
    rows = np.arange(len(x))
    i = x.shape[1] - 1 - lower[:, ::-1].argmax(axis=1)
    j = upper.argmax(axis=1)
    return (x[rows, i], np.minimum(x[rows, i + 1], peak)), (np.maximum(x[rows, j - 1], peak), x[rows, j])


def _refuse(bad: BoolArray, what: str) -> None:
    if bad.any():
        raise ValueError(f"curve {int(bad.argmax())} {what}: widen it or look at the response")


def _root(
    function: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray, precision: float
) -> FloatArray:
    """Return where each function changes sign between low and high, by bisection quickened with false position."""
    f_low, f_high = function(low), function(high)
    for i in range(200):
        with np.errstate(invalid="ignore", divide="ignore"):
            x = low - f_low * (high - low) / (f_high - f_low)
        middle = 0.5 * (low + high)
        x = middle if i % 3 == 2 else np.where((x > low) & (x < high), x, middle)
        f = function(x)
        same = np.sign(f) == np.sign(f_low)
        # Illinois: an end that stays twice has its value halved, else false position creeps
        f_high, f_low = np.where(same, 0.5 * f_high, f), np.where(same, f, np.where(f == 0, f_low, 0.5 * f_low))
        low, high = np.where(same, x, low), np.where(same, high, x)
        if (high - low).max() <= 4e-15 * max(1.0, np.abs(high).max()) or np.abs(f).max() <= precision:
            break
    return x
