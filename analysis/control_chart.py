"""The control chart of single values: centre line, limits, and a run on one side of the line."""

from dataclasses import dataclass
from math import inf, sqrt

import numpy as np

from bandproof.analysis.types import FloatArray
from bandproof.analysis.uncertainty import coverage_factor

__all__ = ["Limits", "prediction_limits", "relative_spread", "run_length"]


@dataclass(frozen=True, slots=True)
class Limits:
    """Centre line and control limits of a chart, in the unit of its values."""

    centre: float
    lower: float
    upper: float


def prediction_limits(values: FloatArray, *, chance: float, least: float = 0.0) -> Limits:
    """Return centre line and limits that the next value leaves by ``chance``, from values (n,) of one normal process.

    Mean ± t s √(1 + 1/n), s their standard deviation with n - 1 degrees of freedom, t Student's: few values know their
    process badly, and a value and the mean of n others differ by more than a value does. For many values and a chance
    of 0.0027 these are the three standard deviations of every handbook's chart. The moving range is not used: it has
    no exact factor for few values. ``least`` is the smallest standard deviation that values can have.

    Source: prediction interval of one further observation (any handbook of statistics); t as JCGM 100:2008, table G.2.

    Raises
    ------
    ValueError
        Fewer than two values.

    Examples
    --------
    >>> flow = [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]
    >>> limits = prediction_limits(np.array(flow), chance=0.0027)
    >>> print(f"{limits.lower:.2f} {limits.centre:.2f} {limits.upper:.2f}")
    42.08 50.81 59.54
    """
    n = len(values)
    if values.ndim != 1 or n < 2:
        raise ValueError(f"a chart needs two values or more, found an array of {values.shape}")
    centre, spread = float(values.mean()), float(values.std(ddof=1))
    t, normal = (coverage_factor(dof, coverage=1.0 - chance) for dof in (n - 1, inf))
    half = max(t * spread, normal * least) * sqrt(1.0 + 1.0 / n)
    return Limits(centre, centre - half, centre + half)


def run_length(values: FloatArray, centre: float) -> int:
    """Return how many of the last values (n,) lie on one side of a centre line, with sign: above is positive.

    Examples
    --------
    >>> run_length(np.array([1.0, 3.0, 3.0, 4.0]), 2.0), run_length(np.array([2.0]), 2.0)
    (3, 0)
    """
    sides = np.sign(values - centre)[::-1]
    if not len(sides) or sides[0] == 0.0:
        return 0
    others = np.flatnonzero(sides != sides[0])
    return int(sides[0]) * int(others[0] if len(others) else len(sides))


def relative_spread(values: FloatArray) -> float:
    """Return the standard deviation of values (n,) over their mean, with n - 1 degrees of freedom (JCGM 100, 4.2.2).

    Examples
    --------
    >>> round(relative_spread(np.array([99.0, 100.0, 101.0])), 9)
    0.01
    """
    return float(values.std(ddof=1)) / abs(float(values.mean()))
