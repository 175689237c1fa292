"""Which part is off, asked only when the figures lie outside what tolerances and measurement allow.

Figures are ln f0, ln Q and ln gain of every stage. A board is *outside* when no values of its parts within their
tolerances give what was measured: the squared Mahalanobis distance, by the measurement's covariance, to the nearest
figures that such parts can give. Nothing is assumed of how parts lie within their tolerance, so a healthy board is
accused at most as often as the test's level says, also with all parts of one reel on one side. Hypotheses are then
compared by generalized least squares, the tolerances of all other parts (uniform: variance t²/3) in the covariance.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Literal, TypeAlias

import numpy as np

from bandproof.analysis.tolerances import Circuit, Seen, covariance, outside
from bandproof.analysis.types import BoolArray, FloatArray

__all__ = ["DISTINGUISHABLE", "Hypothesis", "Judgement", "judged"]

Kind: TypeAlias = Literal["part", "swapped", "common", "probe", "channels", "tap", "nothing"]

DISTINGUISHABLE = 4.0  # of chi-square to the runner-up
SATURATED = 4.0  # an end of the scan that fits as well as this means open or bridged
_UNEXPLAINED = 1e-4  # probability below which the best hypothesis is no explanation; arbitrary
_PROBES = np.log([0.01, 0.1, 10.0, 100.0])  # what a probe's factor set wrong makes of a gain (common practice)
_REEL = 3.0**0.5  # standard deviation of a common factor, in tolerances: three times that of one part; arbitrary
_REFINED, _STEPS = 3, 6  # minima of a scan that are followed, and steps taken
_CLOSE = 0.1  # standard uncertainties: a last step changes chi-square by the square of it
_HOPELESS = 100.0  # of chi-square behind the best, by a straight line: not looked at more closely


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """What would explain the figures.

    Attributes
    ----------
    kind : str
        "probe": gains off by a probe's factor, of a stage or from one on; "channels": gains inverted, of a stage or of
        all; "tap": the figures of another stage; "common": one factor on all parts of a kind; "part": one part has
        another value; "swapped": two parts of a stage exchanged; "nothing": parts as tolerances let them be, however
        unlikely.
    stages : tuple of int
        Where it strikes.
    names : tuple of str
        Parts, or the kind of part.
    chi_square : float
        Of the stages it strikes (one stage) or of all (board).
    log_factor, u : float
        Natural logarithm of the factor and its standard uncertainty (NaN where nothing was estimated).
    ends : str
        "open" or "bridged" where any factor from the estimate on to the end of the scan fits as well.
    """

    kind: Kind
    stages: tuple[int, ...]
    names: tuple[str, ...]
    chi_square: float
    log_factor: float = np.nan
    u: float = np.nan
    ends: Literal["", "open", "bridged"] = ""


@dataclass(frozen=True, slots=True)
class Judgement:
    """What is suspected: the best hypothesis first, then all that cannot be told from it, and the next one's distance.

    ``explained`` is false where even the best does not give the figures.
    """

    candidates: tuple[Hypothesis, ...]
    delta_chi_square: float
    explained: bool


def judged(circuits: Sequence[Circuit], seen: Sequence[Seen]) -> list[Judgement]:
    """Return what is suspected of a board, nothing when it can be healthy.

    Parameters
    ----------
    circuits, seen
        One of each for every stage that was measured, in the order they were.

    Returns
    -------
    list of Judgement
        One about the board where that is best, else one for every stage outside.
    """
    healthy = [_distance(c, s.figures - c.nominal, s, c.slopes) for c, s in zip(circuits, seen, strict=True)]
    by_stage = {i: _ranked(_of_stage(i, circuits, seen, healthy[i])) for i in outside(circuits, seen)}
    if not by_stage:
        return []
    best = [by_stage[i][0].chi_square if i in by_stage else healthy[i] for i in range(len(circuits))]
    apart = sum(best)  # each stage by itself
    whole = [h for h in _ranked(_of_board(circuits, seen, apart)) if _explains(h.chi_square, 3 * len(circuits))]
    if whole and whole[0].chi_square < apart:
        alone = [replace(ranked[0], chi_square=apart) for ranked in by_stage.values()]
        found = [_judgement(_ranked([*whole, *alone]), 3 * len(circuits))]
    else:
        together = {i: [replace(h, chi_square=h.chi_square - apart + best[i]) for h in whole] for i in by_stage}
        bench = {i: _bench((i,), circuits, seen) for i in by_stage}  # last: one fault of all is likelier than one each
        found = [_judgement(_ranked([*bench[i], *together[i], *by_stage[i]]), 2) for i in by_stage]
    return [one for one in found if not (one.explained and "nothing" in [h.kind for h in one.candidates])]


def _ranked(found: Sequence[Hypothesis]) -> list[Hypothesis]:
    return sorted(found, key=lambda hypothesis: hypothesis.chi_square)


def _judgement(ranked: Sequence[Hypothesis], dof: int) -> Judgement:
    best = ranked[0].chi_square
    beside = tuple(h for h in ranked if h.chi_square - best < DISTINGUISHABLE)
    following = min((h.chi_square for h in ranked[1:]), default=np.inf)
    return Judgement(beside, following - best, _explains(best, dof))


def _explains(chi_square: float, dof: int) -> bool:
    from scipy.special import chdtrc

    return bool(chdtrc(dof, chi_square) > _UNEXPLAINED)


def _of_stage(i: int, circuits: Sequence[Circuit], seen: Sequence[Seen], healthy: float) -> list[Hypothesis]:
    """Return every hypothesis about the parts and the tap of one stage, also that nothing is wrong with it."""
    circuit = circuits[i]
    return [
        *(_tap(i, j, circuits[j], seen[i]) for j in range(len(circuits)) if j != i),
        *_single_parts(i, circuit, seen[i]),
        *_swapped(i, circuit, seen[i]),
        Hypothesis("nothing", (i,), (), healthy),
    ]


def _of_board(circuits: Sequence[Circuit], seen: Sequence[Seen], apart: float) -> list[Hypothesis]:
    """Return every hypothesis about all stages together: faults of the bench from a stage on, common factors.

    ``apart`` is chi-square with each stage explained by itself.
    """
    count = len(circuits)
    bench = [h for first in range(count - 1) for h in _bench(tuple(range(first, count)), circuits, seen)]
    kinds = dict.fromkeys(kind for circuit in circuits for kind in circuit.kinds)
    return [*bench, *(_common(kind, circuits, seen, apart + _HOPELESS) for kind in kinds)]


def _bench(where: tuple[int, ...], circuits: Sequence[Circuit], seen: Sequence[Seen]) -> list[Hypothesis]:
    """Return that some stages were measured with a probe's factor wrong, or with the channels swapped.

    Chi-square is that of these stages where it is one, else of all.
    """
    among = where if len(where) == 1 else range(len(circuits))
    away = {i: seen[i].figures - circuits[i].nominal for i in among}

    def left(gains: dict[int, float]) -> float:
        moved = {i: away[i] - [0.0, 0.0, gains.get(i, 0.0)] for i in among}
        return sum(_distance(circuits[i], moved[i], seen[i], circuits[i].slopes) for i in among)

    inverted = {i: -2.0 * float(circuits[i].nominal[2]) for i in where}
    return [
        *(Hypothesis("probe", where, (), left(dict.fromkeys(where, x)), x, 0.0) for x in _PROBES.tolist()),
        Hypothesis("channels", where, (), left(inverted)),
    ]


def _distance(circuit: Circuit, away: FloatArray, seen: Seen, slopes: FloatArray, but: int | None = None) -> float:
    """Return the squared Mahalanobis distance of figures (3,) with the tolerances of all parts but one."""
    return float(away @ np.linalg.solve(covariance(circuit, slopes, seen, but), away))


def _single_parts(i: int, circuit: Circuit, seen: Seen) -> list[Hypothesis]:
    """Return, for every part of a stage that comes near, the factor that fits best."""
    scans = [_scanned(circuit, seen, part) for part in range(len(circuit.parts))]
    hope = min(float(within.min()) for _, within in scans) + _HOPELESS
    starts: list[tuple[int, float]] = []
    for part, (chi, within) in enumerate(scans):
        around = np.concatenate([[np.inf], chi, [np.inf]])
        minima = np.flatnonzero((chi <= around[:-2]) & (chi <= around[2:]) & (within < hope))
        deepest = minima[np.argsort(chi[minima])][:_REFINED]
        starts += [(part, float(circuit.scan(part).log_factors[k])) for k in deepest]
    refined = _refined(circuit, seen, starts) if starts else []
    found = []
    for part, name in enumerate(circuit.parts):
        mine = [entry for entry, start in zip(refined, starts, strict=True) if start[0] == part]
        # a part within its tolerance is not off
        mine = [entry for entry in mine if abs(entry[1]) >= np.log1p(circuit.tolerances[part])]
        if mine:
            best, at, u = min(mine)
            found.append(Hypothesis("part", (i,), (name,), best, at, u, _ends(scans[part][0], best, at)))
    return found


def _scanned(circuit: Circuit, seen: Seen, part: int) -> tuple[FloatArray, FloatArray]:
    """Return chi-square (K,) along the scan of a part, infinite where there is no band; and what a step would leave."""
    scan = circuit.scan(part)
    usable: BoolArray = np.isfinite(scan.figures[:, 0])
    slopes = np.nan_to_num(scan.slopes)
    away = np.where(usable[:, None], seen.figures - scan.figures, 0.0)
    weight = np.linalg.inv(covariance(circuit, slopes, seen, part))
    along = slopes[:, :, part]
    chi = np.einsum("ki,kij,kj->k", away, weight, away)
    pull, steepness = (np.einsum("ki,kij,kj->k", along, weight, x) for x in (away, along))
    left = chi - pull**2 / np.maximum(steepness, 1e-12)
    return np.where(usable, chi, np.inf), np.where(usable, left, np.inf)


def _ends(chi: FloatArray, best: float, at: float) -> Literal["", "open", "bridged"]:
    if at > 1.0 and chi[-1] - best < SATURATED:
        return "open"
    return "bridged" if at < -1.0 and chi[0] - best < SATURATED else ""


def _refined(circuit: Circuit, seen: Seen, starts: Sequence[tuple[int, float]]) -> list[tuple[float, float, float]]:
    """Return chi-square, log factor and its standard uncertainty from each start, by steps of Gauss and Newton."""
    parts, rows = np.array([part for part, _ in starts]), np.arange(len(starts))
    at = np.array([start for _, start in starts])
    best = np.full((len(starts), 3), np.inf)
    for _ in range(_STEPS):
        values = np.tile(circuit.values, (len(starts), 1))
        values[rows, parts] *= np.exp(at)
        figures = circuit.figures(values)
        slopes = circuit.sensitivities(values, figures)
        usable: BoolArray = np.isfinite(figures[:, 0])
        away, slopes = np.where(usable[:, None], seen.figures - figures, 0.0), np.nan_to_num(slopes)
        weight = np.linalg.inv([covariance(circuit, s, seen, p) for s, p in zip(slopes, parts, strict=True)])
        along = slopes[rows, :, parts]
        chi = np.where(usable, np.einsum("ki,kij,kj->k", away, weight, away), np.inf)
        steepness = np.einsum("ki,kij,kj->k", along, weight, along)
        u = 1.0 / np.sqrt(np.maximum(steepness, 1e-12))
        best = np.where(np.less(chi, best[:, 0])[:, None], np.stack([chi, at, u], axis=1), best)
        step = np.einsum("ki,kij,kj->k", along, weight, away) / np.maximum(steepness, 1e-12)
        at = at + np.clip(step, -0.5, 0.5)
        if np.all(np.abs(step) < _CLOSE * u):
            break
    return [(float(chi), float(x), float(u)) for chi, x, u in best]


def _swapped(i: int, circuit: Circuit, seen: Seen) -> list[Hypothesis]:
    """Return, for every two parts of a kind and of different values, what they give exchanged."""
    found = []
    for a, b in combinations(range(len(circuit.parts)), 2):
        if circuit.kinds[a] != circuit.kinds[b] or circuit.values[a] == circuit.values[b]:
            continue
        given = circuit.swapped(a, b)
        if np.isfinite(given.slopes).all():
            chi = _distance(circuit, seen.figures - given.figures[0], seen, given.slopes[0])
            found.append(Hypothesis("swapped", (i,), (circuit.parts[a], circuit.parts[b]), chi))
    return found


def _tap(i: int, j: int, other: Circuit, seen: Seen) -> Hypothesis:
    """Return that stage i was measured at the tap of stage j."""
    return Hypothesis("tap", (i, j), (), _distance(other, seen.figures - other.nominal, seen, other.slopes))


def _common(kind: str, circuits: Sequence[Circuit], seen: Sequence[Seen], hope: float) -> Hypothesis:
    """Return the factor on all parts of a kind that fits best, held to its tolerance by what reels can be.

    A straight line tells how well it can fit; where that is above ``hope``, the line it is.
    """
    where = tuple(range(len(circuits)))
    members = [np.array([k == kind for k in circuit.kinds]) for circuit in circuits]
    tolerance = max(float(c.tolerances[m].max()) for c, m in zip(circuits, members, strict=True) if m.any())
    at, best = 0.0, (np.inf, 0.0, np.nan)
    for _ in range(_STEPS):
        chi, step, u = _along_common(at, (_REEL * tolerance) ** -2, circuits, seen, members)
        best = min(best, (chi, at, u))
        if chi - (step / u) ** 2 > hope:
            return Hypothesis("common", where, (kind,), chi - (step / u) ** 2, at + step, u)
        if not np.isfinite(chi) or abs(step) < _CLOSE * u:
            break
        at += float(np.clip(step, -1.0, 1.0))
    return Hypothesis("common", where, (kind,), *best)


def _along_common(
    at: float, price: float, circuits: Sequence[Circuit], seen: Sequence[Seen], members: Sequence[BoolArray]
) -> tuple[float, float, float]:
    """Return chi-square with a common ln factor, the step to where a straight line is least, and its uncertainty."""
    chi, pull, steepness = price * at**2, -price * at, price
    for circuit, one, member in zip(circuits, seen, members, strict=True):
        values = (circuit.values * np.exp(at * member))[None]
        figures = circuit.figures(values) if at else circuit.nominal[None]
        slopes = circuit.sensitivities(values, figures)[0] if at else circuit.slopes
        if not np.isfinite(slopes).all():
            return np.inf, 0.0, 1.0
        away, along = one.figures - figures[0], slopes @ member
        weighted = np.linalg.solve(covariance(circuit, slopes, one), np.stack([away, along], axis=1))
        chi += float(away @ weighted[:, 0])
        pull += float(along @ weighted[:, 0])
        steepness += float(along @ weighted[:, 1])
    return chi, pull / steepness, steepness**-0.5
