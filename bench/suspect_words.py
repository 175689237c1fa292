"""Suspects in the words of a bench: what reads like what, and what is to be looked at."""

from collections.abc import Sequence
from math import exp, isfinite, log, log10

import numpy as np

from bandproof.analysis.e_series import nearest_preferred
from bandproof.analysis.suspects import Hypothesis, Judgement
from bandproof.analysis.tolerances import Circuit
from bandproof.bench.quantities import engineering
from bandproof.bench.types import Suspect

__all__ = ["suspects_of"]

_SURE = 3.0  # standard uncertainties an estimate may lie beside the value it is taken for
_ROUND = {2.0: "twice the value", 0.5: "half the value"}
_SERIES = ("E12", "E24", "E96")
_TIMES = {-2: "a hundredth of", -1: "a tenth of", 1: "ten times", 2: "a hundred times"}  # by decades
_TRIED = ("a probe's factor", "swapped channels", "another reel", "one wrong part", "two exchanged")
_NEAR = 0.05  # of ln: an estimate this near to a round factor is taken for it


def suspects_of(
    judgements: Sequence[Judgement], circuits: Sequence[Circuit], names: Sequence[str]
) -> dict[str, tuple[Suspect, ...]]:
    """Return suspects by stage; one about several stages is with the first of them."""
    found: dict[str, tuple[Suspect, ...]] = {}
    if len(judgements) == len(names) > 1 and not any(judgement.explained for judgement in judgements):
        delta = min(judgement.delta_chi_square for judgement in judgements)
        return {names[0]: (Suspect(f"all stages: {_unexplained(names)}", "unexplained", (), None, delta),)}
    for judgement in judgements:
        first = judgement.candidates[0]
        where = names[first.stages[0]]
        found[where] = (*found.get(where, ()), _suspect(judgement, circuits, names))
    return found


def _suspect(judgement: Judgement, circuits: Sequence[Circuit], names: Sequence[str]) -> Suspect:
    first, *others = judgement.candidates
    parts = tuple(dict.fromkeys(name for h in judgement.candidates for name in _parts(h, circuits)))
    delta = judgement.delta_chi_square
    if not judgement.explained:
        text = f"{names[first.stages[0]]}: {_unexplained(names)}"
        return Suspect(text, "unexplained", (), None, delta)
    if others:
        alternatives = "; ".join(_short(h, circuits, names) for h in judgement.candidates)
        return Suspect(
            f"{_at(first, names)}not distinguishable: {alternatives}", "not distinguishable", parts, None, delta
        )
    return Suspect(
        _at(first, names) + _told(first, circuits, names), _kind(first), parts, _estimate(first, circuits), delta
    )


def _unexplained(names: Sequence[str]) -> str:
    """Return what was tried in vain, no more than was."""
    tried = ", ".join((*_TRIED, "another stage's test point") if len(names) > 1 else _TRIED)
    return f"outside what tolerances and U allow, and none of these gives it: {tried}. More than one fault?"


def _at(hypothesis: Hypothesis, names: Sequence[str]) -> str:
    """Return the stage as it begins a sentence, nothing where the board is meant."""
    is_board = hypothesis.kind == "common" or (hypothesis.kind in ("probe", "channels") and len(hypothesis.stages) > 1)
    return "" if is_board else f"{names[hypothesis.stages[0]]}: "


def _kind(hypothesis: Hypothesis) -> str:
    match hypothesis.kind:
        case "part":
            missing = hypothesis.ends and (hypothesis.log_factor > 0.0) == (hypothesis.names[0][0] != "C")
            return "missing" if missing else "bridged" if hypothesis.ends else "part"
        case "common":
            return "common factor"
        case "swapped":
            return "swapped"
        case "probe" | "channels" | "tap":
            return "bench"
        case "nothing":
            return "unexplained"


def _parts(hypothesis: Hypothesis, circuits: Sequence[Circuit]) -> tuple[str, ...]:
    if hypothesis.kind != "common":
        return hypothesis.names
    circuit = circuits[hypothesis.stages[0]]
    return tuple(part for part, kind in zip(circuit.parts, circuit.kinds, strict=True) if kind == hypothesis.names[0])


def _estimate(hypothesis: Hypothesis, circuits: Sequence[Circuit]) -> float | None:
    """Return the value of a part in SI, or a common factor; None where none can be had."""
    if hypothesis.ends or not isfinite(hypothesis.log_factor):
        return None
    if hypothesis.kind == "part":
        return _drawn(hypothesis, circuits) * exp(hypothesis.log_factor)
    return exp(hypothesis.log_factor)


