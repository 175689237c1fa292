"""The plan: which records to take next, given what was measured so far. Pure and incremental; empty means done."""

from collections import Counter
from collections.abc import Callable, Collection, Sequence
from functools import partial
from math import ceil, log, log10

import numpy as np

from bandproof.analysis.planning import RecordPlan, band_frequencies, dwell_after_step, plan_record, shift_from_mains
from bandproof.analysis.types import FloatArray
from bandproof.bench.circuit import Prediction, predict, predicted_response, stage_network, taps
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import fit_points, usable
from bandproof.bench.level import HEADROOM, greatest_level, well_ranged
from bandproof.bench.record import HUM_BELOW, hum_frequencies
from bandproof.bench.record_limits import record_limits
from bandproof.bench.thru import THRU, Asked, Ranges, thru_stage
from bandproof.bench.types import Bench, Board, Point, Purpose, Stage, Step, Tone

__all__ = ["LOW_LEVEL", "Planner", "thru_steps"]

LOW_LEVEL = 0.1  # of the sweep's level: proves wiring and level before the board is driven
LONGEST = 1.0  # s, of a record
_QUIET_SAMPLES = 2048
_MOVED = log(1.15)  # a centre further than this from where it was looked for is looked at again; arbitrary
_MOST_BATCHES = 3
_BACK_OFF = 0.5  # 6 dB, when a record is distorted
_FAINT = 0.17  # of the range, the loudest point's level: the skirts then fall below 20 of 128 steps
_FAINTEST = 0.01  # what is fainter is leakage of a dead stage: no range is asked for it; arbitrary
_BEYOND = 1.5  # times that a thru reaches beyond the points it is for
_PATH_POINTS, _PATH_PER_DECADE = 6, 4  # of a thru: a smooth curve of five unknowns
_PATH_SAMPLES = 8192  # of its records, so that its noise hardly counts beside that of the points
_OVERHEAD = 0.03  # s a record costs beyond dwell and duration, for the time left; arbitrary


