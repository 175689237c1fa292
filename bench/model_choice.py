"""Which model a response measured elsewhere is read with, why, and what speaks against it.

The band with delay is the model unless another one is asked for, or the points do not follow it and a leakage moves a
figure by more than a third of its U. The noise is what the file states, else what is seen in the residual of the
largest model: its bends are too small to be taken for noise.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import inf, isfinite
from typing import TypeAlias

import numpy as np
from scipy.special import chdtrc, fdtrc

from bandproof.analysis.fit import BandFit, fit_bands
from bandproof.analysis.noise import f_test, response_noise
from bandproof.analysis.types import FloatArray
from bandproof.analysis.uncertainty import COVERAGE, coverage_factor
from bandproof.bench.comparison import figure
from bandproof.bench.errors import FileMistakes
from bandproof.bench.quantities import with_uncertainty
from bandproof.bench.response_file import Response
from bandproof.bench.types import QUANTITIES, Quantity

__all__ = ["DEFAULT", "LARGEST", "MODELS", "Choice", "Scatter", "choose"]

MODELS: Mapping[str, tuple[bool, bool]] = {  # with delay, with leakage
    "band": (False, False),
    "band+delay": (True, False),
    "band+delay+leakage": (True, True),
    "band+leakage": (False, True),
}
DEFAULT, LARGEST = "band+delay", "band+delay+leakage"
Figures: TypeAlias = Mapping[Quantity, float]

_SIGNIFICANT = 1e-4  # as of a run: noise alone does this once in ten thousand files
_MATERIAL = 1.0 / 3.0  # of U, as of a run
_MOST_LEAKAGE = 1e-3  # of gain: beyond it something is wrong with what was measured
_HARDLY = 0.5  # of Q: with a U beyond it pure noise passes for a band (121 of 200 draws were not refused otherwise)
_SOUND = ("converged", "no progress")
_EXACT = 1e-12  # of the peak: the least noise that is believed, where the points were computed; arbitrary
_LABELS: Mapping[Quantity, tuple[str, str]] = {"centre": ("f0", "Hz"), "q": ("Q", ""), "gain": ("gain", "V/V")}


@dataclass(frozen=True, slots=True, eq=False)
class Scatter:
    """Noise of a response.

    Attributes
    ----------
    deviation : (N,)
        Standard uncertainty of real and imaginary part, in V/V.
    dof : float
        Degrees of freedom of an estimate, inf where it is stated.
    left_out : int
        Differences of neighbours left out of an estimate as outliers.
    settled : bool
        Whether no bend of the curve is left in an estimate.
    """

    deviation: FloatArray
    dof: float
    left_out: int = 0
    settled: bool = True

    @property
    def is_stated(self) -> bool:
        """Whether the file says so."""
        return not isfinite(self.dof)

    @property
    def covariance(self) -> FloatArray:
        """Of real and imaginary part, (1, N, 2, 2)."""
        found: FloatArray = (self.deviation**2)[None, :, None, None] * np.eye(2)
        return found


@dataclass(frozen=True, slots=True, eq=False)
class Choice:
    """The model that was used and its fit.

    ``why`` says in words why it was used. ``tried`` is the reduced chi-square of every model that was fitted;
    ``significant`` and ``material`` tell lack of fit of the model tried first; ``shifts`` is what to add to the budget
    for a misfit that is not material; ``alarms`` are sentences for a person, ``doubt`` why no verdict can be given.
    """

    model: str
    why: str
    fit: BandFit
    scatter: Scatter
    tried: Mapping[str, float]
    significant: bool
    material: bool
    shifts: Figures
    alarms: tuple[str, ...]
    doubt: str


def choose(found: Response, asked: str | None = None) -> Choice:
    """Return the fit of the model asked for, else of the one the points ask for.

    Raises
    ------
    FileMistakes
        The points follow no band: a fit does not end, or its centre is outside of them.
    """
    scatter = _scatter(found)
    first = asked or DEFAULT
    small, large = _fitted(found, scatter, first), _fitted(found, scatter, LARGEST)
    _check_band(found, small)
    significant = _is_significant(small, large, scatter)
    shifts = {quantity: figure(large, quantity)[0] - figure(small, quantity)[0] for quantity in QUANTITIES}
    expanded = _expanded(small, scatter)
    compared = significant and first != LARGEST
    material = compared and not (
        _is_sound(found, large) and all(abs(shifts[q]) <= _MATERIAL * expanded[q] for q in QUANTITIES)
    )
    moved = material and asked is None and _is_sound(found, large)
    model, fit = (LARGEST, large) if moved else (first, small)
    lack = _lack(first, model, small, shifts, expanded, material) if compared else ""
    beyond = _beyond(large, scatter) if significant else ""
    hardly = _hardly(fit, scatter)
    return Choice(
        model=model,
        why=_why(asked, moved, compared, material),
        fit=fit,
        scatter=scatter,
        tried={first: float(small.chi_square[0]), LARGEST: float(large.chi_square[0])},
        significant=significant,
        material=material,
        shifts=shifts if compared and not material else {},
        alarms=tuple(filter(None, (hardly, lack, beyond, _leaks(fit), _unsettled(scatter)))),
        doubt=hardly or (lack if material else beyond if first == LARGEST else ""),
    )


def _fitted(found: Response, scatter: Scatter, model: str) -> BandFit:
    delay, leakage = MODELS[model]
    with np.errstate(all="ignore"):  # what points that hold no band lead to is told by `_is_sound`
        return fit_bands(found.frequency[None], found.response[None], scatter.covariance, delay=delay, leakage=leakage)


def _scatter(found: Response) -> Scatter:
    if found.uncertainty is not None:
        return Scatter(found.uncertainty, inf)
    like_any = Scatter(np.full_like(found.frequency, np.abs(found.response).max()), inf)
    fits = (_fitted(found, like_any, model) for model in (LARGEST, DEFAULT))
    sound = next((fit for fit in fits if _is_sound(found, fit)), None)
    noise = response_noise(found.frequency[None], found.response[None] if sound is None else sound.residual)
    deviation = max(float(noise.deviation[0]), _EXACT * float(np.abs(found.response).max()))
    return Scatter(
        np.full_like(found.frequency, deviation), float(noise.dof[0]), int(noise.left_out[0]), bool(noise.settled[0])
    )


def _is_sound(found: Response, fit: BandFit) -> bool:
    numbers = [value for quantity in QUANTITIES for value in figure(fit, quantity)]
    inside = found.frequency[0] < fit.f0[0] < found.frequency[-1]
    return fit.status[0] in _SOUND and all(map(isfinite, numbers)) and bool(inside)


def _check_band(found: Response, fit: BandFit) -> None:
    """Raise FileMistakes where the points hold no band, whatever their greatest one seems to say."""
    if _is_sound(found, fit):
        return
    text = f"its centre would be at {float(fit.f0[0]):.6g} Hz, outside of them"
    if fit.status[0] not in _SOUND:
        text = f"the fit ended with {fit.status[0]!r}"
    raise FileMistakes(found.path, (f"the points follow no second-order band: {text}; plot them first",))


def _is_significant(small: BandFit, large: BandFit, scatter: Scatter) -> bool:
    """Whether a model misses the points by more than noise: by its chi-square, or because the largest is much nearer.

    Chi-square over an estimate of the noise is distributed as F; taken for chi-square it would be found large in one
    of 70 sound files of 12 points instead of one of ten thousand (20000 draws).
    """
    chi_square, dof = float(small.chi_square[0]), float(small.dof[0])
    by_size = chdtrc(dof, chi_square * dof) if scatter.is_stated else fdtrc(dof, scatter.dof, chi_square)
    nested = small.dof[0] > large.dof[0] and large.chi_square[0] > 0.0
    return bool(by_size < _SIGNIFICANT or (nested and f_test(small, large)[0] < _SIGNIFICANT))


def _expanded(fit: BandFit, scatter: Scatter) -> Figures:
    factor = coverage_factor(scatter.dof, coverage=COVERAGE)
    return {quantity: factor * figure(fit, quantity)[1] for quantity in QUANTITIES}


def _lack(first: str, model: str, small: BandFit, shifts: Figures, expanded: Figures, material: bool) -> str:
    """Return in words that the model tried first misses the points, and what becomes of it."""
    text = f"the points do not follow {first} (chi-square {float(small.chi_square[0]):.3g} times what noise gives)"
    if not all(map(isfinite, shifts.values())):
        return f"{text}, nor can {LARGEST} be fitted: do not trust these figures"
    moves = ", ".join(_move(quantity, shifts[quantity], expanded[quantity]) for quantity in QUANTITIES)
    text += f"; {LARGEST} moves {moves}"
    if not material:
        return f"{text}: less than a third of U, the shift is in the budget"
    return f"{text}: " + (
        "the figures are those of that model"
        if model != first
        else f"the figures are those of {first} all the same, do not trust them"
    )


def _move(quantity: Quantity, shift: float, expanded: float) -> str:
    name, unit = _LABELS[quantity]
    size = with_uncertainty(shift, abs(shift) / 3.0 or 1.0, unit).split(" ± ")
    words = f"{size[0]} {' '.join(size[1].split()[1:])}".strip()
    return f"{name} by {'+' if shift >= 0.0 else ''}{words} ({abs(shift) / expanded:.2g} U)"


def _beyond(large: BandFit, scatter: Scatter) -> str:
    """Return in words that not even the largest model follows the points, or nothing."""
    chi_square = float(large.chi_square[0])
    if not _is_significant(large, large, scatter):
        return ""
    reason = "the uncertainty is stated too small, or" if scatter.is_stated else "single points are wrong, or"
    return (
        f"not even {LARGEST} follows the points (chi-square {chi_square:.3g} times what noise gives): {reason} "
        "this is no second-order band; U is too small"
    )


def _hardly(fit: BandFit, scatter: Scatter) -> str:
    """Return in words that the points need not hold a band at all, or nothing."""
    q, expanded = float(fit.q[0]), _expanded(fit, scatter)["q"]
    if expanded <= _HARDLY * q:
        return ""
    return (
        f"Q is not known (U is {expanded / q:.1g} of it): the points need not hold a band at all, or it is narrower "
        "than their steps; plot them, measure closer and wider"
    )


def _leaks(fit: BandFit) -> str:
    gain, leakage = float(abs(fit.gain[0])), float(abs(fit.leakage[0]))
    if leakage <= _MOST_LEAKAGE * gain:
        return ""
    along = np.array([fit.leakage[0].real, fit.leakage[0].imag]) / leakage
    u = float(np.sqrt(along @ fit.covariance[0, -2:, -2:] @ along))
    return (
        f"the fit needs a leakage of {leakage / gain:.2g} of gain (standard uncertainty {u / gain:.2g}), more than "
        f"{_MOST_LEAKAGE:g}: what passes the band by? Look at cables and grounds before believing in it"
    )


def _unsettled(scatter: Scatter) -> str:
    if scatter.settled:
        return ""
    return "the noise could not be told from bends of the curve: U is an upper limit; more points would tell"


def _why(asked: str | None, moved: bool, compared: bool, material: bool) -> str:
    if asked is not None:
        return "as asked"
    if moved:
        return f"because {DEFAULT} does not follow the points, see below"
    if material:
        return f"although it does not follow the points: {LARGEST} cannot be fitted"
    return "a leakage moves no figure by more than a third of U" if compared else "the points follow it"