def _tolerance(hypothesis: Hypothesis, circuits: Sequence[Circuit]) -> float:
    circuit = circuits[hypothesis.stages[0]]
    return float(circuit.tolerances[circuit.parts.index(hypothesis.names[0])])


def _drawn(hypothesis: Hypothesis, circuits: Sequence[Circuit]) -> float:
    circuit = circuits[hypothesis.stages[0]]
    return float(circuit.values[circuit.parts.index(hypothesis.names[0])])


def _told(hypothesis: Hypothesis, circuits: Sequence[Circuit], names: Sequence[str]) -> str:
    """Return what a hypothesis says, as a sentence."""
    percent = 100.0 * abs(np.expm1(hypothesis.log_factor)) if isfinite(hypothesis.log_factor) else 0.0
    high = "high" if hypothesis.log_factor > 0.0 else "low"
    match hypothesis.kind:
        case "part":
            return _part_told(hypothesis, circuits)
        case "swapped":
            return f"{hypothesis.names[0]} and {hypothesis.names[1]} are swapped"
        case "common":
            return f"all {hypothesis.names[0]}s read about {percent:.2g} % {high}: another reel or another type?"
        case "probe":
            way = f"{_TIMES[round(hypothesis.log_factor / log(10.0))]} the gain"
            return f"{_where(hypothesis, names)}{way}: is the probe's factor set as the bench file says?"
        case "channels":
            return f"{_where(hypothesis, names)}its gain upside down: are the two channels swapped?"
        case "tap":
            return f"reads like {names[hypothesis.stages[1]]}: is the probe on another test point?"
        case "nothing":
            return "nothing, by an unlikely chance"


def _where(hypothesis: Hypothesis, names: Sequence[str]) -> str:
    """Return who reads so: a stage that was named already, all, or those from one on."""
    if len(hypothesis.stages) == 1:
        return "reads "
    return (
        "every stage reads "
        if hypothesis.stages[0] == 0
        else f"from {names[hypothesis.stages[0]]} on every stage reads "
    )


def _part_told(hypothesis: Hypothesis, circuits: Sequence[Circuit]) -> str:
    name, value, factor = hypothesis.names[0], _drawn(hypothesis, circuits), exp(hypothesis.log_factor)
    unit = "F" if name.startswith("C") else "Ω"
    drawn = f"where {engineering(value, unit)} {'were' if unit == 'F' else 'was'} drawn"
    if hypothesis.ends:
        return f"{name} is missing or open" if _kind(hypothesis) == "missing" else f"{name} is bridged or shorted"
    near = max(_NEAR, _SURE * hypothesis.u)
    decades = round(log10(factor))
    if decades and abs(hypothesis.log_factor - decades * log(10.0)) < near:
        return f"{name} reads like {engineering(value * 10.0**decades, unit)} {drawn}: wrong decade"
    if 1.0 / 1.5 < factor < 1.5:
        return f"{name} reads about {_off(factor)}: {engineering(value * factor, unit, 3)} {drawn}"
    words = [words for ratio, words in _ROUND.items() if abs(hypothesis.log_factor - log(ratio)) < near]
    found = engineering(_sold(value * factor, max(hypothesis.u, _tolerance(hypothesis, circuits))), unit, 3)
    return f"{name} reads like {found} {drawn}: {(words or ['wrong value'])[0]}"


def _sold(value: float, width: float) -> float:
    """Return the value of the coarsest series that an estimate can be meant by, the estimate where there is none."""
    near = (nearest_preferred(value, series) for series in _SERIES)
    return next((preferred for preferred in near if abs(log(preferred / value)) < width), value)


def _off(factor: float) -> str:
    return f"{100.0 * abs(factor - 1.0):.2g} % {'high' if factor > 1.0 else 'low'}"


def _short(hypothesis: Hypothesis, circuits: Sequence[Circuit], names: Sequence[str]) -> str:
    """Return a hypothesis as one of several that cannot be told apart."""
    if hypothesis.kind == "part" and not hypothesis.ends:
        unit = "F" if hypothesis.names[0].startswith("C") else "Ω"
        value = _drawn(hypothesis, circuits)
        return (
            f"{hypothesis.names[0]} (about {engineering(value * exp(hypothesis.log_factor), unit, 3)} for "
            f"{engineering(value, unit)})"
        )
    return _told(hypothesis, circuits, names).rstrip("?").partition(":")[0]
