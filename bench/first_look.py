"""What a stage's first records prove before it is driven: quiet without signal, the level asked for, the right tap."""

from math import log10

import numpy as np

from bandproof.bench.circuit import predicted_response
from bandproof.bench.errors import BenchFault
from bandproof.bench.quantities import engineering
from bandproof.bench.types import Bench, Board, Point, Stage

__all__ = ["check_low_level", "check_quiet", "frequency_problem", "level_problem", "strange_response"]

_LEVEL_OFF = 1.2  # no loading effect is larger (50 Ω into 600 Ω takes 8 %), and peak for rms is; arbitrary
_LEVEL_MOVED = 0.15  # of the level: flatness and loading move it less along a band; arbitrary
_SEEN = 5.0  # a signal below this many residual rms is no signal; arbitrary
_NOISY = 2.0  # steps of the converter; its own noise and rounding are about 0.6; arbitrary
_STRANGE = 2.0  # a response off by more than this factor is told; arbitrary


def check_quiet(board: Board, bench: Bench, stage: Stage, point: Point) -> list[str]:
    """Refuse a tap whose direct voltage leaves the signal no room, in its range or in the op-amp's swing.

    Returns what is strange.

    Raises
    ------
    BenchFault
        Names tap, channel and the voltage found.
    """
    swing = board.op_amp.swing
    for tap, offset, reach in zip((stage.tap_in, stage.tap_out), point.offsets, point.ranges, strict=True):
        if abs(offset) > 0.5 * min(reach, swing):  # half of the swing is the signal's
            most = (
                f"{engineering(reach, 'V')} range" if reach <= swing else f"{engineering(swing, 'V')} an op-amp gives"
            )
            raise BenchFault(
                f"{tap} (channel {bench.wires[tap].channel}) stands at {engineering(offset, 'V')} DC without signal, "
                f"more than half of the {most}: is the board powered, is it the right point?"
            )
    return [
        f"{stage.name}: {tap} has {engineering(rms, 'V')} rms of hum or noise without signal: look for a ground loop, "
        "a cable without shield, a supply"
        for tap, rms, lsb in zip((stage.tap_in, stage.tap_out), point.residuals, point.lsb, strict=True)
        if rms > _NOISY * lsb
    ]


def check_low_level(board: Board, bench: Bench, stage: Stage, point: Point) -> list[str]:
    """Compare a stage's low-level point with what was set and predicted; return what is strange but no obstacle.

    Raises
    ------
    BenchFault
        No signal at a tap, a level at the input tap that no loading explains, or a path that is far from 1.
    """
    taps = (stage.tap_in, stage.tap_out)
    for tap, level, noise in zip(taps, point.levels, point.residuals, strict=True):
        if level < _SEEN * noise / np.sqrt(point.samples / 2.0):
            raise BenchFault(
                f"no signal at {tap} (channel {bench.wires[tap].channel}) while the generator gives "
                f"{engineering(point.amplitude, 'V')} at {engineering(point.frequency, 'Hz')}: check the probe, the "
                "route to this test point and the board's supply; then whether a part is far wrong"
            )
    _check_input(bench, stage, point)
    strange = strange_response(board, stage, point)
    if strange and stage.kind == "thru":
        raise BenchFault(strange[0])  # every later figure would be divided by it
    return strange


def frequency_problem(point: Point) -> str:
    """Return what is wrong with the frequency of a record, or nothing."""
    if "off-frequency" not in point.flags:
        return ""
    return (
        f"the signal is not at the {engineering(point.frequency, 'Hz', 6)} that the generator reads back: does the "
        "generator's dialect have the right unit, is its reference locked, is it modulated?"
    )


def level_problem(stage: Stage, low_level: Point | None, point: Point) -> str:
    """Return what is wrong with the level at the input tap against the low-level point, or nothing.

    A generator that somebody switched off, or that protects itself, and a cable knocked off leave a record that fits
    nothing and says nothing: its level does.
    """
    if low_level is None or point.purpose not in ("curve", "closing", "thru"):
        return ""
    expected = low_level.levels[0] / low_level.amplitude * point.amplitude
    if abs(point.levels[0] / expected - 1.0) <= _LEVEL_MOVED:
        return ""
    return (
        f"the signal at {stage.tap_in} is {engineering(point.levels[0], 'V')} where {engineering(expected, 'V')} were "
        f"expected from the low-level point ({engineering(point.frequency, 'Hz')}): is the generator's output still "
        "on, is a cable off, does somebody else use the bench?"
    )


def _check_input(bench: Bench, stage: Stage, point: Point) -> None:
    ratio = point.levels[0] / point.amplitude
    if 1.0 / _LEVEL_OFF <= ratio <= _LEVEL_OFF:
        return
    channel = bench.wires[stage.tap_in].channel
    raise BenchFault(
        f"{stage.tap_in} (channel {channel}) reads {engineering(point.levels[0], 'V')} where the generator was set to "
        f"{engineering(point.amplitude, 'V')} (× {ratio:.3g}): {_cause(ratio)}"
    )


def _cause(ratio: float) -> str:
    for factor, cause in (
        (10.0, "probe factor 10 in the bench file, but the probe is × 1?"),
        (0.1, "probe factor 1 in the bench file, but the probe is × 10?"),
        (2.0, "the generator assumes a 50 Ω load: set it to high impedance"),
        (2.0**0.5, "the instrument counts rms, its dialect says peak: see `meaning` of its amplitude"),
        (0.5**0.5, "the instrument counts peak, its dialect says rms: see `meaning` of its amplitude"),
        (8.0**0.5, "the instrument counts rms, its dialect says peak to peak: see `meaning` of its amplitude"),
        (0.125**0.5, "the instrument counts peak to peak, its dialect says rms: see `meaning` of its amplitude"),
        (0.5, "a 50 Ω load hangs on the generator, or the instrument counts peak to peak: check its dialect"),
    ):
        if abs(log10(ratio / factor)) < log10(1.15):
            return cause
    return "check the generator's dialect (peak, peak to peak or rms), its load assumption and the probe"


def strange_response(board: Board, stage: Stage, point: Point) -> list[str]:
    """Return in words that a low-level point is far from what is predicted, or nothing; the path itself gives 1."""
    is_path = stage.kind == "thru"
    expected = 1.0 if is_path else predicted_response(board, stage, np.array([point.frequency]))[0]
    ratio = abs(point.response) / abs(expected)
    if 1.0 / _STRANGE <= ratio <= _STRANGE:
        return []
    where = engineering(point.frequency, "Hz")
    if is_path:
        return [f"both probes on one node read × {ratio:.3g} at {where}: a probe factor set wrong, or another node?"]
    decade = any(abs(log10(ratio / factor)) < log10(1.25) for factor in (0.1, 10.0))
    cause = "a probe factor set wrong by ten, or a wrong part" if decade else "a wrong part, or a wrong tap"
    return [f"{stage.name}: the low-level point at {where} is × {ratio:.3g} of the predicted gain: {cause}"]
