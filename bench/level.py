"""The level a stage is swept at: as much as bench, board and op-amps safely bear."""

from math import ceil, floor, log10

import numpy as np

from bandproof.analysis.network import response
from bandproof.analysis.types import FloatArray
from bandproof.bench.circuit import Prediction, stage_network, taps
from bandproof.bench.errors import BadInput
from bandproof.bench.types import PASSIVE, Bench, Board, Stage

__all__ = ["HEADROOM", "greatest_level", "well_ranged"]

HEADROOM = 1.2  # ranges hold the expected peak + 20 %
_SPREAD = 1.06  # of the gain by the parts of most boards; arbitrary, beyond it a board is measured on the next range
_LOWEST = 0.6  # of the greatest level; below, more is lost than a better range gives

SWING_SHARE, SLEW_SHARE = 0.5, 0.25  # no op-amp output beyond these shares of what it can


def greatest_level(board: Board, bench: Bench, stage: Stage, prediction: Prediction) -> float:
    """Return the level in V peak a stage is swept at, two digits, rounded down.

    Never above the bench's ceiling and the board's input maximum; with the parts anywhere in their tolerances the
    op-amp's output stays below half its swing and a quarter of its slew rate. A passive network has none.

    Raises
    ------
    BadInput
        No level above 1 mV is safe.
    """
    if stage.circuit == PASSIVE:
        return _two_digits(min(bench.ceiling, board.input_maximum))
    # Two octaves each way, so dense that no peak is missed by more than 0.1 %: (Q ln 16 / points)**2 / 2.
    near = prediction.centre * np.geomspace(0.25, 4.0, max(121, ceil(62.0 * prediction.q)))
    gain = _greatest(board, stage, near, np.ones_like(near))
    slope = _greatest(board, stage, near, 2.0 * np.pi * near)
    level = min(
        bench.ceiling,
        board.input_maximum,
        SWING_SHARE * board.op_amp.swing / gain,
        SLEW_SHARE * board.op_amp.slew / slope,
    )
    if level < 1e-3:
        raise BadInput(f"stage {stage.name!r}: no level above 1 mV is safe; check the op-amp's swing and slew rate")
    return _two_digits(level)


def well_ranged(level: float, gain: float) -> float:
    """Return a level in V, at most the given one, that uses the scope's ranges well, two digits, rounded down.

    Ranges go in steps of 1-2-5 (common practice): a peak that just misses one uses less than half of the next. The
    best level leaves the least noise of the ratio, each channel's being a fixed part of its range.
    """
    fitting = [
        _step_below(HEADROOM * _SPREAD * level * factor) / (HEADROOM * _SPREAD * factor) for factor in (1.0, gain)
    ]
    candidates = [level, *(_two_digits(found) for found in fitting if found >= _LOWEST * level)]
    return min(candidates, key=lambda found: sum((_range(found * f) / (found * f)) ** 2 for f in (1.0, gain)))


def _range(peak: float) -> float:
    """Return the range that holds a peak."""
    wanted = HEADROOM * _SPREAD * peak
    below = _step_below(wanted)
    return below if below >= wanted * (1.0 - 1e-9) else _step_above(below)


def _step_below(value: float) -> float:
    decade = 10.0 ** floor(log10(value) + 1e-12)
    return decade * max(step for step in (1.0, 2.0, 5.0) if step <= value / decade * (1.0 + 1e-9))


def _step_above(step: float) -> float:
    return step * (2.5 if abs(step / 10.0 ** floor(log10(step) + 1e-12) - 2.0) < 0.5 else 2.0)


def _two_digits(level: float) -> float:
    step = 10.0 ** (floor(log10(level)) - 1)
    return round(floor(level / step * (1.0 + 1e-12)) * step, 9)


def _greatest(board: Board, stage: Stage, frequency: FloatArray, weight: FloatArray) -> float:
    """Return the greatest weighted |H| with every part at its worst end: the product of the parts' single effects.

    For a band the product is above every corner of the tolerances (tests/bench/test_plan.py); their sum is not.
    """
    network, (node_in, node_out) = stage_network(board, stage), taps(board, stage)
    ends = [(part, sign) for sign in (0.0, 1.0, -1.0) for part in stage.parts]
    values = {
        f"{stage.name}.{part.name}": np.array(
            [part.value * (1.0 + sign * part.tolerance * (part is moved)) for moved, sign in ends]
        )
        for part in stage.parts
    }
    volts = np.abs(response(network, frequency, [node_in, node_out], values=values))
    nominal, up, down = (weight * volts[:, 1] / volts[:, 0]).max(axis=1).reshape(3, -1)
    effects = np.maximum(np.maximum(up, down) / nominal, 1.0)
    return float(nominal[0] * effects.prod())
