"""Values as a document prints them: figures, limits, rules, times; one spelling for all its tables."""

from math import isfinite, log10

from bandproof.bench.quantities import decimals, engineering, with_uncertainty
from bandproof.bench.rules import read_rule
from bandproof.bench.types import Comparison, Quantity

__all__ = ["SYMBOLS", "WORDS", "designed", "deviation", "limits", "measured", "of_tolerance", "rule_meaning", "utc"]

SYMBOLS: dict[Quantity, str] = {"centre": "f0", "q": "Q", "gain": "gain"}
WORDS: dict[str | None, str] = {"pass": "pass", "fail": "FAIL", "undecided": "undecided", None: "none"}
_DASH = "–"


def _dB(ratio: float) -> float:
    return 20.0 * log10(abs(ratio))


def designed(figure: Comparison) -> str:
    """Return what a figure was designed to be."""
    if figure.quantity == "gain":
        return f"{_dB(figure.designed):.4g} dB"
    return engineering(figure.designed, figure.unit)


def measured(figure: Comparison) -> str:
    """Return ``value ± U`` of a figure, gain in decibels: U is half the span between the ends there."""
    value, expanded = figure.measured, figure.expanded_uncertainty
    if figure.quantity != "gain":
        return with_uncertainty(value, expanded, figure.unit)
    if not (isfinite(value) and value > 0.0):
        return "not found"
    relative = expanded / value
    if not 0.0 < relative < 1.0:
        return f"{_dB(value):.2f} dB ± unknown"
    half = 0.5 * (_dB(1.0 + relative) - _dB(1.0 - relative))
    places = max(0, decimals(half))
    return f"{_dB(value):.{places}f} ± {half:.{places}f} dB"


def deviation(figure: Comparison) -> str:
    """Return measured against designed, in per cent, gain in decibels."""
    if not isfinite(figure.measured):
        return _DASH
    if figure.quantity == "gain":
        return f"{_dB(figure.measured / figure.designed):+.2f} dB"
    return f"{100.0 * figure.deviation:+.2f} %"


def limits(figure: Comparison) -> str:
    """Return the limits a figure must keep."""
    ends = (figure.lower_limit, figure.upper_limit)
    if figure.quantity == "gain":
        return f"{_dB(ends[0]):.4g} to {_dB(ends[1]):.4g} dB"
    return " to ".join(engineering(end, figure.unit) for end in ends)


def of_tolerance(figure: Comparison) -> float:
    """Return the deviation in units of the room on its side: above 1 the figure is outside its limits; NaN unfound."""
    room = figure.upper_limit if figure.measured >= figure.designed else figure.lower_limit
    return abs(figure.measured - figure.designed) / abs(room - figure.designed)


def rule_meaning(rule: str) -> str:
    """Return in a sentence how a rule decides."""
    meant = read_rule(rule)
    if meant.kind == "guarded":
        return (
            f"pass: inside the limits drawn in by {meant.size:g} U; fail: outside the limits widened by {meant.size:g} "
            "U; between them undecided (JCGM 106, ISO 14253-1)."
        )
    if meant.kind == "risk":
        return (
            f"pass: the probability that the true value is outside the limits is {100.0 * meant.size:g} % at most; "
            "fail: that it is inside is; between them undecided (JCGM 106)."
        )
    return "pass: the measured value is inside the limits; fail: it is outside. U does not shift the limits."


def utc(moment: str) -> str:
    """Return an ISO 8601 moment as a person reads it."""
    return f"{moment[:10]} {moment[11:19]} UTC"
