"""Every source of uncertainty of a stage's figures: how large it is and what it does to each point.

A source is told by what it does to the points (relative change of each response per unit of the source, once per
independent draw); one that does not apply says why it is 0.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import inf, pi, sqrt
from typing import Literal

import numpy as np

from bandproof.analysis.fit import BandFit
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.analysis.uncertainty import Distribution
from bandproof.bench.bench_file import STATED
from bandproof.bench.check_chart import reproducibility
from bandproof.bench.quantities import as_written
from bandproof.bench.record import HUM_BELOW
from bandproof.bench.thru import Path
from bandproof.bench.types import Bench, Board, CheckHistory, Point, Quantity, Stage

__all__ = ["Measured", "Source", "departures", "sources", "systematic"]

_TWO = sqrt(2.0 / 3.0)  # standard uncertainty of the difference of two uniform errors, per half-width of each
_ONE = sqrt(1.0 / 3.0)
_UNKNOWN_ROOM = 15.0  # K a room may be away from a board's reference when nobody stated it; arbitrary
_BOARD_IN_ROOM = 1.0  # K a board may be away from the room it lies in; arbitrary
_UNSETTLED = 1e-4  # of the response: what every dwell is planned for
_WHITE = 0.6  # steps: residual of a record without hum, rounding and noise of the converter


@dataclass(frozen=True, slots=True, eq=False)
class Measured:
    """A stage as measured: the points that were fitted (with the path divided out), their fit, their paths.

    ``no_signal`` is its record without signal, if there is one; ``shifts`` how far a larger model moves each figure;
    ``ambient`` is the temperature of the room in °C, None when nobody stated it; ``checks`` are those of the bench on
    its check standard, None where there are none.
    """

    board: Board
    bench: Bench
    stage: Stage
    points: tuple[Point, ...]
    covariance: FloatArray
    paths: tuple[Path | None, ...]
    fit: BandFit
    no_signal: Point | None
    shifts: Mapping[Quantity, float]
    ambient: float | None = None
    checks: CheckHistory | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Source:
    """One source of uncertainty.

    ``u`` is its standard uncertainty in its own unit; ``shapes`` (K, N) what one unit does to each point's response,
    relative, in each of K independent draws; ``direct`` what it does to a figure without passing the fit, relative;
    ``reason`` where u comes from, or why the row is 0.
    """

    name: str
    reason: str
    u: float = 0.0
    distribution: Distribution = "normal"
    type: Literal["A", "B"] = "B"
    shapes: ComplexArray | None = None
    direct: Mapping[Quantity, float] | None = None
    dof: float = inf


def sources(measured: Measured) -> list[Source]:
    """Return every source but the records' noise, in the order of `ROWS`."""
    return [
        _reseating(measured),
        _reproducibility(measured.checks),
        _thru(measured),
        _drift(measured),
        _ranges(measured),
        _compensation(measured),
        _loading(measured),
        Source("coupling corners", "0, because both channels are DC coupled"),
        Source("channel skew", "0, because a delay is fitted with the band"),
        *_linearity(measured),
        _hum(measured),
        _settling(measured),
        _generator(measured),
        _temperature(measured),
        Source("controls", "0, because the stage has no control"),
        _misfit(measured),
        _channel_gain(measured),
        Source("source level", "0, because the ratio of two channels of one record knows no level"),
        Source(
            "definition", "0, because figure and limits share one definition: peak, half-power points, designed value"
        ),
    ]


def systematic(listed: Sequence[Source], count: int) -> ComplexArray:
    """Return what one standard uncertainty of each source does to the points, relative, (K, N)."""
    shapes = [source.u * source.shapes for source in listed if source.shapes is not None and source.u]
    return np.concatenate(shapes) if shapes else np.zeros((0, count), dtype=np.complex128)


def _ones(measured: Measured) -> ComplexArray:
    return np.ones((1, len(measured.points)), dtype=np.complex128)


def _stated(measured: Measured, name: str) -> str:
    accuracy = measured.bench.accuracy
    if name in accuracy.declared:
        return "declared in the bench file"
    table, key, kind = STATED[name]
    return f'not declared, a careful default ({key} = "{as_written(getattr(accuracy, name), kind)}" in [{table}])'


def _reseating(measured: Measured) -> Source:
    size, name = measured.bench.accuracy.reseating, "reseating"
    wire = measured.bench.wires[measured.stage.tap_out]
    if wire.route is None and not wire.by_hand:
        return Source(name, "0, because the probe was not moved")
    made = 2 if any(measured.paths) else 1
    u, distribution = (_TWO * size, "triangular") if made == 2 else (_ONE * size, "uniform")
    reason = f"{_stated(measured, 'reseating')}: {made} contact{'s' if made > 1 else ''} made anew"
    return Source(name, reason, u, distribution, shapes=_ones(measured))  # type: ignore[arg-type]


