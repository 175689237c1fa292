"""The plan of a thru by itself: which records show the path on every pair of ranges that is asked for."""

from collections.abc import Sequence
from math import inf, sqrt

import numpy as np

from bandproof.analysis.planning import RecordPlan, plan_record, shift_from_mains
from bandproof.bench.bench_file import BY_HAND
from bandproof.bench.errors import BadInput
from bandproof.bench.level import HEADROOM, well_ranged
from bandproof.bench.plan import LONGEST, LOW_LEVEL, thru_steps
from bandproof.bench.record_limits import record_limits
from bandproof.bench.thru import THRU, Asked, thru_stage
from bandproof.bench.types import Bench, Board, OpAmpData, Point, Stage, Step, TestPoint, Tone, Wire

__all__ = ["PathPlanner", "bare_board", "path_of", "usual_asked"]

_USUAL_GAINS = (1.0, 0.32, 3.2, 10.0)  # of stages, for the ranges of a thru that no board asks for; half decades
_USUAL_SPAN = 30.0, 20e3 / 1.5  # Hz; a thru reaches half as far again, 20 Hz to 20 kHz
_QUIET_SAMPLES = 2048
_OVERHEAD = 0.03  # s a record costs beyond its duration, for the time left; arbitrary


class PathPlanner:
    """Plans all records of the path at once: one without signal, one at a low level, the thru on each pair of ranges.

    ``asked`` has one entry for each pair of ranges that the scope really has.
    """

    def __init__(self, path: Stage, bench: Bench, asked: Sequence[Asked]) -> None:
        first = asked[0]
        frequency = np.array([sqrt(first.span[0] * first.span[1])])
        middle = float(shift_from_mains(frequency, mains=bench.mains, longest=0.1 * LONGEST)[0])
        limits, usual = record_limits(bench), plan_record(middle, mains=bench.mains, longest=LONGEST)
        try:
            record = limits.fitted(usual, middle)
            quiet = limits.fitted(RecordPlan(2.0 / bench.mains, _QUIET_SAMPLES))
        except ValueError as problem:
            raise BadInput(f"the path at {middle:.4g} Hz: {problem}") from problem
        low = (Tone(middle, LOW_LEVEL * first.level),)
        steps = [
            Step(0, path.name, "no-signal", (), 0.0, quiet.duration, quiet.points, first.ranges),
            Step(1, path.name, "low-level", low, 0.0, record.duration, record.points, first.ranges),
        ]
        for pair in asked:
            level = min(pair.level, *(reach / HEADROOM for reach in pair.ranges))
            steps += thru_steps(path, bench, pair.ranges, level, pair.span, first=len(steps))
        self._steps = tuple(steps)

    def more(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return all records before the first, none after it."""
        return () if points else self._steps

    def seconds_left(self, points: Sequence[Point]) -> float:
        """Return an estimate of the bench seconds still needed."""
        return sum(step.duration + _OVERHEAD for step in self._steps[len(points) :])


def usual_asked(bench: Bench) -> tuple[Asked, ...]:
    """Return what stages of usual gains ask of the path at the bench's ceiling, over the audio band."""
    levels = [(gain, well_ranged(bench.ceiling, gain)) for gain in _USUAL_GAINS]
    return tuple(Asked((HEADROOM * level, HEADROOM * level * gain), level, _USUAL_SPAN) for gain, level in levels)


def bare_board(bench: Bench) -> Board:
    """Return a board that is only the node both probes are put on: that of a test point on the other channel.

    Raises
    ------
    BadInput
        The bench file does not say how the probe gets there.
    """
    wire = _thru_wire(bench)
    taps = [tap for tap, other in bench.wires.items() if other.channel != wire.channel]
    if not taps:
        raise BadInput(f"[wiring] has no test point on the channel that {THRU!r} is compared with; add one")
    stage = Stage(THRU, "thru", taps[0], THRU, {}, "", ())
    points = {tap: TestPoint(tap, tap, 0.0) for tap in (taps[0], THRU)}
    return Board("the path itself", "", "", bench.ceiling, OpAmpData(inf, inf, inf), points, (stage,), "")


def path_of(board: Board, bench: Bench) -> Stage:
    """Return the path as a stage (BadInput: the bench file does not say how the probe gets there)."""
    wire = _thru_wire(bench)
    path = thru_stage(board, bench)
    if path is None:
        raise BadInput(f"wiring.{THRU} is on channel {wire.channel}, where all of the board's input taps are, too")
    return path


def _thru_wire(bench: Bench) -> Wire:
    if THRU not in bench.wires:
        raise BadInput(
            f"[wiring] has no {THRU!r}: name the channel whose probe is put on the other's node and how it gets there, "
            f'such as  {THRU} = {{ channel = 2, route = "{BY_HAND}" }}'
        )
    return bench.wires[THRU]
