"""Standard-value parts as people and programs read them: the choices as a plain object and as lines of text."""

import math
import textwrap
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from bandproof.analysis.circuits import MfbFigures, mfb_figures
from bandproof.analysis.one_pole import one_pole_design
from bandproof.analysis.spread import variance_shares, worst_case
from bandproof.analysis.standard_parts import (
    CAPACITANCE,
    NAMES,
    RESISTANCE,
    Choice,
    part_sensitivities,
    usual_range,
)
from bandproof.analysis.types import FloatArray
from bandproof.bench.quantities import engineering

__all__ = ["PartsRequest", "described", "in_decibels", "parts_lines", "parts_object"]

_FIGURES = ("centre", "q", "gain")
_LABELS = ("f0", "Q", "gain")
_TIED = "\u00a0"  # a space where no line is to end


@dataclass(frozen=True, slots=True)
class PartsRequest:
    """What is asked for, in SI."""

    wanted: MfbFigures
    resistors: str
    capacitors: str | None  # None: one capacitance was named
    capacitances: tuple[float, ...]
    gbw: float
    tolerances: tuple[float, float]  # of resistors, of capacitors


def parts_object(request: PartsRequest, choices: tuple[Choice, ...]) -> dict[str, Any]:
    """Return what ``--json`` prints: plain values, SI, ratios."""
    return {
        "schema": "bandproof-parts/1",
        "wanted": _plain_figures(request.wanted),
        "gain_bandwidth": request.gbw if math.isfinite(request.gbw) else None,
        "resistors": request.resistors,
        "capacitors": request.capacitors,
        "usual_resistance": list(RESISTANCE),
        "usual_capacitance": list(CAPACITANCE),
        "tolerance_resistors": request.tolerances[0],
        "tolerance_capacitors": request.tolerances[1],
        "is_within_ranges": not choices[0].breaches,
        "choices": [_plain_choice(request, choice) for choice in choices],
    }


def parts_lines(request: PartsRequest, choices: tuple[Choice, ...]) -> Iterator[str]:
    """Yield the lines a person reads, at most 80 columns, but the last, which goes into a board file as it is."""
    yield f"Multiple-feedback band-pass for {described(request.wanted)}"
    yield f"resistors   {request.resistors}, {_span(RESISTANCE, 'Ω')}"
    series = f"{request.capacitors}, {_span(CAPACITANCE, 'F')}"
    yield f"capacitors  C_1 = C_2 {f'of {series}' if request.capacitors else '= ' + _value('C_1', choices[0])}"
    yield f"op-amp      {_op_amp(request)}"
    yield ""
    yield "     C_1 = C_2      R_in   R_shunt  R_feedback      f0       Q    gain   worst"
    yield from (_row(number, choice) for number, choice in enumerate(choices, 1))
    yield ""
    yield "Errors of f0, Q and gain are relative; worst is the largest of the three."
    for text in (*_equally_sensitive(request, choices), *_breaches(request, choices[0])):
        for line in textwrap.wrap(text, 80, subsequent_indent="  ", break_on_hyphens=False):
            yield line.replace(_TIED, " ")
    yield from _first_lines(request, choices[0])


def described(wanted: MfbFigures) -> str:
    """Return the wanted figures in one phrase."""
    return f"{engineering(wanted.f0, 'Hz', 6)}, Q {wanted.q:.6g}, gain {in_decibels(wanted.gain):.4g} dB"


def in_decibels(ratio: float) -> float:
    """Return a voltage ratio in dB."""
    return 20.0 * math.log10(ratio)


def _plain_figures(figures: MfbFigures) -> dict[str, float]:
    return {"centre": figures.f0, "q": figures.q, "gain": figures.gain}