def _reproducibility(history: CheckHistory | None) -> Source:
    reason, spreads, dof = reproducibility(history)
    return Source("reproducibility", reason, 1.0 if spreads else 0.0, "t", "A", direct=spreads, dof=dof)


def _thru(measured: Measured) -> Source:
    frequency = np.array([point.frequency for point in measured.points])
    shapes: list[ComplexArray] = []
    for path in dict.fromkeys(path for path in measured.paths if path is not None):
        here = np.array([other is path for other in measured.paths])
        values, vectors = np.linalg.eigh(path.fit.covariance)
        spread = (vectors * np.sqrt(np.maximum(values, 0.0))).T  # independent draws of unit size
        shapes.extend(np.where(here, spread @ path.fit.basis(frequency), 0.0))
    if not shapes:
        return Source("thru", "0, because there is no thru on these ranges (see channel gain)")
    return Source("thru", "covariance of the fitted path", 1.0, "normal", "A", np.array(shapes))


def _drift(measured: Measured) -> Source:
    time = np.array([point.time for point in measured.points])
    since = time - time.mean()
    if any(measured.paths):
        since = np.array([at - path.time if path else 0.0 for at, path in zip(time, measured.paths, strict=True)])
    accuracy = measured.bench.accuracy
    most = accuracy.channel_gain / accuracy.drift if accuracy.drift else inf
    since = np.clip(since, -most, most)  # no channel drifts further than its gain is accurate
    reason = (
        f"{_stated(measured, 'drift')}: {np.abs(since).max():.3g} s {'from the thru' if any(measured.paths) else ''}"
    )
    return Source("drift", reason.rstrip(), _TWO * accuracy.drift, "triangular", shapes=since[None] + 0j)


def _ranges(measured: Measured) -> Source:
    without = [point.ranges for point, path in zip(measured.points, measured.paths, strict=True) if path is None]
    name, pairs = "range to range", list(dict.fromkeys(without))
    if not pairs:
        return Source(name, "0, because the thru was measured on the same ranges")
    here = np.array(
        [
            [(path is None) * (p.ranges == pair) for p, path in zip(measured.points, measured.paths, strict=True)]
            for pair in pairs
        ],
        dtype=np.complex128,
    )
    u = _TWO * measured.bench.accuracy.range_gain
    return Source(name, f"{_stated(measured, 'range_gain')}, no thru on these ranges", u, "triangular", shapes=here)


def _compensation(measured: Measured) -> Source:
    name, accuracy = "compensation", measured.bench.accuracy
    if all(measured.paths):
        return Source(name, "0, because the thru holds both probes")
    divided = any(factor != 1.0 for factor in measured.bench.probe_factors.values())
    if not divided and "probe_compensation" not in accuracy.declared:
        return Source(name, "0, because probes of factor 1 divide nothing")
    x = np.array([1j * point.frequency / accuracy.probe_corner for point in measured.points])
    shape = np.where([path is None for path in measured.paths], x / (1.0 + x), 0.0)
    u = _TWO * accuracy.probe_compensation
    return Source(name, f"{_stated(measured, 'probe_compensation')}, no thru", u, "triangular", shapes=shape[None])


def _loading(measured: Measured) -> Source:
    name, accuracy, board = "tap loading", measured.bench.accuracy, measured.board
    taps = (measured.stage.tap_in, measured.stage.tap_out)
    resistances = [board.points[tap].source_resistance for tap in taps]
    if not any(resistances):
        return Source(name, "0, because both taps are driven without a resistance in between")
    frequency = np.array([point.frequency for point in measured.points])
    load = 1.0 / accuracy.probe_resistance + 2j * pi * frequency * accuracy.probe_capacitance
    fall = [-resistance * load / (1.0 + resistance * load) for resistance in resistances]
    return Source(
        name,
        f"the whole effect of probes of {accuracy.probe_resistance:.3g} Ω and {accuracy.probe_capacitance:.3g} F on "
        f"{' and '.join(f'{r:.3g} Ω' for r in resistances)}, not corrected",
        _ONE,
        "uniform",
        shapes=(fall[1] - fall[0])[None],
    )


