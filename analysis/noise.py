"""The noise of a measured response without a model of it, and a test of one model against a larger one.

Neighbouring points of a smooth curve lie near a polynomial; what remains is noise. The difference of order m of m + 1
neighbours, divided by the root of the sum of its squared weights, has exactly the noise's variance where the curve is a
polynomial of degree m - 1: for m = 2 it is the misfit of a line through both neighbours. Sources, from memory: J. von
Neumann and others, The mean square successive difference (1941), for m = 1; R. W. Hamming, Numerical Methods for
Scientists and Engineers, for differences of rising order until they no longer fall.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from scipy.special import fdtrc

from bandproof.analysis.fit import BandFit
from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray, IndexArray

__all__ = ["Noise", "f_test", "response_noise"]

_LOWEST, _HIGHEST = 2, 6  # orders tried; arbitrary, each further one costs degrees of freedom
_SPURIOUS = 1e-3  # chance that pure noise makes the largest difference of a sweep pass for an outlier; arbitrary
_FALLEN = 1.0  # standard uncertainties an order must lie below the last one to count as fallen


@dataclass(frozen=True, slots=True, eq=False)
class Noise:
    """Noise of S sweeps.

    Attributes
    ----------
    deviation : (S,)
        Standard deviation of the real and of the imaginary part, in units of the ratio.
    dof : (S,)
        Degrees of freedom; the relative standard uncertainty of the deviation is 1 / sqrt(2 dof).
    order : (S,) int
        Of the differences it was read from.
    settled : (S,) bool
        Whether the next order gives no less. Otherwise the curve's bends are still seen: the deviation is too large.
    left_out : (S,) int
        Differences left out as outliers.
    """

    deviation: FloatArray
    dof: FloatArray
    order: IndexArray
    settled: BoolArray
    left_out: IndexArray


def response_noise(frequency: FloatArray, response: ComplexArray) -> Noise:
    """Estimate the white noise of S responses, or of the residuals of their fits, from differences along frequency.

    The lowest order is taken whose successor gives no less. Bends make the deviation too large, never too small: from
    30 points over the -3 dB bandwidth of a band, down to a noise of 1e-4 of its gain, no bias is seen; with 20 it is
    5 % down to a noise of 1e-3, more for less (27 % at 1e-5), with 10 up to half. Then take the noise of the residual
    of a fit with leakage instead: a misfit bends little. The fit takes little of it away: 3 % of the deviation at 12
    points, nothing at 20. Noise that is alike in neighbouring points (smoothing) is underestimated; noise that varies
    over the sweep is averaged.

    Parameters
    ----------
    frequency : (S, N) float array
        Hz, strictly increasing in each sweep; steps need not be equal.
    response : (S, N) complex array

    Returns
    -------
    Noise

    Raises
    ------
    ValueError
        A shape is wrong, there are fewer than 4 points, a value is not finite, or frequencies do not increase.

    Examples
    --------
    >>> f = np.linspace(900.0, 1100.0, 401)[None]
    >>> alternating = 1e-3 * (1 + 1j) * np.where(np.arange(401) % 2, 1, -1)
    >>> noise = response_noise(f, 2 / (1 + 2j * (f / 1e3 - 1e3 / f)) + alternating)
    >>> print(f"{noise.deviation[0]:.2e}")  # the alternation is the largest that 1e-3 can do
    1.63e-03
    """
    _check(frequency, response)
    orders = np.arange(_LOWEST, min(_HIGHEST, frequency.shape[1] - 2) + 1)
    tried = [_by_differences(frequency, response, int(order)) for order in orders]
    deviation, dof, left_out = (np.array(values) for values in zip(*tried, strict=True))
    uncertainty = deviation[:-1] / np.sqrt(2 * dof[:-1])
    still = np.ones((1, len(frequency)), dtype=np.bool_)  # the last order has no next one to be judged by
    falls = np.concatenate([deviation[1:] < deviation[:-1] - _FALLEN * uncertainty, still])
    settled: BoolArray = ~np.all(falls, axis=0)
    chosen = np.where(settled, falls.argmin(axis=0), len(orders) - 1)
    at = chosen, np.arange(len(frequency))
    return Noise(deviation[at], dof[at], orders[chosen], settled, left_out[at])


def f_test(small: BandFit, large: BandFit) -> FloatArray:
    """Return how likely noise alone makes the larger model better by as much, (S,), whatever the noise's size.

    Both fitted to the same points with the same covariances, the smaller model contained in the larger. Source: the
    F-test of nested models (common practice).

    Raises
    ------
    ValueError
        The larger model does not have more variables, or leaves no degree of freedom.
    """
    added = small.dof - large.dof
    if not ((added > 0) & (large.dof > 0)).all():
        raise ValueError("the larger model needs more variables than the smaller one, and fewer than there are data")
    reached = large.chi_square * large.dof
    gained = np.maximum(small.chi_square * small.dof - reached, 0.0)
    return np.asarray(fdtrc(added, large.dof, gained / added / large.chi_square), dtype=np.float64)


def _check(frequency: FloatArray, response: ComplexArray) -> None:
    shape = np.shape(frequency)
    if len(shape) != 2 or np.shape(response) != shape:
        raise ValueError(f"frequency and response must be (S, N), found {shape} and {np.shape(response)}")
    if shape[1] < 4:
        raise ValueError(f"a sweep needs 4 points for its noise to be seen, found {shape[1]}")
    if not (np.isfinite(frequency).all() and np.isfinite(response).all()):
        raise ValueError("frequency and response must be finite")
    if not (np.diff(frequency, axis=1) > 0).all():
        raise ValueError("frequency must be strictly increasing in each sweep")


def _by_differences(
    frequency: FloatArray, response: ComplexArray, order: int
) -> tuple[FloatArray, FloatArray, IndexArray]:
    """Return deviation, degrees of freedom and number of outliers, (S,) each."""
    weights = _weights(frequency, order)
    power = np.abs(np.einsum("snk,snk->sn", weights, sliding_window_view(response, order + 1, axis=1))) ** 2
    # |difference|² is distributed exponentially: its median is ln 2 of its mean, and few in n pass mean · ln(n / few).
    mean = np.median(power, axis=1, keepdims=True) / np.log(2)
    kept = power <= mean * np.log(power.shape[1] / _SPURIOUS)
    count = kept.sum(axis=1)
    deviation = np.sqrt((power * kept).sum(axis=1) / (2 * count))
    return deviation, 2 * _independent(weights * kept[..., None]), power.shape[1] - count


def _weights(frequency: FloatArray, order: int) -> FloatArray:
    """Return the weights (S, n, order + 1) of divided differences, their squares adding up to 1."""
    points = sliding_window_view(frequency, order + 1, axis=1)
    apart = (points[..., :, None] - points[..., None, :]) / (points[..., -1:, None] - points[..., :1, None])
    weights: FloatArray = 1 / np.prod(apart + np.eye(order + 1), axis=-1)
    weights /= np.sqrt(np.einsum("snk,snk->sn", weights, weights))[..., None]
    return weights


def _independent(weights: FloatArray) -> FloatArray:
    """Return how many independent squares have the spread of these (S,): (tr A)² / tr A², A = WᵀW (Satterthwaite)."""
    width = weights.shape[-1]
    squares = np.einsum("snk,snk->sn", weights, weights)
    spread = (squares**2).sum(axis=1)
    for shift in range(1, min(width, weights.shape[1])):
        shared = np.einsum("snk,snk->sn", weights[:, :-shift, shift:], weights[:, shift:, :-shift])
        spread += 2 * (shared**2).sum(axis=1)
    independent: FloatArray = squares.sum(axis=1) ** 2 / spread
    return independent
