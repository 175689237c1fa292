"""Where to measure a band, how long a record must be, and how long to wait before it.

The noise-limited optimum for f0 and Q lies at Q |x - 1/x| = 0.63, x = f/f0 (DEVELOPERS.md, Planning); centre and skirts
are added for the delay and for seeing a misfit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from bandproof.analysis.network import Network, response, state_space
from bandproof.analysis.types import ComplexArray, FloatArray

__all__ = [
    "RecordPlan",
    "band_frequencies",
    "dwell_after_step",
    "folds_near",
    "mains_clearance",
    "plan_record",
    "shift_from_mains",
]

_DETUNINGS = (-2.5, -1.4, -0.9, -0.63, -0.4, 0.0, 0.4, 0.63, 0.9, 1.4, 2.5)
_MAINS_ORDERS = np.arange(1, 6)  # mains and the harmonics 2 to 5 that a sine fit takes along
_MAINS_CONCERN = 1000.0  # Hz; above, hum is too far from any tone to matter
_SHAPE_SAMPLES = 256  # the transient is weighed against a record of that many samples, whatever is recorded
_LADDER = 4  # dwells tried per octave


@dataclass(frozen=True, slots=True)
class RecordPlan:
    """Duration in s and number of points of a record."""

    duration: float
    points: int


def band_frequencies(f0: ArrayLike, q: ArrayLike) -> FloatArray:
    """Return the (S, 11) frequencies of a first sweep of S bands, ascending; the closing point is not included.

    Examples
    --------
    >>> band_frequencies([1000.0], [2.0]).round(1)[0, [0, 5, 10]]
    array([ 554.2, 1000. , 1804.2])
    """
    detuning = np.array(_DETUNINGS) / np.atleast_1d(np.asarray(q, dtype=np.float64))[:, None]
    x = 0.5 * detuning + np.sqrt(1 + 0.25 * detuning**2)
    frequency: FloatArray = np.atleast_1d(np.asarray(f0, dtype=np.float64))[:, None] * x
    return frequency


def mains_clearance(frequency: ArrayLike, mains: float) -> FloatArray:
    """Return the distance in Hz to the nearest of mains and its harmonics 2 to 5; inf above 1 kHz, (N,)."""
    f = np.atleast_1d(np.asarray(frequency, dtype=np.float64))
    distance = np.abs(f[:, None] - mains * _MAINS_ORDERS).min(axis=1)
    clearance: FloatArray = np.where(f < _MAINS_CONCERN, distance, np.inf)
    return clearance


def shift_from_mains(frequency: ArrayLike, *, mains: float, longest: float) -> FloatArray:
    """Return the frequencies (N,), those nearer to a mains harmonic than 1 / longest moved out to that distance.

    `longest` is the longest record allowed, in s. A frequency moves to the side on which it already lies.

    Examples
    --------
    >>> shift_from_mains([99.0, 130.0], mains=50.0, longest=0.5)
    array([ 98., 130.])
    """
    f = np.atleast_1d(np.asarray(frequency, dtype=np.float64)).copy()
    nearest = mains * np.clip(np.round(f / mains), 1, _MAINS_ORDERS[-1])
    near = mains_clearance(f, mains) < 1 / longest
    f[near] = (nearest + np.where(f < nearest, -1, 1) / longest)[near]
    return f


def plan_record(
    frequency: float,
    *,
    mains: float,
    shortest: float = 0.0,
    longest: float = 1.0,
    cycles: float = 3.0,
    points: int = 2048,
) -> RecordPlan:
    """Return how long a record of one tone must be and its number of points.

    At least `cycles` periods; longer where a mains harmonic lies near, so that it is a whole 1/duration away. At
    least 20 samples a period: harmonics up to the 9th then stay below half the sampling rate, so none folds.

    Raises
    ------
    ValueError
        The record would have to be longer than `longest`: shift the frequency, see `shift_from_mains`.

    Examples
    --------
    >>> plan_record(1000.0, mains=50.0)
    RecordPlan(duration=0.003, points=2048)
    """
    clearance = float(mains_clearance(frequency, mains)[0])
    apart = 1 / clearance if clearance else np.inf
    duration = float(max(shortest, cycles / frequency, apart))
    if duration > longest * (1 + 1e-9):
        raise ValueError(
            f"{frequency:g} Hz needs a record of {duration:.3g} s, more than the longest allowed, {longest:g} s: "
            f"move it away from the harmonics of {mains:g} Hz or allow longer records"
        )
    return RecordPlan(duration, max(points, int(np.ceil(20 * frequency * duration - 1e-9))))


def folds_near(frequency: float, sample_interval: float, points: int, *, highest: int = 9) -> bool:
    """Whether a harmonic up to the 9th, folded at half the sampling rate, falls within 1/T of the tone.

    Scopes have no anti-alias filter: a folded harmonic would be taken for the tone.

    Examples
    --------
    >>> folds_near(1000.0, 1 / 8000.0, 800), folds_near(1000.0, 1 / 20500.0, 2050)
    (True, False)
    """
    rate = 1.0 / sample_interval
    order = np.arange(2, highest + 1)
    folded = np.abs((order * frequency + 0.5 * rate) % rate - 0.5 * rate)
    return bool((np.abs(folded - frequency) < rate / points).any())


def dwell_after_step(
    network: Network,
    nodes: Sequence[str],
    frequency: float,
    *,
    duration: float,
    previous: float | None,
    eps: float = 1e-4,
    nuisance: ArrayLike = (),
    drift: bool = False,
    previous_level: float = 1.0,
) -> float:
    """Return how long to wait after the generator changed before a record starts, in s.

    The transient that is left, carried through the sine fit of the record (as it will be made), must stay below eps of
    the response at every one of the nodes, whatever the phases before and after the change. A slow coupling corner
    hardly passes the fit, so that it costs no waiting.

    Parameters
    ----------
    network : Network
        With finite gbw in every op-amp, driven as on the bench.
    nodes : names
        The taps recorded.
    frequency : float
        Hz, after the change.
    duration : float
        s, of the record.
    previous : float or None
        Hz, before the change; None: the output was off.
    eps : float
        Largest error relative to the response.
    nuisance, drift
        What the fit of the record takes along, as in `sine.fit_sines`; a drift absorbs most of a slow transient.
    previous_level : float
        EMF before the change over the EMF after it.

    Raises
    ------
    ValueError
        The network never settles so far (an unstable or lossless mode).
    """
    system = state_space(network, nodes)
    steady = [(_steady_state(system.a, system.b[:, 0], frequency), 1.0)]
    if previous is not None:
        steady.append((_steady_state(system.a, system.b[:, 0], previous), previous_level))
    weights = _fit_of_transient(system.a, system.c, frequency, duration, np.atleast_1d(nuisance), drift)
    allowed = eps * np.abs(response(network, [frequency], nodes)[:, 0])
    starts = np.stack([level * part for state, level in steady for part in (state, state.conj())], axis=1)

    def excess(transitions: FloatArray) -> FloatArray:
        """Largest of the nodes' errors over what is allowed, for the worst phases, after each (R, n, n) transition."""
        left = 0.5 * np.abs(weights @ transitions @ starts).sum(axis=-1)
        result: FloatArray = (left / allowed).max(axis=-1)
        return result

    return _shortest(system.a, excess, frequency)


