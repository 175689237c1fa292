"""Risks of wrong decisions over a whole process: a consumer's (accepted, not conforming) and a producer's.

Source: JCGM 106:2012, 9.5: global risks are integrals of the prior of the property times the probability that its
measured value, normal around it, falls inside the acceptance limits. Nothing is drawn: the inner integral is the
normal distribution function, the outer one is done by quadrature. The program counts drawn boards; this is the witness.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import exp, inf, isfinite, pi, sqrt

__all__ = ["Risks", "normal_process", "risks"]

Density = Callable[[float], float]
_TAIL = 40.0  # standard deviations: a normal density is 0 beyond
_BLURRED = 12.0  # measurement uncertainties around an acceptance limit that an integral resolves on its own


@dataclass(frozen=True, slots=True)
class Risks:
    """Probabilities over a process and its measurement.

    Attributes
    ----------
    outside : float
        That an item does not conform, whatever is decided.
    accepted : float
        That it is accepted.
    consumer : float
        That it is accepted and does not conform (global false acceptance).
    producer : float
        That it is not accepted and conforms (global false rejection).
    """

    outside: float
    accepted: float
    consumer: float
    producer: float

    @property
    def conditional_false_acceptance(self) -> float:
        """Probability that an accepted item does not conform; nan where nothing is accepted."""
        return self.consumer / self.accepted if self.accepted else float("nan")


def normal_process(mean: float, sd: float) -> tuple[Density, tuple[float, float]]:
    """Return the density of a normal process and the ends beyond which it is nothing.

    Raises
    ------
    ValueError
        sd is not positive.
    """
    if not (sd > 0.0 and isfinite(sd) and isfinite(mean)):
        raise ValueError(f"a process must have a finite mean and an sd above 0, found {mean!r} and {sd!r}")
    height = 1.0 / (sd * sqrt(2.0 * pi))

    def density(x: float) -> float:
        return height * exp(-0.5 * ((x - mean) / sd) ** 2)

    return density, (mean - _TAIL * sd, mean + _TAIL * sd)


def risks(
    density: Density,
    ends: tuple[float, float],
    u: float,
    *,
    low: float = -inf,
    high: float = inf,
    accept_low: float | None = None,
    accept_high: float | None = None,
    knots: Sequence[float] = (),
) -> Risks:
    """Return the risks of deciding by acceptance limits.

    Parameters
    ----------
    density : callable
        Probability density of the property over the process (`normal_process`, or any other).
    ends : (float, float)
        Where the density begins and ends; both may be infinite.
    u : float
        Standard uncertainty of the measurement, normal around the property, 0 or more.
    low, high : float
        Tolerance limits.
    accept_low, accept_high : float, optional
        Acceptance limits on the measured value; the tolerance limits without.
    knots : sequence of float
        Where a density has corners or a narrow peak, for the quadrature.

    Raises
    ------
    ValueError
        u is negative, or limits are crossed.

    Examples
    --------
    A process of sd 4 measured with an sd of 1 against ±8 (D. Deaver: 0.8 % and 1.5 %):

    >>> found = risks(*normal_process(0.0, 4.0), 1.0, low=-8.0, high=8.0)
    >>> print(f"{found.consumer:.4%} {found.producer:.4%}")
    0.8006% 1.4851%
    """
    accept_low = low if accept_low is None else accept_low
    accept_high = high if accept_high is None else accept_high
    if not u >= 0.0:
        raise ValueError(f"u must not be negative, found {u!r}")
    if not low <= high:
        raise ValueError(f"low must not be above high, found {low!r} and {high!r}")
    accepting = _accepting(u, accept_low, accept_high)
    sides = (-_BLURRED, -3.0, 0.0, 3.0, _BLURRED)
    blurred = [limit + side * u for limit in (accept_low, accept_high) for side in sides]
    marks = [*knots, *blurred, low, high]

    def integral(chance: Density, start: float, stop: float) -> float:
        return _integral(lambda x: density(x) * chance(x), max(start, ends[0]), min(stop, ends[1]), marks)

    def both(chance: Density) -> float:
        return integral(chance, -inf, low) + integral(chance, high, inf)

    consumer, inside = both(accepting), integral(accepting, low, high)
    return Risks(
        outside=both(lambda x: 1.0),
        accepted=consumer + inside,
        consumer=consumer,
        producer=integral(lambda x: 1.0 - accepting(x), low, high),
    )


def _accepting(u: float, low: float, high: float) -> Density:
    """Return the probability that a property of a true value is accepted."""
    from scipy.special import ndtr

    if low > high:
        return lambda x: 0.0
    if u == 0.0:
        return lambda x: float(low <= x <= high)
    return lambda x: float(
        ndtr((high - x) / u) - ndtr((low - x) / u) if low < x else ndtr((x - low) / u) - ndtr((x - high) / u)
    )


def _integral(function: Density, start: float, stop: float, marks: Sequence[float]) -> float:
    """Return an integral in pieces between marks, so that no narrow part falls between the points of a rule."""
    from scipy.integrate import quad

    if not start < stop:
        return 0.0
    edges = [start, *sorted({mark for mark in marks if start < mark < stop}), stop]
    return float(sum(quad(function, a, b, epsabs=1e-15, epsrel=1e-12, limit=200)[0] for a, b in pairwise(edges)))
