"""Values as a document prints them: figures, limits, rules, times; one spelling for all its tables."""

from math import isfinite, isnan, log10

from bandproof.bench.quantities import decimals, engineering, with_uncertainty
from bandproof.bench.rules import read_rule
from bandproof.bench.types import Comparison, Quantity

__all__ = ["SYMBOLS", "WORDS", "designed", "deviation", "limits", "measured", "rule_meaning", "utc", "why_undecided"]

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
    half = _half_dB(relative)
    places = max(0, decimals(half))
    return f"{_dB(value):.{places}f} ± {half:.{places}f} dB"


def _half_dB(relative: float) -> float:
    return 0.5 * (_dB(1.0 + relative) - _dB(1.0 - relative))


def deviation(figure: Comparison) -> str:
    """Return measured against designed, in per cent, gain in decibels."""
    if not isfinite(figure.measured):
        return _DASH
    if figure.quantity == "gain":
        return f"{_dB(figure.measured / figure.designed):+.2f} dB"
    return f"{100.0 * figure.deviation:+.2f} %"


def limits(figure: Comparison, ends: tuple[float, ...] = ()) -> str:
    """Return the limits a figure must keep, or those ``ends`` of them."""
    ends = ends or (figure.lower_limit, figure.upper_limit)
    if figure.quantity == "gain":
        return " to ".join(f"{_dB(end):.4g}" for end in ends) + " dB"
    return " to ".join(engineering(end, figure.unit) for end in ends)


def why_undecided(figure: Comparison) -> str:
    """Return why an undecided figure neither passes nor fails, to be read after its name and value."""
    rule, probability = read_rule(figure.rule), figure.conformance_probability
    if isnan(probability):
        return "is doubted: something speaks against the measurement itself, see the cautions"
    if rule.kind == "risk":
        return (
            f"is within its limits with a probability of {100.0 * probability:.4g} %: "
            f"passes from {100.0 - 100.0 * rule.size:g} %, fails up to {100.0 * rule.size:g} %"
        )
    band = rule.size * figure.expanded_uncertainty
    is_low = figure.measured - figure.lower_limit < figure.upper_limit - figure.measured
    limit, words = (figure.lower_limit, ("from", "below")) if is_low else (figure.upper_limit, ("up to", "above"))
    inner, outer = (limit + band, limit - band) if is_low else (limit - band, limit + band)
    passes = f"passes {words[0]} {_as_fine(figure, inner)}"
    if 2.0 * band > figure.upper_limit - figure.lower_limit:
        passes = "passes nowhere, U is too large for these limits"
    near = limits(figure, (limit,))
    return f"is within {rule.size:g} U of its limit {near}: {passes}, fails {words[1]} {_as_fine(figure, outer)}"


def _as_fine(figure: Comparison, value: float) -> str:
    """Return a value of a figure to the decimal place of its U."""
    if figure.quantity != "gain":
        number, _, _, *unit = with_uncertainty(value, figure.expanded_uncertainty, figure.unit).split()
        return " ".join([number, *unit])
    if value <= 0.0:
        return "-∞ dB"
    relative = figure.expanded_uncertainty / figure.measured
    return f"{_dB(value):.{max(0, decimals(_half_dB(relative)))}f} dB" if relative < 1.0 else f"{_dB(value):.2f} dB"


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
