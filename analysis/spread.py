"""What tolerances of parts make of many boards: drawn parts, the spread of figures, fractions with their error."""

from __future__ import annotations

from dataclasses import dataclass
from math import nan, sqrt

import numpy as np

from bandproof.analysis.types import BoolArray, FloatArray

__all__ = ["Fraction", "Spread", "drawn", "fraction", "spread_of", "uniform_variance", "variance_shares", "worst_case"]

_RANGE = (0.025, 0.975)  # of the boards, so that 95 % lie between


@dataclass(frozen=True, slots=True)
class Fraction:
    """A fraction of draws and its standard error; where all or none were hit, the error is that of one draw."""

    value: float
    error: float


@dataclass(frozen=True, slots=True)
class Spread:
    """How a figure is spread over boards.

    Mean; standard deviation and its standard error; what 95 % of the boards lie between.
    """

    mean: float
    sd: float
    sd_error: float
    low: float
    high: float


def drawn(values: FloatArray, tolerances: FloatArray, count: int, rng: np.random.Generator) -> FloatArray:
    """Return part values (K, P) of K boards, uniform within tolerance, independent.

    Parameters
    ----------
    values, tolerances : (P,) float arrays
        As drawn, and relative half-widths.

    Examples
    --------
    >>> parts = drawn(np.array([100.0, 10.0]), np.array([0.01, 0.0]), 1000, np.random.default_rng(1))
    >>> parts.shape, bool(abs(parts[:, 0] - 100.0).max() <= 1.0), parts[0, 1].item()
    ((1000, 2), True, 10.0)
    """
    result: FloatArray = values * (1.0 + tolerances * rng.uniform(-1.0, 1.0, (count, len(values))))
    return result


def spread_of(figure: FloatArray) -> Spread:
    """Return the spread of a figure (K,) over K boards.

    The error of the standard deviation is that of a sample of any distribution, from its own fourth moment.

    Raises
    ------
    ValueError
        Fewer than two boards.

    Examples
    --------
    >>> found = spread_of(np.random.default_rng(1).uniform(-1.0, 1.0, 10_000))
    >>> abs(found.sd - 3**-0.5) < 3.0 * found.sd_error, abs(found.high - 0.95) < 0.01
    (True, True)
    """
    count = figure.size
    if count < 2:
        raise ValueError(f"a spread needs two boards at least, found {count}")
    mean = float(figure[0] + (figure - figure[0]).mean())  # so that equal values have no spread at all
    squares = (figure - mean) ** 2
    sd = sqrt(float(squares.sum()) / (count - 1))
    error = float(squares.std()) / (2.0 * sd * sqrt(count)) if sd else 0.0
    low, high = np.quantile(figure, _RANGE)
    return Spread(mean, sd, error, float(low), float(high))


def fraction(hit: BoolArray) -> Fraction:
    """Return which fraction of draws (K,) was hit.

    Examples
    --------
    >>> fraction(np.arange(100) < 90)
    Fraction(value=0.9, error=0.03)
    """
    count = hit.size
    if not count:
        return Fraction(nan, nan)
    value = float(hit.mean())
    return Fraction(value, sqrt(max(value * (1.0 - value), 1.0 / count) / count))


def uniform_variance(half_width: FloatArray) -> FloatArray:
    """Return the variance of what is uniform within ± a half-width (JCGM 100:2008, 4.3.7)."""
    variance: FloatArray = half_width**2 / 3.0
    return variance


def variance_shares(slopes: FloatArray, tolerances: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return what each part gives to the spread of figures, to first order.

    Parameters
    ----------
    slopes : (F, P) float array
        Derivatives of the ln of each figure by the ln of each part's value.
    tolerances : (P,) float array
        Relative half-widths; the values are uniform within.

    Returns
    -------
    relative standard deviations (F,) and shares of their squares (F, P), 0 where nothing is spread

    Examples
    --------
    >>> sd, shares = variance_shares(np.array([[-0.5, -0.5]]), np.array([0.03, 0.04]))
    >>> print(f"{100.0 * sd[0]:.4f} {shares[0, 1]:.2f}")
    1.4434 0.64
    """
    variance = uniform_variance(slopes * tolerances)
    total = variance.sum(axis=1, keepdims=True)
    return np.sqrt(total[:, 0]), np.divide(variance, total, out=np.zeros_like(variance), where=total > 0.0)


def worst_case(slopes: FloatArray, tolerances: FloatArray) -> FloatArray:
    """Return how far figures (F,) go, relative, to first order, with every part at the harmful end of its tolerance.

    Slopes (F, P) and tolerances (P,) as for `variance_shares`.
    """
    worst: FloatArray = np.abs(slopes) @ tolerances
    return worst