def _linearity(measured: Measured) -> list[Source]:
    """Return what a smooth departure from a straight line does: it changes a sine by its size, a curve by its height.

    The S-shaped departure L sin(π code / full) of a converter adjusted at zero and at its ends (common practice for the
    shape) makes the sine of A steps grow by 2 L J1(π A / full), J1 the Bessel function, by definition of J1.
    """
    accuracy, found = measured.bench.accuracy, []
    for channel, where in enumerate(("in", "out")):
        reason = f"{_stated(measured, 'linearity')}: an S of {accuracy.linearity:.3g} LSB"
        reason += ", against that of the thru" if any(measured.paths) else ""
        shapes = departures(measured.points, measured.paths, channel)[None]
        found.append(Source(f"linearity {where}", reason, _ONE * accuracy.linearity, "uniform", shapes=shapes))
    return found


def departures(points: Sequence[Point], along: Sequence[Path | None], channel: int) -> ComplexArray:
    """Return the relative change (N,) of points, against their thru, per step that a channel departs from a line."""
    sign = -1.0 if channel == 0 else 1.0
    changes = [
        _growth(point.levels, point, channel) - (_growth(path.levels, point, channel) if path else 0.0)
        for point, path in zip(points, along, strict=True)
    ]
    return sign * np.array(changes, dtype=np.complex128)


def _growth(levels: tuple[float, float], point: Point, channel: int) -> float:
    """Return the relative growth of a channel's sine of a level in V per step of departure, on a point's range."""
    from scipy.special import j1

    steps = levels[channel] / point.lsb[channel]
    return float(2.0 * j1(pi * levels[channel] / point.ranges[channel]) / steps)


def _hum(measured: Measured) -> Source:
    name = "hum"
    quiet = measured.no_signal
    high = np.array([point.frequency >= HUM_BELOW for point in measured.points])
    if not high.any():
        return Source(name, "0, because mains and its harmonics are fitted with every record")
    if quiet is None:
        return Source(name, "0, because nothing was recorded without signal")
    shapes = np.zeros((2 * len(measured.points), len(measured.points)), dtype=np.complex128)
    for i, point in enumerate(measured.points):
        length = point.sample_interval * point.samples
        for channel in (0, 1):
            rms = sqrt(max(0.0, quiet.residuals[channel] ** 2 - (_WHITE * quiet.lsb[channel]) ** 2))
            # A mains slope over the record looks like a sine of it: slope x length / (pi x cycles).
            seen = 2.0 * pi * measured.bench.mains * rms * length / (pi * max(1.0, point.frequency * length))
            shapes[2 * i + channel, i] = high[i] * (1j if channel else 1.0) * seen / point.levels[channel]
    if not shapes.any():
        return Source(name, "0, because the record without signal shows none beyond the converter's own noise")
    return Source(name, "left by the record without signal, above 1 kHz not fitted", 1.0, "normal", shapes=shapes)


def _settling(measured: Measured) -> Source:
    count = len(measured.points)
    shapes = np.concatenate([np.eye(count), 1j * np.eye(count)])
    reason = "every dwell leaves at most 1e-4 of the response, of any phase"
    return Source("settling", reason, 0.5 * _UNSETTLED, "normal", shapes=shapes)


def _generator(measured: Measured) -> Source:
    reason = f"{_stated(measured, 'generator_frequency')}; f0 is traceable to the generator"
    u = _ONE * measured.bench.accuracy.generator_frequency
    return Source("generator", reason, u, "uniform", direct={"centre": 1.0})


def _temperature(measured: Measured) -> Source:
    name, declared, ambient = "temperature", measured.board.temperature, measured.ambient
    if declared is None:
        return Source(name, "0, because the board file names no temperature that its limits hold at")
    away, room = _UNKNOWN_ROOM, "room not stated"
    if ambient is not None:
        away, room = abs(ambient - declared.reference) + _BOARD_IN_ROOM, f"room {ambient:g} °C"
    limits = f"{declared.coefficient * 1e6:.3g} ppm/K from {declared.reference:g} °C"
    u = _ONE * declared.coefficient * away
    return Source(name, f"board file: {limits}; {room}: {away:.3g} K away", u, "uniform", direct={"centre": 1.0})


def _misfit(measured: Measured) -> Source:
    if not measured.shifts:
        return Source("misfit", "0, because the points show no lack of fit")
    fit = measured.fit
    values = {"centre": float(fit.f0[0]), "q": float(fit.q[0]), "gain": float(abs(fit.gain[0]))}
    shifts = {name: shift / values[name] for name, shift in measured.shifts.items() if np.isfinite(shift)}
    return Source("misfit", "what a leakage would move", _ONE, "uniform", direct=shifts)


def _channel_gain(measured: Measured) -> Source:
    if all(measured.paths):
        return Source("channel gain", "0, because the thru holds both channels")
    here = np.array([[path is None for path in measured.paths]], dtype=np.complex128)
    u = _TWO * measured.bench.accuracy.channel_gain
    return Source("channel gain", f"{_stated(measured, 'channel_gain')}, no thru", u, "triangular", shapes=here)
