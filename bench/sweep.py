"""The sweep: carries out steps on the instruments, in the order that is safe, one message at a time.

Order of a run: generator off; a record without signal of every stage that needs no hands to be wired, so that a direct
voltage anywhere ends the run before the board is given any; then per stage wiring (generator off), a record without
signal if hands did the wiring, one low-level point, the curve, the closing point, generator off. The generator stays on
from the first to the last point of a stage: switching it per point would wear its relay and restart the settling.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from math import inf
from typing import Protocol

from bandproof.analysis.types import FloatArray
from bandproof.bench.errors import BenchFault
from bandproof.bench.first_look import check_low_level, check_quiet, frequency_problem, level_problem, strange_response
from bandproof.bench.instruments import Devices
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Operator
from bandproof.bench.plan import Planner
from bandproof.bench.power import power_up
from bandproof.bench.record import Taken, point_of
from bandproof.bench.recovery import Recovery
from bandproof.bench.stop import Stop
from bandproof.bench.thru import THRU, thru_stage
from bandproof.bench.types import Bench, Board, Point, Stage, Step
from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import InstrumentProblem

__all__ = ["Sweep"]

LONG_PAUSE = 60.0  # s between two records, beyond what they take; arbitrary
REPEATS = 2  # most repetitions of a record that had not settled


class Plans(Protocol):
    """What asks for records: a board's plan, or that of the path itself."""

    def more(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return the next batch of steps; empty when there is enough."""

    def seconds_left(self, points: Sequence[Point]) -> float:
        """Return an estimate of the bench seconds still needed."""


@dataclass
class Sweep:
    """One run of a board on opened instruments.

    ``progress`` is called with (steps done, steps planned, bench seconds still to come, stage) after every step;
    ``start`` is the clock at which the run began. Call ``prepare`` first, then ``run``.
    """

    board: Board
    bench: Bench
    devices: Devices
    clock: Clock
    operator: Operator
    journal: Journal
    stop: Stop = field(default_factory=Stop)
    progress: Callable[[int, int, float, str], None] = lambda done, planned, left, stage: None
    planner: Plans | None = None
    repeats: int = REPEATS
    dwell_factor: float = 1.0
    keep_raw: bool = False
    start: float | None = None

    def __post_init__(self) -> None:
        """Without a given start, the bench time of points counts from now."""
        self._stage = ""
        self._last_seen: tuple[float, datetime] | None = None
        self._start = self.clock.now() if self.start is None else self.start
        self._origin = self._start

    def stamp(self) -> float:
        """Return the clock as the run counts it: without the time nobody measured before a resume, in whole ns."""
        return round(self._origin + self.elapsed(), 9)

    def elapsed(self) -> float:
        """Return the bench time of the run in s."""
        return self.clock.now() - self._start

    def run(self) -> None:
        """Measure until the plan asks for no more, from wherever the journal stands.

        Raises
        ------
        InstrumentProblem, BenchFault
            The bench failed beyond recovery; what was measured is in the journal; the generator is still to be made
            safe.
        Stopped
            A stop was requested.
        OSError
            The journal cannot be written.
        """
        planner: Plans = self.planner or Planner(self.board, self.bench)
        while steps := self._next(planner):
            for step in steps:
                self._carry_out(step)
                left = planner.seconds_left(self.journal.points)
                self.progress(len(self.journal.points), len(self.journal.steps), left, step.stage)
        self.devices.generator.be_safe()

    def prepare(self) -> None:
        """Bring the instruments from whatever they were left at to a quiet start: output off before anything else."""
        generator = self.devices.generator
        generator.be_safe()
        for instrument in self.devices.all():
            self.stop.check()
            instrument.reset()
        generator.set_load(inf)
        generator.set_sine()
        generator.set_offset(0.0)
        if self.devices.supply is not None and self.board.power is not None:
            power_up(self.board.power, self.bench, self.devices.supply, self.clock)

    def repeat(self, step: Step) -> Point:
        """Measure a step once more without keeping it."""
        return self._recovered(step)[0]

    def look(self, step: Step, point: Point) -> None:
        """Check the first records of a stage: they prove wiring, probes, level and supply before the sweep.

        Raises
        ------
        BenchFault
            The board must not be driven as it is.
        """
        stage = self._stage_of(step)
        if step.purpose == "no-signal":
            alarms = check_quiet(self.board, self.bench, stage, point)
        elif step.purpose == "low-level":
            alarms = check_low_level(self.board, self.bench, stage, point)
        else:
            alarms = []
        for alarm in alarms:
            self.journal.alarm(alarm)

    def continue_at(self, elapsed: float) -> None:
        """Let the bench time go on at so many seconds."""
        self._start = self.clock.now() - elapsed

    def _next(self, planner: Plans) -> tuple[Step, ...]:
        """Return the steps planned and not yet measured, else the next batch, which is kept before it is run."""
        waiting = tuple(self.journal.steps[len(self.journal.points) :])
        if waiting:
            return waiting
        steps = planner.more(tuple(self.journal.points))
        if steps:
            self.journal.planned(steps)
        return steps

    def _carry_out(self, step: Step) -> None:
        self._watch_clock(step)
        began = self.stamp()
        point, volts = self._recovered(step)
        point, volts = self._second_look(step, point, volts)
        self._last_seen = self.clock.now(), self.clock.utc()
        self.journal.measured(point, began=began, finished=self.stamp(), volts=volts if self.keep_raw else None)
        self.look(step, point)

    def _second_look(self, step: Step, point: Point, volts: FloatArray) -> tuple[Point, FloatArray]:
        """Ask whoever put a probe by hand to look again when the first signal says it is on another point."""
        stage = self._stage_of(step)
        by_hand = any(self.bench.wires[tap].by_hand for tap in (stage.tap_in, stage.tap_out))
        if step.purpose != "low-level" or not by_hand or not strange_response(self.board, stage, point):
            return point, volts
        self.devices.generator.be_safe()
        ratio = abs(point.response)
        self.operator.confirm(
            f"The generator is off. The gain between {stage.tap_in!r} and {stage.tap_out!r} reads {ratio:.3g}, far "
            "from what was designed. Look whether both probes are on these points, and move them if not"
        )
        self.journal.told(self.elapsed(), "probes looked at again", stage=stage.name, read=ratio)
        return self._recovered(step)

    def _watch_clock(self, step: Step) -> None:
        """Tell of time that passed while nobody measured, and of a computer's clock that was set."""
        now, utc = self.clock.now(), self.clock.utc()
        if self._last_seen is not None:
            passed, by_the_wall = now - self._last_seen[0], (utc - self._last_seen[1]).total_seconds()
            if max(passed, by_the_wall) > LONG_PAUSE:
                self.journal.told(self.elapsed(), "pause", step=step.index, seconds=round(max(passed, by_the_wall), 3))
                self.journal.alarm(f"{step.stage}: nothing was measured for {max(passed, by_the_wall):.0f} s")
            elif by_the_wall < -1.0:
                self.journal.told(self.elapsed(), "clock set back", step=step.index, seconds=round(-by_the_wall, 3))
                self.journal.alarm(f"{step.stage}: the computer's clock was set back by {-by_the_wall:.0f} s")

    def _recovered(self, step: Step) -> tuple[Point, FloatArray]:
        """Measure a step, again after what an instrument can get over, a bounded number of times."""
        recovery = Recovery(self.devices, self.journal, self.elapsed)
        attempt = 0
        while True:
            try:
                stage = self._stage_of(step)
                if step.setup != self._stage:
                    self._stage = ""
                    self._wire(stage)
                    self._stage = step.setup
                return self._settled(step, stage, attempt)
            except InstrumentProblem as problem:
                attempt += self.repeats + 1
                recovery.after(problem, step)

    def _stage_of(self, step: Step) -> Stage:
        """Return the stage of a step; the path itself is one, too."""
        path = thru_stage(self.board, self.bench) if step.stage == THRU else None
        return path or self.board.stage(step.stage)

    def _wire(self, stage: Stage) -> None:
        """Connect a stage's taps with the generator off."""
        self.stop.check()
        self.devices.generator.be_safe()
        for tap in (stage.tap_in, stage.tap_out):
            wire = self.bench.wires[tap]
            if wire.route is not None and self.devices.switch is not None:
                self.devices.switch.close(wire.route)
            elif wire.by_hand:
                point = stage.tap_in if tap == THRU else tap
                node = self.board.points[point].node
                self.operator.confirm(
                    f"The generator is off. Put the probe of channel {wire.channel} on test point {point!r} "
                    f"(node {node})"
                )
        self.journal.told(self.elapsed(), "wired", stage=stage.name)

    def _settled(self, step: Step, stage: Stage, first: int) -> tuple[Point, FloatArray]:
        """Take a step's record, again while it has not settled, at most `repeats` times more."""
        wrong = ""
        for attempt in range(first, first + self.repeats + 1):
            if attempt > first:
                words = wrong or "the record had not settled"
                self.journal.told(self.elapsed(), "taken again", step=step.index, words=words)
            taken = self._taken(step, stage, attempt)
            point = point_of(step, taken, self.bench.mains, self.bench.accuracy.linearity)
            wrong = frequency_problem(point) or level_problem(stage, self._low_level(step), point)
            if "unsettled" not in point.flags and not wrong:
                return point, taken.volts
        if wrong:
            raise BenchFault(wrong)
        self.journal.alarm(f"{step.stage}: the record at {step.frequency:.6g} Hz had not settled")
        return point, taken.volts

    def _low_level(self, step: Step) -> Point | None:
        """Return the low-level point of a step's stage, if it was measured."""
        points = (p for p in self.journal.points if p.stage == step.stage and p.purpose == "low-level")
        return next(points, None)

    def _taken(self, step: Step, stage: Stage, attempt: int) -> Taken:
        self.stop.check()
        self.clock.mark(step.index, attempt)
        channels = [self.bench.wires[tap].channel for tap in (stage.tap_in, stage.tap_out)]
        ranges = self._set_scope(step, channels)
        frequency, amplitude = self._set_generator(step)
        self.clock.wait(step.dwell * self.dwell_factor)
        self.stop.check()
        began = self.elapsed()
        record = self.devices.scope.acquire()
        order = [channel - 1 for channel in channels]
        return Taken(
            volts=record.volts[order],
            sample_interval=record.sample_interval,
            overload=(bool(record.overload[order[0]]), bool(record.overload[order[1]])),
            lsb=(float(record.lsb[order[0]]), float(record.lsb[order[1]])),
            ranges=ranges,
            frequency=frequency,
            amplitude=amplitude,
            time=began,
            attempt=attempt,
        )

    def _set_scope(self, step: Step, channels: list[int]) -> tuple[float, float]:
        found = self.devices.set_ranges(channels, step.ranges, self.bench.probe_factors)
        self.devices.scope.set_record(step.duration, step.samples)
        return found

    def _set_generator(self, step: Step) -> tuple[float, float]:
        """Set the tone and make sure the output is on (or off, for a record without signal)."""
        generator = self.devices.generator
        if not step.tones:
            generator.output(False)
            return 0.0, 0.0
        if step.amplitude > self.bench.ceiling:
            raise BenchFault(
                f"a step asks for {step.amplitude:g} V, above the bench's ceiling {self.bench.ceiling:g} V"
            )
        amplitude = generator.set_amplitude(step.amplitude)
        frequency = generator.set_frequency(step.frequency)
        self.devices.await_lifeline()
        generator.output(True)
        return frequency, amplitude
