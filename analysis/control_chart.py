"""The control chart of single values: centre line, limits, and a run on one side of the line."""

from dataclasses import dataclass

import numpy as np

from bandproof.analysis.types import FloatArray

__all__ = ["Limits", "individuals", "relative_spread", "run_length"]

D2 = 1.128  # mean range of two normal values, in standard deviations, as the handbook of `individuals` rounds it
_WIDTH = 3.0  # standard deviations from the centre line to a limit


@dataclass(frozen=True, slots=True)
class Limits:
    """Centre line and control limits of a chart, in the unit of its values."""

    centre: float
    lower: float
    upper: float


def individuals(values: FloatArray, *, least: float = 0.0) -> Limits:
    """Return centre line and limits from values (n,) in the order of time: mean ± 3/1.128 mean moving range of two.

    ``least`` is the smallest standard deviation that values can have: limits are no closer than three of it, because
    the mean range of few values may come out small by chance.

    Source: NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2, individuals control charts (from memory).

    Raises
    ------
    ValueError
        Fewer than two values.

    Examples
    --------
    >>> flow = [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]
    >>> limits = individuals(np.array(flow))
    >>> print(f"{limits.lower:.4f} {limits.centre:.2f} {limits.upper:.4f}")
    45.8159 50.81 55.8041
    """
    if values.ndim != 1 or len(values) < 2:
        raise ValueError(f"a chart needs two values or more, found an array of {values.shape}")
    centre = float(values.mean())
    spread = max(float(np.abs(np.diff(values)).mean()) / D2, least)
    return Limits(centre, centre - _WIDTH * spread, centre + _WIDTH * spread)


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
