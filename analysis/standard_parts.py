"""Standard-value parts for a wanted multiple-feedback band-pass: every capacitor of a series, the best resistors to it.

An error here is the largest of the relative errors of f0, Q and gain. Rounding each resistor by itself is not the best
choice: f0 and Q depend on products of two, and two roundings can make up for each other. So the three are chosen
together, and the search leaves nothing out: errors up to a bound confine 1/R_feedback, 1/R_in and 1/R_in + 1/R_shunt to
intervals (with an ideal op-amp f0 Q, Q / f0 and gain give them one by one; with a real one the corners of the figures
do), and all triples of the series inside them are tried. The bound is what the neighbours of the exact values reach.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache
from itertools import product
from math import inf, log, sqrt

import numpy as np

from bandproof.analysis.circuits import MfbFigures, MfbParts
from bandproof.analysis.e_series import preferred_values, widest_step
from bandproof.analysis.one_pole import one_pole_design, one_pole_figures
from bandproof.analysis.types import FloatArray

__all__ = [
    "CAPACITANCE",
    "NAMES",
    "RESISTANCE",
    "Choice",
    "TooSlow",
    "best_resistors",
    "is_realizable",
    "part_sensitivities",
    "standard_parts",
    "usual_range",
]

RESISTANCE = (1e3, 1e6)  # ohm; common practice around op-amps
CAPACITANCE = (100e-12, 1e-6)  # farad; arbitrary: well above stray capacitance, and to be had as film or C0G
NAMES = ("R_in", "R_shunt", "R_feedback", "C_1", "C_2")

_DECADE = 10.0  # without the usual range, values within this factor of the exact ones are searched
_MARGIN = 0.02  # of the bound; corners of the figures confine a real stage's conductances only nearly
_ABOVE = 1 + 1e-9  # arbitrary: nearer to the limit of Q the wanted R_shunt is rounding of the others
_ALIKE = 1e-9  # errors that differ by less are one error: decades of one capacitor


@dataclass(frozen=True, slots=True)
class Choice:
    """Parts chosen, and what comes of them.

    parts; figures with the op-amp asked for; errors, the relative errors of f0, Q and gain; breaches, the parts outside
    the usual ranges, worst first.
    """

    parts: MfbParts
    figures: MfbFigures
    errors: tuple[float, float, float]
    breaches: tuple[str, ...]

    @property
    def error(self) -> float:
        """The largest relative error of the three figures."""
        return max(abs(error) for error in self.errors)


class TooSlow(ValueError):
    """No parts were found for the wanted figures with an op-amp of this gain-bandwidth product.

    least is one that would do, in steps of 1, 2, 5.
    """

    def __init__(self, gbw: float, least: float) -> None:
        super().__init__(gbw, least)
        self.gbw, self.least = gbw, least

    def __str__(self) -> str:
        return f"gbw {self.gbw:g} Hz is too low for the wanted figures: {self.least:g} Hz would do"


def usual_range(part: str) -> tuple[float, float]:
    """Return the least and greatest usual value of a part, by its name in the circuit."""
    return RESISTANCE if part.startswith("R") else CAPACITANCE


def is_realizable(wanted: MfbFigures) -> bool:
    """Return whether Q is above sqrt(gain / 2), by more than rounding.

    Examples
    --------
    >>> is_realizable(MfbFigures(1000.0, 3.0, 10.0)), is_realizable(MfbFigures(1000.0, 2.2, 10.0))
    (True, False)
    """
    return wanted.q > sqrt(wanted.gain / 2) * _ABOVE


def standard_parts(
    wanted: MfbFigures, capacitances: Iterable[float], *, resistors: str = "E96", gbw: float = inf
) -> tuple[Choice, ...]:
    """Return for each capacitor the best resistors of a series, the best choice first.

    Parameters
    ----------
    wanted : MfbFigures
        f0 in Hz, Q, and |H| at f0.
    capacitances : iterable of float
        Farad, those to be tried for C_1 = C_2.
    resistors : str
        A series of IEC 60063.
    gbw : float
        Hz. A finite one makes the real response the one that is brought nearest.

    Returns
    -------
    tuple of Choice
        With all resistors in the usual range, for each capacitor with which the error is then within the widest step of
        the series (exact values inside the range always reach that, by rounding); of equal errors, which are equally
        sensitive too, the one nearest to the middle of the range comes first (arbitrary). If there is none: for each
        capacitor the best choice whatever the range, the nearest breach first.

    Raises
    ------
    ValueError
        Q is not above sqrt(gain / 2), which the circuit needs.
    TooSlow
        The op-amp is too slow for these figures.
    """
    bound = widest_step(resistors) - 1
    exact = _exact(wanted, gbw)
    every = tuple(capacitances)
    tried = [(c, best_resistors(wanted, c, resistors, gbw=gbw, within=RESISTANCE, bound=bound)) for c in every]
    if any(found for _, found in tried):
        kept = [_choice(wanted, found, c, gbw) for c, found in tried if found]
        return tuple(sorted(kept, key=lambda choice: (round(choice.error / _ALIKE), _off_middle(choice.parts))))
    outside = []
    for c in every:
        values = [1 / (c * g) for g in exact]
        within = (min(RESISTANCE[0], min(values) / _DECADE), max(RESISTANCE[1], max(values) * _DECADE))
        found = best_resistors(wanted, c, resistors, gbw=gbw, within=within)
        outside += [_choice(wanted, found, c, gbw)] if found else []
    return tuple(sorted(outside, key=lambda choice: (_excess(choice), choice.error)))


def best_resistors(
    wanted: MfbFigures,
    capacitance: float,
    series: str,
    *,
    gbw: float = inf,
    within: tuple[float, float] = RESISTANCE,
    bound: float = inf,
) -> tuple[float, float, float] | None:
    """Return R_in, R_shunt, R_feedback of least error, in ohm, or None if no error is as small as the bound.

    Every triple of the series with all three values `within` competes.

    Examples
    --------
    >>> best_resistors(MfbFigures(1000.0, 10.0, 2.0), 100e-9, "E96", within=(10.0, 1e5))
    (7870.0, 80.6, 31600.0)
    """
    values = np.array(preferred_values(series, *within))
    aim = np.array([wanted.f0, wanted.q, wanted.gain])
    near = [_neighbours(values, 1 / (capacitance * g)) for g in _exact(wanted, gbw)]
    start = _best(np.array(list(product(*near))).T, capacitance, aim, gbw)
    bound = min(bound, start[1] if start else inf)
    if bound >= 1:  # figures from nothing to twice the wanted: no interval to search
        return None
    rivals = _best(_triples(values, capacitance, aim, gbw, bound * (1 + 1e-9)), capacitance, aim, gbw)
    found = min((one for one in (start, rivals) if one), key=lambda one: one[1], default=None)
    return found[0] if found and found[1] <= bound else None


def part_sensitivities(parts: MfbParts, *, gbw: float = inf) -> dict[str, tuple[float, float, float]]:
    """Return d ln(f0, Q, gain) / d ln(part) for each part.

    Examples
    --------
    >>> parts = MfbParts(R_in=7957.7472, R_shunt=80.381284, R_feedback=31830.9886, C_1=100e-9, C_2=100e-9)
    >>> [round(slope, 3) + 0.0 for slope in part_sensitivities(parts)["C_1"]]
    [-0.5, 0.0, -0.5]
    """
    step = 1e-4  # truncation of the central difference 1e-8, rounding 1e-13 / 1e-4
    steps = np.concatenate([np.eye(5), -np.eye(5)]) * step
    values = np.array([getattr(parts, name) for name in NAMES])[:, None] * np.exp(steps.T)
    r_in, r_shunt, r_feedback, c_1, c_2 = values
    logs = np.log(one_pole_figures(r_in, r_shunt, r_feedback, c_1, c_2, gbw=gbw))
    slopes = (logs[:, :5] - logs[:, 5:]) / (2 * step)
    return {name: (float(a), float(b), float(c)) for name, (a, b, c) in zip(NAMES, slopes.T, strict=True)}


def _exact(wanted: MfbFigures, gbw: float) -> tuple[float, float, float]:
    """Return conductances of R_in, R_shunt, R_feedback for 1 F."""
    if not is_realizable(wanted):
        raise ValueError(f"q must be above sqrt(gain / 2) = {sqrt(wanted.gain / 2):.6g}, found {wanted.q!r}")
    g_in, g_node, g_feedback = _conductances(wanted, gbw)
    if not g_node > g_in:
        enough = (m * 10.0**d for d in range(-6, 19) for m in (1, 2, 5) if m * 10.0**d > gbw)
        raise TooSlow(gbw, next((x for x in enough if _conductances(wanted, x)[1] > _conductances(wanted, x)[0]), inf))
    return g_in, g_node - g_in, g_feedback


@cache
def _conductances(wanted: MfbFigures, gbw: float) -> tuple[float, float, float]:
    one, two, three = one_pole_design(np.array([[wanted.f0], [wanted.q], [wanted.gain]]), gbw=gbw)[:, 0]
    return float(one), float(two), float(three)


def _neighbours(values: FloatArray, exact: float) -> FloatArray:
    at = int(np.searchsorted(values, exact))
    return values[max(0, at - 2) : at + 2]


def _triples(values: FloatArray, capacitance: float, aim: FloatArray, gbw: float, bound: float) -> FloatArray:
    """Return all triples (3, K) of the values whose errors can be within the bound, and some others."""
    corners = aim[:, None] * (1 + bound * np.array(list(product((-1.0, 1.0), repeat=3))).T)
    ends = one_pole_design(corners, gbw=gbw) * capacitance
    slack = 1 + (bound * _MARGIN if gbw < inf else 1e-12)
    low, high = ends.min(axis=1) / slack, ends.max(axis=1) * slack
    if np.isnan(low).any():  # a corner that the op-amp is too slow for confines nothing
        low, high = np.zeros(3), np.full(3, inf)
    inputs, feedbacks = (values[(1 / values >= low[i]) & (1 / values <= high[i])] for i in (0, 2))
    node = 1 / inputs[:, None] + 1 / values
    i, j = np.nonzero((node >= low[1]) & (node <= high[1]))
    pair, feedback = np.meshgrid(np.arange(len(i)), feedbacks, indexing="ij")
    return np.stack([inputs[i[pair.ravel()]], values[j[pair.ravel()]], feedback.ravel()])


def _best(
    triples: FloatArray, capacitance: float, aim: FloatArray, gbw: float
) -> tuple[tuple[float, float, float], float] | None:
    """Return the triple of least error and that error; of equal ones that with the least squares."""
    if triples.size == 0:
        return None
    figures = one_pole_figures(triples[0], triples[1], triples[2], capacitance, capacitance, gbw=gbw)
    errors = np.abs(figures / aim[:, None] - 1)
    worst = errors.max(axis=0)
    alike = np.flatnonzero(worst <= worst.min() + 1e-12)
    best = alike[(errors[:, alike] ** 2).sum(axis=0).argmin()]
    R_in, R_shunt, R_feedback = (float(value) for value in triples[:, best])
    return (R_in, R_shunt, R_feedback), float(worst[best])


def _choice(wanted: MfbFigures, resistors: tuple[float, float, float], capacitance: float, gbw: float) -> Choice:
    parts = MfbParts(*resistors, capacitance, capacitance)
    f0, q, gain = (float(x) for x in one_pole_figures(*resistors, capacitance, capacitance, gbw=gbw))
    errors = (f0 / wanted.f0 - 1, q / wanted.q - 1, gain / wanted.gain - 1)
    outside = {name: _beyond(name, getattr(parts, name)) for name in NAMES}
    breaches = sorted((name for name in NAMES if outside[name] > 0), key=lambda name: -outside[name])
    return Choice(parts, MfbFigures(f0, q, gain), errors, tuple(breaches))


def _beyond(name: str, value: float) -> float:
    """Return ln of how far a value lies outside the usual range, 0 inside."""
    low, high = usual_range(name)
    return max(0.0, log(low / value), log(value / high))


def _excess(choice: Choice) -> float:
    return max(_beyond(name, getattr(choice.parts, name)) for name in NAMES)


def _off_middle(parts: MfbParts) -> float:
    middle = sqrt(RESISTANCE[0] * RESISTANCE[1])
    return max(abs(log(value / middle)) for value in (parts.R_in, parts.R_shunt, parts.R_feedback))
