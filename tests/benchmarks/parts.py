"""Whether ``parts`` leaves nothing better out: 200 random bands, every triple of the series as the witness.

With an ideal op-amp the witness goes through all triples of the series from 1 kΩ to 1 MΩ by the circuit's textbook
equations; only pairs whose gain alone is already worse are passed over. With a real one, where each triple costs its
cubic, through all within a factor of the exact values that is far beyond any rival (1.5 for E96, 2.5 for E24), for the
first choice within a decade. Every choice must have
the least error there is; a capacitor that is not among the choices must have none within a step of the series; and
where no capacitor has one, the parts outside the usual ranges must be named.
"""

import time
from dataclasses import dataclass
from functools import cache
from math import inf, pi, sqrt

import numpy as np

from bandproof.analysis.circuits import MfbFigures, MfbParts, mfb_network
from bandproof.analysis.curve import network_figures
from bandproof.analysis.e_series import preferred_values, widest_step
from bandproof.analysis.network import OpAmp
from bandproof.analysis.one_pole import one_pole_design, one_pole_figures
from bandproof.analysis.standard_parts import Choice, standard_parts

REQUESTS, SAMPLE = 200, 10
RESISTANCE, CAPACITANCE = (1e3, 1e6), (100e-12, 1e-6)  # as the README says, not as the program does
NEAR = {"E96": 1.5, "E24": 2.5}
SAME = 1e-9  # of one error computed twice
LONGEST = 2.0  # s of processor time for one request


@dataclass(frozen=True)
class Request:
    """One band asked for."""

    wanted: MfbFigures
    resistors: str
    capacitors: str
    gbw: float


@cache
def requests() -> tuple[Request, ...]:
    """Return realizable bands, a third of them with a real op-amp, Q f0 / gbw from 0.002 to 0.2."""
    rng = np.random.default_rng(60063)

    def between(low: float, high: float) -> float:
        return float(low * (high / low) ** rng.uniform())

    def one(number: int) -> Request:
        f0, gain, slowness = between(20.0, 20e3), between(0.2, 20.0), between(0.002, 0.2)
        is_real = number % 3 == 1
        q = sqrt(gain / 2) * (1.02 + 2 * slowness * is_real) * between(1.0, 10.0)
        resistors, capacitors = str(rng.choice(["E24", "E96"])), str(rng.choice(["E6", "E12", "E24"]))
        return Request(MfbFigures(f0, q, gain), resistors, capacitors, q * f0 / slowness if is_real else inf)

    return tuple(one(number) for number in range(REQUESTS))


def least_error(wanted: MfbFigures, capacitance: float, axes: list[np.ndarray], gbw: float, enough: float) -> float:
    """Return the least error of all triples of R_in, R_shunt, R_feedback, inf where none is within ``enough``."""
    r_in, r_shunt, r_feedback = axes
    if min(len(axis) for axis in axes) == 0:
        return inf
    if gbw < inf:
        i, j, k = np.meshgrid(r_in, r_shunt, r_feedback, indexing="ij")
        f0, q, gain = one_pole_figures(i, j, k, capacitance, capacitance, gbw=gbw)
    else:
        i, k = np.meshgrid(r_in, r_feedback, indexing="ij")
        good = np.abs(k / (2 * i) / wanted.gain - 1) <= enough
        i, k, j = i[good][:, None], k[good][:, None], r_shunt[None, :]
        node = 1 / i + 1 / j
        f0, q, gain = np.sqrt(node / k) / (2 * pi * capacitance), np.sqrt(node * k) / 2, k / (2 * i)
    worst = abs(f0 / wanted.f0 - 1)
    for figure, aim in ((q, wanted.q), (gain, wanted.gain)):
        worst = np.maximum(worst, np.abs(figure / aim - 1))
    least = float(worst.min(initial=inf))
    return least if least <= enough else inf


def axes_near(request: Request, capacitance: float, factor: float, within: tuple[float, float]) -> list[np.ndarray]:
    """Return the values of the series within a factor of the exact R_in, R_shunt, R_feedback, and within a range."""
    wanted = np.array([[request.wanted.f0], [request.wanted.q], [request.wanted.gain]])
    node_in, node, feedback = one_pole_design(wanted, gbw=request.gbw)[:, 0] * capacitance
    axes = []
    for exact in (1 / node_in, 1 / (node - node_in), 1 / feedback):
        low, high = max(within[0], exact / factor), min(within[1], exact * factor)
        axes.append(np.array(preferred_values(request.resistors, low, high) if low <= high else ()))
    return axes


