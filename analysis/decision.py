"""Verdicts against limits.

Source: JCGM 106:2012, conformance probability for a normal state of knowledge; simple acceptance (no guard band).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import inf
from typing import Literal, TypeAlias

__all__ = ["Decision", "Verdict", "conformance_probability", "decide", "worst"]

Verdict: TypeAlias = Literal["pass", "fail", "undecided"]

_ORDER: dict[Verdict, int] = {"pass": 0, "undecided": 1, "fail": 2}


@dataclass(frozen=True, slots=True)
class Decision:
    """A verdict, the probability of conformance (flat prior), and the reason in words ("" for a plain pass)."""

    verdict: Verdict
    probability: float
    reason: str


def conformance_probability(value: float, u: float, *, low: float = -inf, high: float = inf) -> float:
    """Return the probability that the true value lies within the limits, given a value and its standard uncertainty.

    Examples
    --------
    >>> round(conformance_probability(-5.47, 0.05, high=-5.40), 6)
    0.919243
    """
    from scipy.special import ndtr

    if not u >= 0:
        raise ValueError(f"u must not be negative, found {u!r}")
    if u == 0:
        return float(low <= value <= high)
    upper, lower = (high - value) / u, (low - value) / u
    # in the tail where differences of small numbers keep their digits
    return float(ndtr(upper) - ndtr(lower)) if lower < 0 else float(ndtr(-lower) - ndtr(-upper))


def decide(
    value: float, u: float, *, low: float = -inf, high: float = inf, rule: Literal["simple"] = "simple", doubt: str = ""
) -> Decision:
    """Return the verdict on a measured value.

    Parameters
    ----------
    value, u : float
        Measured value and its combined standard uncertainty.
    low, high : float
        Limits, themselves allowed.
    rule : "simple"
        Limits as they are.
    doubt : str
        Why the value cannot be trusted (a material misfit, a missing point); makes the verdict undecided.

    Examples
    --------
    >>> decide(1012.0, 2.0, low=990.0, high=1010.0).reason
    '1012 is above the limit 1010'
    """
    if rule != "simple":
        raise ValueError(f"there is no rule {rule!r}: known is 'simple'")
    if not low <= high:
        raise ValueError(f"low must not be above high, found {low!r} and {high!r}")
    if doubt or value != value:
        return Decision("undecided", float("nan"), doubt or "no value")
    probability = conformance_probability(value, u, low=low, high=high)
    if value < low:
        return Decision("fail", probability, f"{value:.7g} is below the limit {low:.7g}")
    if value > high:
        return Decision("fail", probability, f"{value:.7g} is above the limit {high:.7g}")
    return Decision("pass", probability, "")


def worst(*verdicts: Verdict) -> Verdict:
    """Return the worst verdict: fail before undecided before pass.

    Raises
    ------
    ValueError
        There is no verdict to combine: nothing measured is no pass.
    """
    if not verdicts:
        raise ValueError("no verdicts to combine")
    return max(verdicts, key=_ORDER.__getitem__)