class Planner:
    """Plans the records of a board on a bench, stage by stage, and the path's on every pair of ranges not ``known``.

    ``longer``: how many times the usual length the records with a signal are, and their samples, those of the path not.

    Raises
    ------
    BadInput
        A stage's circuit has no band near its designed centre, no level is safe for it, its stages are in series, or
        a band needs a record that is too long, or that the scope cannot take by its dialect: all of them at once.
    """

    def __init__(self, board: Board, bench: Bench, known: Collection[Ranges] = (), *, longer: float = 1.0) -> None:
        _refuse_series(board)
        self._board, self._bench, self._known, self._longer = board, bench, set(known), longer
        self._predictions = {stage.name: _predicted(board, stage) for stage in board.stages}
        self._levels = {stage.name: self._level(stage) for stage in board.stages}
        self._limits = record_limits(bench)
        self._costs: dict[str, list[float]] = {}
        self._finished: dict[str, int] = {}  # points after which a stage needed no more, so that it is not fitted again
        self._dwells: dict[tuple[str, float, float | None, float], float] = {}
        self._refuse_unplannable()

    def _refuse_unplannable(self) -> None:
        """Plan every stage once now, so that what cannot be planned is told before anything is driven."""
        wrong = []
        for stage in self._board.stages:
            try:
                self._quiet(stage, 0)
                self._seconds(stage)
            except BadInput as problem:
                wrong.append(str(problem))
        if wrong:
            raise BadInput("\n".join(wrong))

    def more(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return the next batch of steps; empty when every stage has what it needs.

        Before any signal, every stage that needs no hands is looked at without one.
        """
        if steps := self._without_signal(points):
            return steps
        for stage in self._board.stages:
            had = [point for point in points if point.stage == stage.name]
            if self._finished.get(stage.name) == len(had):
                continue
            if steps := self._stage_steps(stage, had, first=len(points)):
                return steps
            self._finished[stage.name] = len(had)
        return self._thru(points)

    def _level(self, stage: Stage) -> float:
        """Return the level a stage is swept at."""
        prediction = self._predictions[stage.name]
        return well_ranged(greatest_level(self._board, self._bench, stage, prediction), prediction.gain)

    def _without_signal(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return a record without signal for each stage that was not looked at yet and needs no hands to be wired."""
        seen, wires = {point.stage for point in points}, self._bench.wires
        waiting = [
            stage
            for stage in self._board.stages
            if stage.name not in seen and not (wires[stage.tap_in].by_hand or wires[stage.tap_out].by_hand)
        ]
        return tuple(self._quiet(stage, len(points) + i) for i, stage in enumerate(waiting))

    def seconds_left(self, points: Sequence[Point]) -> float:
        """Return an estimate of the bench seconds still needed."""
        had = Counter(point.stage for point in points)
        return sum(sum(self._seconds(stage)[max(0, had[stage.name] - 2) :]) for stage in self._board.stages)

    def _thru(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return the thru on the next pair of ranges that the curves used; nothing where hands would have to move."""
        path = thru_stage(self._board, self._bench)
        if path is None or self._bench.wires[THRU].by_hand:
            return ()
        done = self._known | {point.ranges for point in points if point.purpose == "thru"}
        used = [point for point in usable(points, level=False) if point.ranges not in done]
        if not used:
            return ()
        ranges = used[0].ranges
        on_these = [point for point in used if point.ranges == ranges]
        level = min(float(np.median([point.amplitude for point in on_these])), ranges[1] / HEADROOM)
        span = [f(point.frequency for point in on_these) for f in (min, max)]
        return thru_steps(path, self._bench, ranges, level, (span[0], span[1]), first=len(points))

    def _seconds(self, stage: Stage) -> list[float]:
        """Return what each record of a stage's curve costs, as first planned."""
        if stage.name not in self._costs:
            self._costs[stage.name] = [step.dwell + step.duration + _OVERHEAD for step in self._first_curve(stage)]
        return self._costs[stage.name]

    def _first_curve(self, stage: Stage) -> tuple[Step, ...]:
        """Return a stage's curve where it is predicted to be."""
        return self._curve(stage, self._predictions[stage.name], 1.0, 1.0, 0, self._look_at(stage), LOW_LEVEL)

    def asked(self) -> tuple[Asked, ...]:
        """Return what each stage's curve, where it is predicted to be, asks of the path."""
        curves = [self._first_curve(stage) for stage in self._board.stages]
        return tuple(
            Asked(curve[0].ranges, curve[0].amplitude, (min(f), max(f)))
            for curve, f in ((curve, [step.frequency for step in curve]) for curve in curves)
        )

    def _stage_steps(self, stage: Stage, had: Sequence[Point], *, first: int) -> tuple[Step, ...]:
        prediction = self._predictions[stage.name]
        if not had:
            return self._quiet(stage, first), self._low_level(stage, first + 1)
        if len(had) == 1:
            return (self._low_level(stage, first),)
        scale = _scale(self._board, stage, had)
        batches = sum(point.purpose == "closing" for point in had)
        if batches == 0:
            return self._curve(stage, prediction, scale, 1.0, first, self._look_at(stage), LOW_LEVEL)
        if batches >= _MOST_BATCHES:
            return ()
        return self._again(stage, had, scale, batches, first)

    def _again(self, stage: Stage, had: Sequence[Point], scale: float, batches: int, first: int) -> tuple[Step, ...]:
        """Return another look where the band really is, or on a wider range, if the last batch asks for it."""
        last = had[_last_batch(had) :]
        looked_at = float(np.exp(np.mean(np.log([p.frequency for p in last if p.purpose == "curve"]))))
        fitted = fit_points(had).fit
        overloaded = sum("overload" in point.flags for point in last) > 2
        # Far below the range although the first look did not say so: once more on a range that fits.
        loudest = max(point.levels[1] / point.ranges[1] for point in last)
        faint = not overloaded and loudest < _FAINT
        distorted = any("distorted" in point.flags for point in last)
        found = self._predictions[stage.name]
        if fitted is not None:
            found = Prediction(float(fitted.f0[0]), float(fitted.q[0]), float(abs(fitted.gain[0])))
            scale = 1.0
        moved = fitted is not None and abs(log(found.centre / looked_at)) > _MOVED
        if (
            not (moved or overloaded or faint or distorted)
            or not 0.1 < found.centre / stage.limits["centre"].designed < 10.0
        ):
            return ()
        widen = 2.5**batches if overloaded else 1.0
        if faint and fitted is None:
            scale *= max(loudest, _FAINTEST)
        part = min(1.0, last[-1].amplitude / self._levels[stage.name]) * (_BACK_OFF if distorted else 1.0)
        return self._curve(stage, found, scale, widen, first, last[-1].frequency, 1.0 / part, part)

    def _quiet(self, stage: Stage, index: int) -> Step:
        """Return the record without signal."""
        longest = max(2.0 / self._bench.mains, 3.0 / self._predictions[stage.name].centre)
        record = _planned(stage, lambda: self._limits.fitted(RecordPlan(longest, _QUIET_SAMPLES)))
        return Step(index, stage.name, "no-signal", (), 0.0, record.duration, record.points, self._first_ranges(stage))

    def _low_level(self, stage: Stage, index: int) -> Step:
        """Return the first point with a signal."""
        low, frequency = LOW_LEVEL * self._levels[stage.name], self._look_at(stage)
        return self._step(index, stage, "low-level", frequency, None, low, self._first_ranges(stage))

    def _first_ranges(self, stage: Stage) -> tuple[float, float]:
        """Return the sweep's own ranges: a level ten times too high (a wrong probe factor) must be seen as it is."""
        level = HEADROOM * self._levels[stage.name]
        return level, level * self._predictions[stage.name].gain

    def _look_at(self, stage: Stage) -> float:
        """Return the frequency of a stage's low-level point: the predicted centre, clear of mains."""
        return float(self._clear_of_mains(np.array([self._predictions[stage.name].centre]))[0])

    def _curve(
        self,
        stage: Stage,
        at: Prediction,
        scale: float,
        widen: float,
        first: int,
        before: float,
        before_level: float,
        part: float = 1.0,
    ) -> tuple[Step, ...]:
        """Return the points round a band and the closing point, which repeats the first.

        Until then the generator is at the frequency and the part of the level given as ``before``; ``part`` of the
        stage's level is used.
        """
        level, swing = part * self._levels[stage.name], self._board.op_amp.swing
        # No op-amp gives more than its swing, whatever a fit or a first look says.
        ranges = (HEADROOM * level * widen, HEADROOM * min(swing, level * at.gain * scale * widen))
        frequencies = self._clear_of_mains(band_frequencies([at.centre], [at.q])[0])
        sequence = [*map(float, frequencies), float(frequencies[0])]
        previous = [(before, before_level), *((frequency, 1.0) for frequency in sequence[:-1])]
        return tuple(
            self._step(first + i, stage, "curve" if i < len(frequencies) else "closing", frequency, was, level, ranges)
            for i, (frequency, was) in enumerate(zip(sequence, previous, strict=True))
        )

    def _clear_of_mains(self, frequencies: FloatArray) -> FloatArray:
        return shift_from_mains(frequencies, mains=self._bench.mains, longest=0.1 * LONGEST)

    def _step(
        self,
        index: int,
        stage: Stage,
        purpose: Purpose,
        frequency: float,
        previous: tuple[float, float] | None,
        level: float,
        ranges: tuple[float, float],
    ) -> Step:
        def planned() -> RecordPlan:
            usual = plan_record(frequency, mains=self._bench.mains, longest=LONGEST)
            return self._limits.fitted(usual, frequency, self._longer)

        record, tones = _planned(stage, planned), (Tone(frequency, level),)
        dwell = self._dwell(stage, frequency, previous, record.duration)
        return Step(index, stage.name, purpose, tones, dwell, record.duration, record.points, ranges)

    def _dwell(self, stage: Stage, frequency: float, previous: tuple[float, float] | None, duration: float) -> float:
        """Return the dwell after a change from a frequency at a part of the level, or from no signal."""
        before, part = previous or (None, 1.0)
        key = (stage.name, frequency, before, part)
        if key not in self._dwells:
            network = stage_network(self._board, stage)
            self._dwells[key] = dwell_after_step(
                network,
                taps(self._board, stage),
                frequency,
                duration=duration,
                previous=before,
                previous_level=part,
                nuisance=hum_frequencies(frequency, duration, self._bench.mains),
                drift=frequency < HUM_BELOW,
            )
        return self._dwells[key]


def thru_steps(
    path: Stage, bench: Bench, ranges: Ranges, level: float, span: tuple[float, float], *, first: int
) -> tuple[Step, ...]:
    """Return the records of the path on a pair of ranges in V, at a level in V, a little beyond a span in Hz."""
    low, high = span[0] / _BEYOND, span[1] * _BEYOND
    grid = np.geomspace(low, high, _PATH_POINTS + ceil(_PATH_PER_DECADE * log10(high / low)))
    steps, limits = [], record_limits(bench)
    for i, frequency in enumerate(shift_from_mains(grid, mains=bench.mains, longest=0.1 * LONGEST).tolist()):
        usual = plan_record(frequency, mains=bench.mains, longest=LONGEST, points=_PATH_SAMPLES)
        record = _planned(path, partial(limits.fitted, usual, frequency))
        tones = (Tone(frequency, level),)
        steps.append(Step(first + i, path.name, "thru", tones, 0.0, record.duration, record.points, ranges))
    return tuple(steps)


def _planned(stage: Stage, plan: Callable[[], RecordPlan]) -> RecordPlan:
    """Return a planned record; one that cannot be taken is BadInput that names the stage."""
    try:
        return plan()
    except ValueError as problem:
        raise BadInput(f"stage {stage.name!r}: {problem}") from problem


def _refuse_series(board: Board) -> None:
    """Levels are planned at the board's input: stages behind one another are not planned yet."""
    first = board.stages[0]
    for stage in board.stages:
        if stage.tap_in != first.tap_in:
            raise BadInput(
                f"stage {stage.name!r} is measured from {stage.tap_in!r}, stage {first.name!r} from {first.tap_in!r}: "
                "stages in series are not planned yet, measure all from the board's input"
            )


def _predicted(board: Board, stage: Stage) -> Prediction:
    try:
        return predict(board, stage)
    except ValueError as problem:
        raise BadInput(f"stage {stage.name!r}: its circuit makes no band ({problem}); check the parts") from problem


def _scale(board: Board, stage: Stage, had: Sequence[Point]) -> float:
    """Return how much higher than predicted the low-level point came out, within a decade."""
    for point in had:
        if point.purpose == "low-level":
            expected = abs(predicted_response(board, stage, np.array([point.frequency]))[0])
            return float(np.clip(abs(point.response) / expected, 0.1, 10.0))
    return 1.0


def _last_batch(had: Sequence[Point]) -> int:
    """Return where the last finished batch begins."""
    closings = [i for i, point in enumerate(had) if point.purpose == "closing"]
    return closings[-2] + 1 if len(closings) > 1 else 0