def judged(request: Request) -> list[str]:
    """Return what is wrong with the choices for a request, nothing if all is right."""
    capacitances = preferred_values(request.capacitors, *CAPACITANCE)
    choices = standard_parts(request.wanted, capacitances, resistors=request.resistors, gbw=request.gbw)
    found = {choice.parts.C_1: choice for choice in choices}
    if not choices:
        return ["nothing was chosen"]
    if choices[0].breaches:
        return _judged_outside(request, capacitances, found)
    whole = [np.array(preferred_values(request.resistors, *RESISTANCE))] * 3
    step, wrong, leasts = widest_step(request.resistors) - 1, [], []
    for c in capacitances:
        axes = axes_near(request, c, NEAR[request.resistors], RESISTANCE) if request.gbw < inf else whole
        least = least_error(request.wanted, c, axes, request.gbw, found[c].error * (1 + SAME) if c in found else step)
        leasts.append(least)
        if c in found:
            wrong += _compared(found[c], least)
            wrong += [f"{c:g} F: {name} is outside" for name in _outside(found[c].parts)]
        elif least < step:
            wrong.append(f"{c:g} F was left out, {least:.3g} is possible with it")
    wrong += [] if abs(choices[0].error - min(leasts)) < SAME else ["the first choice is not the best"]
    if request.gbw < inf:
        c = choices[0].parts.C_1
        wrong += _compared(
            choices[0], least_error(request.wanted, c, axes_near(request, c, sqrt(10), RESISTANCE), request.gbw, inf)
        )
    return wrong + _by_definition(request, choices[0])


def _judged_outside(request: Request, capacitances: tuple[float, ...], found: dict[float, Choice]) -> list[str]:
    step, wrong = widest_step(request.resistors) - 1, []
    for c in capacitances:
        inside = least_error(
            request.wanted, c, axes_near(request, c, NEAR[request.resistors], RESISTANCE), request.gbw, inf
        )
        if inside < step:
            wrong.append(f"{c:g} F: {inside:.3g} is possible within the ranges")
        axes = axes_near(request, c, NEAR[request.resistors], (0.0, inf))
        wrong += _compared(found[c], least_error(request.wanted, c, axes, request.gbw, inf))
        if set(found[c].breaches) != set(_outside(found[c].parts)) or not found[c].breaches:
            wrong.append(f"{c:g} F: breaches {found[c].breaches} of {found[c].parts}")
    return wrong + _by_definition(request, next(iter(found.values())))


def _compared(choice: Choice, least: float) -> list[str]:
    return [] if abs(choice.error - least) < SAME else [f"{choice}: error {choice.error:.6g}, possible {least:.6g}"]


def _outside(parts: MfbParts) -> list[str]:
    names = ("R_in", "R_shunt", "R_feedback")
    return [name for name in names if not RESISTANCE[0] <= getattr(parts, name) <= RESISTANCE[1]]


def _by_definition(request: Request, choice: Choice) -> list[str]:
    """Return whether the choice's figures are not those of its nodal curve."""
    op_amp = OpAmp("U", "", "", "", gbw=request.gbw)
    network = mfb_network("", choice.parts, op_amp, node_in="in", node_out="out")
    f0 = request.wanted.f0
    read = network_figures(network, node_in="in", node_out="out", low=f0 / 300, high=f0 * 300)
    pairs = ((read.f0, choice.figures.f0), (read.q, choice.figures.q), (read.gain, choice.figures.gain))
    return [f"{choice}: the curve reads {a[0]:.9g}, told was {b:.9g}" for a, b in pairs if abs(a[0] / b - 1) > SAME]


def main(count: int = REQUESTS) -> bool:
    """Print how many requests were answered as well as can be, and the longest time an answer took."""
    wrong, breaches, longest, tried = [], 0, 0.0, requests()[:count]
    for number, request in enumerate(tried):
        begin = time.process_time()
        choices = standard_parts(
            request.wanted,
            preferred_values(request.capacitors, *CAPACITANCE),
            resistors=request.resistors,
            gbw=request.gbw,
        )
        longest = max(longest, time.process_time() - begin)
        breaches += bool(choices[0].breaches)
        wrong += [f"request {number}: {complaint}" for complaint in judged(request)]
    for complaint in wrong[:20]:
        print(complaint)
    real = sum(request.gbw < inf for request in tried)
    print(f"{len(tried)} requests, {real} with a real op-amp: {len(wrong)} complaints (bound 0)")
    print(f"{len(tried) - breaches} within the usual ranges, {breaches} with the breach named")
    print(f"longest answer {longest:.2f} s of processor time (bound {LONGEST:g})")
    return not wrong and longest <= LONGEST