def _shortest(a: FloatArray, excess: Callable[[FloatArray], FloatArray], frequency: float) -> float:
    """Return the least dwell of a ladder from which on every longer one is good, too."""
    from scipy.linalg import expm

    first = 1e-2 / frequency
    dwells, worst = [0.0], excess(np.eye(len(a))[None]).tolist()
    rungs = np.stack([expm(a * first * 2 ** (i / _LADDER)) for i in range(_LADDER)])
    for octave in range(40):
        dwells += [first * 2 ** (octave + i / _LADDER) for i in range(_LADDER)]
        worst += excess(rungs).tolist()
        if max(worst[-3 * _LADDER :]) <= 1.0 and len(worst) > 3 * _LADDER:
            late = max(i for i, value in enumerate([np.inf, *worst]) if value > 1.0)
            return float(dwells[late])
        rungs = rungs @ rungs
    raise ValueError("the network does not settle: a mode is unstable or has no loss")


def _steady_state(a: FloatArray, b: FloatArray, frequency: float) -> ComplexArray:
    return np.asarray(np.linalg.solve(2j * np.pi * frequency * np.eye(len(a)) - a, b), dtype=np.complex128)


def _fit_of_transient(
    a: FloatArray, c: FloatArray, frequency: float, duration: float, nuisance: FloatArray, drift: bool
) -> ComplexArray:
    """Return (M, n): the phasor that a sine fit makes of a free transient, per unit of each state at its start."""
    from scipy.linalg import expm

    interval = duration / _SHAPE_SAMPLES
    line = np.arange(_SHAPE_SAMPLES) / _SHAPE_SAMPLES
    angle = 2 * np.pi * duration * np.concatenate([[frequency], nuisance])[:, None] * line
    columns = [np.cos(angle[0]), -np.sin(angle[0]), *np.cos(angle[1:]), *np.sin(angle[1:]), np.ones_like(line)]
    inverse = np.linalg.pinv(np.stack([*columns, line] if drift else columns, axis=-1))
    fit = inverse[0] + 1j * inverse[1]
    course, power = c[None], expm(a * interval)
    while len(course) < _SHAPE_SAMPLES:  # doubling: the second half is the first, propagated
        course = np.concatenate([course, course @ power])
        power = power @ power
    weights: ComplexArray = np.einsum("i,imn->mn", fit, course)
    return weights
