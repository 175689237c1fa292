"""Verdicts against limits.

Source: JCGM 106:2012, conformance probability for a normal state of knowledge, flat or with a normal prior (7.2, A.4),
guard bands (8.3); ISO 14253-1: conformity is proven inside limits drawn in by the uncertainty, non-conformity outside
limits widened by it, between them neither is.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, isfinite
from typing import TYPE_CHECKING, Literal, TypeAlias

if TYPE_CHECKING:  # light to import: values that people write carry a rule
    from collections.abc import Callable

    import numpy as np
    from numpy.typing import NDArray

    from bandproof.analysis.types import FloatArray

__all__ = ["SIMPLE", "Decision", "Prior", "Rule", "Verdict", "conformance_probability", "decide", "outcomes", "worst"]

Verdict: TypeAlias = Literal["pass", "fail", "undecided"]

_ORDER: dict[Verdict, int] = {"pass": 0, "undecided": 1, "fail": 2}
_WORDS: tuple[Verdict, ...] = ("pass", "undecided", "fail")


@dataclass(frozen=True, slots=True)
class Rule:
    """How limits decide.

    ``simple``: as they are. ``guarded``: pass inside limits drawn in by ``size`` times U, fail outside limits widened
    by as much. ``risk``: pass where the probability of non-conformance is ``size`` at most, fail where that of
    conformance is. Between pass and fail: undecided.
    """

    kind: Literal["simple", "guarded", "risk"] = "simple"
    size: float = 0.0

    def __post_init__(self) -> None:
        most = {"simple": 0.0, "guarded": inf, "risk": 0.5}[self.kind]
        if self.kind != "simple" and not 0.0 < self.size < most:
            raise ValueError(f"size of a rule {self.kind!r} must be above 0 and below {most:g}, found {self.size!r}")


SIMPLE = Rule()


@dataclass(frozen=True, slots=True)
class Prior:
    """What is known of a figure before it is measured: normal, the process' mean and standard deviation."""

    mean: float
    sd: float

    def __post_init__(self) -> None:
        if not (self.sd > 0.0 and isfinite(self.sd) and isfinite(self.mean)):
            raise ValueError(f"a prior must have a finite mean and an sd above 0, found {self.mean!r} and {self.sd!r}")


@dataclass(frozen=True, slots=True)
class Decision:
    """A verdict, the probability of conformance, and the reason in words ("" for a plain pass)."""

    verdict: Verdict
    probability: float
    reason: str


def conformance_probability(
    value: float, u: float, *, low: float = -inf, high: float = inf, prior: Prior | None = None
) -> float:
    """Return the probability that the true value lies within the limits, given a value and its standard uncertainty.

    Without a prior that is flat: nothing was known before.

    Examples
    --------
    >>> round(conformance_probability(-5.47, 0.05, high=-5.40), 6)
    0.919243
    >>> round(conformance_probability(1.0, 1.0, high=1.0, prior=Prior(0.0, 1.0)), 3)  # known as 0.5 with 0.707
    0.76
    """
    import numpy as np

    return float(_probability(np.asarray(value), np.asarray(u), low, high, prior))


def outcomes(
    value: FloatArray,
    u: FloatArray | float,
    *,
    low: float = -inf,
    high: float = inf,
    rule: Rule = SIMPLE,
    expanded: FloatArray | float | None = None,
    prior: Prior | None = None,
    below: Callable[[FloatArray], FloatArray] | None = None,
) -> NDArray[np.int8]:
    """Return the verdicts on many measured values: 0 pass, 1 undecided, 2 fail.

    Parameters
    ----------
    value, u, expanded
        Measured values (any shape), their standard and expanded uncertainty (2 u without).
    low, high : float
        Limits, themselves allowed.
    rule : Rule
    prior : Prior, optional
        What is known beforehand; flat without. Only a rule by risk looks at it.
    below : callable, optional
        Probability that the error of a value is below its argument; normal with ``u`` without, and where there is a
        prior. Only a rule by risk looks at it.

    Raises
    ------
    ValueError
        The limits are crossed, or an uncertainty is negative.

    Examples
    --------
    >>> import numpy as np
    >>> outcomes(np.array([8.0, 9.5, 10.5, 12.0]), 0.5, high=10.0, rule=Rule("guarded", 1.0)).tolist()
    [0, 1, 1, 2]
    """
    import numpy as np

    if not low <= high:
        raise ValueError(f"low must not be above high, found {low!r} and {high!r}")
    value, u = np.asarray(value, dtype=np.float64), np.asarray(u, dtype=np.float64)
    if not np.all(u >= 0.0):
        raise ValueError("u must not be negative")
    if rule.kind == "risk":
        conforming = _probability(value, u, low, high, prior, below)
        passes, fails = 1.0 - conforming <= rule.size, conforming <= rule.size
    else:
        band = rule.size * (2.0 * u if expanded is None else np.asarray(expanded, dtype=np.float64))
        passes = (value >= low + band) & (value <= high - band)
        fails = (value < low - band) | (value > high + band)
    return np.where(passes, 0, np.where(fails, 2, 1)).astype(np.int8)


