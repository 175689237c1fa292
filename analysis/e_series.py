"""Preferred numbers of resistors and capacitors, E3 to E192.

Source: IEC 60063:2015. A series of n values a decade is 10^(i/n) rounded to two digits (up to E24) or three, but for
the irregular values listed below.
"""

from __future__ import annotations

from functools import cache
from itertools import pairwise
from math import floor, log10

__all__ = ["E_SERIES", "e_series", "nearest_preferred", "preferred_values", "widest_step"]

E_SERIES = {"E3": 3, "E6": 6, "E12": 12, "E24": 24, "E48": 48, "E96": 96, "E192": 192}

# What the rule gives, and what the standard's tables hold instead.
_IRREGULAR_2 = {2.6: 2.7, 2.9: 3.0, 3.2: 3.3, 3.5: 3.6, 3.8: 3.9, 4.2: 4.3, 4.6: 4.7, 8.3: 8.2}
_IRREGULAR_3 = {9.19: 9.20}


@cache
def e_series(name: str) -> tuple[float, ...]:
    """Return the values of one decade, 1 included and 10 not.

    Raises
    ------
    ValueError
        The name is none of E3, E6, E12, E24, E48, E96, E192.

    Examples
    --------
    >>> e_series("E6")
    (1.0, 1.5, 2.2, 3.3, 4.7, 6.8)
    """
    if name not in E_SERIES:
        raise ValueError(f"there is no series {name!r}: known are {', '.join(E_SERIES)}")
    count = E_SERIES[name]
    digits, irregular = (1, _IRREGULAR_2) if count <= 24 else (2, _IRREGULAR_3)
    by_rule = (round(10 ** (i / count), digits) for i in range(count))
    return tuple(irregular.get(value, value) for value in by_rule)


def nearest_preferred(value: float, name: str) -> float:
    """Return the preferred value nearest in ratio.

    Examples
    --------
    >>> nearest_preferred(31831.0, "E96")
    31600.0
    """
    if not value > 0:
        raise ValueError(f"value must be positive, found {value!r}")
    decade = floor(log10(value))
    mantissas = [*e_series(name), 10.0]
    best = min(mantissas, key=lambda mantissa: abs(log10(mantissa) + decade - log10(value)))
    return float(f"{best:.2f}e{decade}")  # by text: 31600, not 31600.000000000004


def preferred_values(name: str, low: float, high: float) -> tuple[float, ...]:
    """Return every preferred value from low to high, both included, ascending.

    Examples
    --------
    >>> preferred_values("E3", 1e-10, 1e-9)
    (1e-10, 2.2e-10, 4.7e-10, 1e-09)
    """
    if not 0 < low <= high:
        raise ValueError(f"low must be positive and not above high, found {low!r} and {high!r}")
    decades = range(floor(log10(low)), floor(log10(high)) + 1)
    values = (float(f"{mantissa:.2f}e{decade}") for decade in decades for mantissa in e_series(name))
    return tuple(value for value in values if low <= value <= high)


def widest_step(name: str) -> float:
    """Return the greatest ratio between neighbours of a series.

    Examples
    --------
    >>> round(widest_step("E24"), 3)
    1.154
    """
    values = (*e_series(name), 10.0)
    return max(above / below for below, above in pairwise(values))