def _plain_choice(request: PartsRequest, choice: Choice) -> dict[str, Any]:
    slopes, worst, sd = _sensitivity(request, choice)
    return {
        "parts": {name: getattr(choice.parts, name) for name in NAMES},
        "breaches": list(choice.breaches),
        "error": choice.error,
        "errors": dict(zip(_FIGURES, choice.errors, strict=True)),
        "figures": _plain_figures(choice.figures),
        "figures_ideal": _plain_figures(mfb_figures(choice.parts)),
        "sensitivities": {
            name: dict(zip(_FIGURES, row, strict=True)) for name, row in zip(NAMES, slopes.T.tolist(), strict=True)
        },
        "spread": {
            figure: {"worst_case": most, "standard_deviation": one}
            for figure, most, one in zip(_FIGURES, worst.tolist(), sd.tolist(), strict=True)
        },
    }


def _sensitivity(request: PartsRequest, choice: Choice) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return sensitivities (3, 5) of f0, Q, gain by part; their worst case and standard deviation (3,), relative."""
    by_part = part_sensitivities(choice.parts, gbw=request.gbw)
    slopes = np.array([by_part[name] for name in NAMES]).T
    tolerances = np.array([request.tolerances[name.startswith("C")] for name in NAMES])
    return slopes, worst_case(slopes, tolerances), variance_shares(slopes, tolerances)[0]


def _equally_sensitive(request: PartsRequest, choices: tuple[Choice, ...]) -> Iterator[str]:
    """Yield why choices are not ranked by sensitivity, where there are several."""
    if len(choices) > 1:
        largest = sorted({f"{np.abs(_sensitivity(request, choice)[0]).max():.2f}" for choice in choices})
        size = largest[0] if len(largest) == 1 else f"{largest[0]} to {largest[-1]}"
        yield (
            "Sensitivity ranks none of them: with C_1 = C_2 it follows from the wanted figures (1 % of a part moves a "
            f"figure by at most {size} % in every choice)."
        )


def _row(number: int, choice: Choice) -> str:
    c, r_in, r_shunt, r_feedback = (_value(name, choice) for name in ("C_1", "R_in", "R_shunt", "R_feedback"))
    errors = "".join(f"{_percent(error):>8}" for error in choice.errors)
    mark = " !" if choice.breaches else ""
    return f"{number:>3}{c:>11}{r_in:>10}{r_shunt:>10}{r_feedback:>12}{errors}{100 * choice.error:>7.2f}%{mark}"


def _breaches(request: PartsRequest, first: Choice) -> Iterator[str]:
    """Yield what lies outside the usual ranges, if anything does, and what would help."""
    if not first.breaches:
        return
    found = "; ".join(_breach(name, first) for name in first.breaches)
    if not any(name.startswith("R") for name in first.breaches):
        yield f"! Outside {_span(CAPACITANCE, 'F')}: {found}."
        return
    who = f"No capacitor of {request.capacitors} keeps" if request.capacitors else "This capacitor does not keep"
    yield f"! {who} all resistors within {_span(RESISTANCE, 'Ω')}. Nearest: {found}."
    yield f"  {_way_out(request, first)}, or accept the breach."


def _way_out(request: PartsRequest, first: Choice) -> str:
    """Return what would keep all resistors within their range, as a sentence without its end."""
    wanted = np.array([[request.wanted.f0], [request.wanted.q], [request.wanted.gain]])
    g_in, g_node, g_feedback = one_pole_design(wanted, gbw=request.gbw)[:, 0]  # for 1 F
    exact = 1.0 / np.array([g_in, g_node - g_in, g_feedback])
    low, high = float(exact.max()) / RESISTANCE[1], float(exact.min()) / RESISTANCE[0]  # capacitors that would do
    if low > high:
        widest, most = exact.max() / exact.min(), RESISTANCE[1] / RESISTANCE[0]
        return (
            "R_feedback is 2 gain times R_in and 2 (2Q² - gain) times R_shunt whatever the capacitor. Largest over "
            f"smallest is {widest:.0f} here, and the range holds {most:.0f}: change Q or gain"
        )
    fall = "All resistors fall as the capacitors rise"
    if high < CAPACITANCE[0]:
        ends = f"one is below {_near(RESISTANCE[0], 'Ω')} already at {_near(CAPACITANCE[0], 'F')}"
        return f"{fall}, and {ends}: a lower centre is left, or a smaller capacitor (about {_near(high, 'F')})"
    if low > CAPACITANCE[1]:
        ends = f"one is above {_near(RESISTANCE[1], 'Ω')} still at {_near(CAPACITANCE[1], 'F')}"
        return f"{fall}, and {ends}: a higher centre is left, or a larger capacitor (about {_near(low, 'F')})"
    one = (
        "one of another series" if request.capacitors else "a smaller one" if low < first.parts.C_1 else "a larger one"
    )
    return (
        f"{fall}: take {one}, about {_near(max(low, CAPACITANCE[0]), 'F')} to {_near(min(high, CAPACITANCE[1]), 'F')}"
    )


def _near(value: float, unit: str) -> str:
    return engineering(value, unit, 3).replace(" ", _TIED)


def _breach(name: str, choice: Choice) -> str:
    low, high = usual_range(name)
    is_low = getattr(choice.parts, name) < low
    end = engineering(low if is_low else high, "F" if name.startswith("C") else "Ω")
    return f"{name} {_value(name, choice)} ({'below' if is_low else 'above'} {end})".replace(" ", _TIED)


def _first_lines(request: PartsRequest, choice: Choice) -> Iterator[str]:
    slopes, worst, sd = _sensitivity(request, choice)
    is_real = math.isfinite(request.gbw)
    yield ""
    head = f"{'Choice 1':<9}{'wanted':>11}{'ideal op-amp':>14}" + (f"{'this op-amp':>13}" if is_real else "")
    yield f"{head}{'error':>9}{'worst case':>15}{'spread':>8}"
    wanted, ideal, real = (_texts(x) for x in (request.wanted, mfb_figures(choice.parts), choice.figures))
    for i, label in enumerate(_LABELS):
        figures = f"{label:<9}{wanted[i]:>11}{ideal[i]:>14}" + (f"{real[i]:>13}" if is_real else "")
        ends, spread = f"±{100 * worst[i]:.2g} %", f"{100 * sd[i]:.2g} %"
        yield f"{figures}{_percent(choice.errors[i]):>9}{ends:>15}{spread:>8}"
    yield ""
    yield f"{'1 % more of':<12}{'moves f0':>9}{'Q':>9}{'gain':>9}"
    for name, row in zip(NAMES, slopes.T.tolist(), strict=True):
        yield f"{name:<12}" + "".join(f"{_percent(slope / 100):>9}" for slope in row)
    yield ""
    resistor, capacitor = (f"±{100 * x:g} %" for x in request.tolerances)
    yield f"With resistors {resistor}, capacitors {capacitor}. Worst case: each part at the end of its"
    yield "tolerance that does harm; spread: one standard deviation, parts uniform within"
    yield "tolerance. For the board file:"
    yield ""
    yield "parts = { " + ", ".join(f'{name} = "{_value(name, choice, 6)}"' for name in NAMES) + " }"


def _value(name: str, choice: Choice, digits: int = 4) -> str:
    return engineering(getattr(choice.parts, name), "F" if name.startswith("C") else "Ω", digits)


def _span(ends: tuple[float, float], unit: str) -> str:
    return " to ".join(engineering(end, unit) for end in ends)


def _texts(figures: MfbFigures) -> tuple[str, str, str]:
    return engineering(figures.f0, "Hz", 5), f"{figures.q:.4g}", f"{in_decibels(figures.gain):.2f} dB"


def _op_amp(request: PartsRequest) -> str:
    if math.isfinite(request.gbw):
        return f"gain-bandwidth product {engineering(request.gbw, 'Hz')}; errors are those with it"
    return "ideal; a real one's gain-bandwidth product: --gbw"


def _percent(fraction: float) -> str:
    return f"{round(100.0 * fraction, 2) + 0.0:+.2f}%"
