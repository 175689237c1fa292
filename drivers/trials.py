"""Which values a walk sets a number to: always the same, moved into the limits that the dialect declares."""

from __future__ import annotations

import math

from bandproof.drivers.instrument import spelt
from bandproof.drivers.slots import Number

__all__ = ["AWKWARD", "limits_of", "trials"]

AWKWARD = 1234.56789  # Hz: no round one, as a sweep asks for; arbitrary


def trials(number: Number, wanted: tuple[float, ...]) -> tuple[float, ...]:
    """Return values within a number's limits: two, or one where they leave no more; between them what they allow.

    Parameters
    ----------
    number : Number
        Its limits hold; its format must tell the two apart.
    wanted : tuple of float, two or more
        SI; taken as they are if the limits allow it. The last is what the instrument is left at.

    Returns
    -------
    tuple of float
        SI.
    """
    low, high = number.limits
    first, last = (min(max(value, low), high) for value in (wanted[0], wanted[-1]))
    if number.reciprocal and 0 in (first, last):
        first = last = first or last or 1.0  # nothing is the reciprocal of 0
    if first == last:
        first = _inside(last, high if last == low else low)
    if spelt(number, first) == spelt(number, last):
        return (last,)
    return (first, *(value for value in wanted[1:-1] if low <= value <= high), last)


def _inside(end: float, far: float) -> float:
    """Return a value between one limit and the other, which may be infinite."""
    if math.isinf(far):
        return end + math.copysign(abs(end) or 1.0, far) / 2
    return math.sqrt(end * far) if min(end, far) > 0 else (end + far) / 2


def limits_of(number: Number) -> str:
    """Return the limits that a dialect declares, for people; nothing if it declares none."""
    low, high = number.limits
    if math.isinf(low) and math.isinf(high):
        return ""
    return f" (limits {low:g} to {high:g})"