def decide(
    value: float,
    u: float,
    *,
    low: float = -inf,
    high: float = inf,
    rule: Rule = SIMPLE,
    expanded: float | None = None,
    prior: Prior | None = None,
    below: Callable[[FloatArray], FloatArray] | None = None,
    doubt: str = "",
    reach: float = inf,
) -> Decision:
    """Return the verdict on one measured value; parameters as for `outcomes`.

    Parameters
    ----------
    doubt : str
        Why the value cannot be trusted (a material misfit, a missing point); makes the verdict undecided.
    reach : float
        How far what is doubted can move the value, and U: a value farther outside its limits fails all the same.

    Examples
    --------
    >>> decide(1012.0, 2.0, low=990.0, high=1010.0).reason
    '1012 is above the limit 1010'
    """
    import numpy as np

    if doubt or value != value:
        if not low <= high:
            raise ValueError(f"low must not be above high, found {low!r} and {high!r}")
        if low - reach <= value <= high + reach or value != value:
            return Decision("undecided", float("nan"), doubt or "no value")
        return Decision(
            "fail", 0.0, f"{_reason(value, low, high, 'fail', SIMPLE)}, farther than what is doubted: {doubt}"
        )
    code = outcomes(np.asarray(value), u, low=low, high=high, rule=rule, expanded=expanded, prior=prior, below=below)
    probability = float(_probability(np.asarray(value), np.asarray(u), low, high, prior, below))
    return Decision(_WORDS[int(code)], probability, _reason(value, low, high, _WORDS[int(code)], rule))


def _reason(value: float, low: float, high: float, verdict: Verdict, rule: Rule) -> str:
    side, limit = ("below", low) if abs(value - low) < abs(high - value) else ("above", high)
    if verdict == "pass":
        return ""
    if rule.kind == "risk":
        whose = "either answer" if verdict == "undecided" else "a fail"
        return f"{value:.7g}: the risk of {whose} is {'above' if verdict == 'undecided' else 'at most'} {rule.size:.3g}"
    if verdict == "undecided":
        return f"{value:.7g} is within {rule.size:g} U of the limit {limit:.7g}"
    by = f" by more than {rule.size:g} U" if rule.kind == "guarded" else ""
    return f"{value:.7g} is {side} the limit {limit:.7g}{by}"


def _probability(
    value: FloatArray,
    u: FloatArray,
    low: float,
    high: float,
    prior: Prior | None,
    below: Callable[[FloatArray], FloatArray] | None = None,
) -> FloatArray:
    import numpy as np
    from scipy.special import ndtr

    if not np.all(u >= 0.0):
        raise ValueError(f"u must not be negative, found {u!r}")
    if prior is None and below is not None:  # the true value is the measured one less its error
        return below(value - low) - below(value - high)
    if prior is not None:  # the product of two normal densities is one
        known = u**2 / (u**2 + prior.sd**2)
        value, u = value + known * (prior.mean - value), u * np.sqrt(1.0 - known)
    with np.errstate(divide="ignore", invalid="ignore"):
        upper, lower = (high - value) / u, (low - value) / u
        # in the tail where differences of small numbers keep their digits
        spread = np.where(lower < 0.0, ndtr(upper) - ndtr(lower), ndtr(-lower) - ndtr(-upper))
    probability: FloatArray = np.where(u == 0.0, (low <= value) & (value <= high), spread)
    return probability


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
