"""What a bench will make of boards before the first is measured: U of each figure, verdicts and both risks.

The records that the planner asks for are made from the nodal response of the board as drawn, with the noise and the
rounding of the converter, and go through the program's own points, fit and budgets. No instrument is contacted.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from math import floor, log2, log10

import numpy as np
from numpy.typing import NDArray

from bandproof.analysis.decision import outcomes
from bandproof.analysis.spread import Fraction, fraction
from bandproof.analysis.types import BoolArray, FloatArray
from bandproof.analysis.uncertainty import probability_below, share
from bandproof.bench.budget import dominating
from bandproof.bench.circuit import predicted_response
from bandproof.bench.conformance import board_errors
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.instruments import load_dialects
from bandproof.bench.path_plan import PathPlanner
from bandproof.bench.plan import Planner
from bandproof.bench.prediction import PredictedBoards
from bandproof.bench.record import Taken, point_of
from bandproof.bench.thru import THRU, Asked, Path, Ranges, paths, thru_stage
from bandproof.bench.types import QUANTITIES, Bench, Board, Comparison, Limit, Point, Quantity, Stage, StageResult, Step
from bandproof.drivers.slots import ScopeDialect

__all__ = ["LEAST_RATIO", "Expectation", "ExpectedFigure", "Verdicts", "expected", "predicted_results"]

LEAST_RATIO = 4.0  # of the tolerance's half-width over U; below, it is warned (common practice)
NOISE = 0.5  # LSB rms of a scope's own noise, beside its rounding (common practice)
THRU_AGE = 3600.0  # s that a thru made by hand is older than the sweep; arbitrary
_PAUSE = 0.03  # s a record costs beyond dwell and duration; arbitrary
_ERRORS, _RECORDS = 0xE44, 0x4EC  # keep the draws of errors and of records apart from those of parts


@dataclass(frozen=True, slots=True)
class Verdicts:
    """Fractions of all boards made.

    ``passed``, ``undecided``, ``failed``; ``consumer``: passed, and truly out of limits; ``producer``: not passed,
    and truly within.
    """

    passed: Fraction
    undecided: Fraction
    failed: Fraction
    consumer: Fraction
    producer: Fraction


@dataclass(frozen=True, slots=True)
class ExpectedFigure:
    """A figure on a bench: what U will be and what will be decided.

    U in SI and ``relative`` to the figure; ``ratio`` of the tolerance's half-width to U; U's largest row and its share;
    ``verdicts`` is None where no parts are stated.
    """

    expanded: float
    relative: float
    coverage_factor: float
    ratio: float
    largest: str
    largest_share: float
    rule: str
    verdicts: Verdicts | None


@dataclass(frozen=True, slots=True, eq=False)
class Expectation:
    """What is expected of boards on a bench: by stage and figure, of all stages with parts; notes are about the bench.

    ``codes`` (K, F) are the verdicts on the drawn boards' figures: 0 pass, 1 undecided, 2 fail.
    """

    stages: Mapping[str, Mapping[Quantity, ExpectedFigure]]
    board: Verdicts | None
    bits: float
    thru: str
    notes: tuple[str, ...]
    codes: NDArray[np.int8]


def expected(board: Board, bench: Bench, boards: PredictedBoards) -> Expectation:
    """Return what measuring drawn boards on a bench will make of them.

    Raises
    ------
    BadInput
        The board cannot be planned on this bench, or its points give no figures there.
    """
    results = predicted_results(board, bench, seed=boards.seed)
    figures = [(result, quantity) for result in results for quantity in QUANTITIES]
    rng = np.random.default_rng([boards.seed, _ERRORS])
    nominal = np.array([result.figures[quantity].measured for result, quantity in figures])
    measured = boards.true * (1.0 + board_errors(results, rng, len(boards.true)) / nominal)
    limits = [stage.limits[quantity] for stage in board.stages for quantity in QUANTITIES]
    codes = np.stack([_decided(*one) for one in zip(measured.T, figures, limits, boards.known, strict=True)], axis=1)
    known = boards.known
    each = [verdicts_of(codes[:, i], boards.inside[:, i]) if known[i] else None for i in range(len(figures))]
    stages = {
        result.name: {
            quantity: _figure(result, quantity, each[len(QUANTITIES) * s + i]) for i, quantity in enumerate(QUANTITIES)
        }
        for s, result in enumerate(results)
    }
    among = codes[:, known], boards.inside[:, known]
    whole = verdicts_of(among[0].max(axis=1), np.asarray(among[1].all(axis=1))) if known.any() else None
    notes = tuple(alarm for result in results for alarm in result.alarms)
    return Expectation(stages, whole, converter_bits(bench), _thru_in_words(board, bench), notes, codes)


def _decided(measured: FloatArray, figure: tuple[StageResult, Quantity], limit: Limit, known: bool) -> NDArray[np.int8]:
    """Return the verdicts on a figure of drawn boards (K,), as a comparison decides them; undecided where not known."""
    if not known:
        return np.ones(len(measured), dtype=np.int8)
    result, quantity = figure
    budget, scale = result.budgets[quantity], measured / result.figures[quantity].measured
    return outcomes(
        measured,
        scale * budget.u,
        low=limit.lower,
        high=limit.upper,
        rule=limit.decides,
        expanded=scale * budget.expanded,
        prior=limit.prior,
        below=partial(probability_below, budget.rows),
    )


def verdicts_of(codes: NDArray[np.int8], inside: BoolArray) -> Verdicts:
    """Return the fractions of verdicts (K,) and of both wrong ones, where what is truly inside (K,) is known."""
    passes = codes == 0
    return Verdicts(
        fraction(passes),
        fraction(codes == 1),
        fraction(codes == 2),
        fraction(passes & ~inside),
        fraction(~passes & inside),
    )


def _figure(result: StageResult, quantity: Quantity, verdicts: Verdicts | None) -> ExpectedFigure:
    figure: Comparison = result.figures[quantity]
    budget = result.budgets[quantity]
    row = dominating(budget)
    return ExpectedFigure(
        expanded=figure.expanded_uncertainty,
        relative=figure.expanded_uncertainty / figure.measured,
        coverage_factor=figure.coverage_factor,
        ratio=0.5 * (figure.upper_limit - figure.lower_limit) / figure.expanded_uncertainty,
        largest=row.name,
        largest_share=share(row, budget),
        rule=figure.rule,
        verdicts=verdicts,
    )


def predicted_results(board: Board, bench: Bench, *, seed: int) -> tuple[StageResult, ...]:
    """Return what the program would conclude about the board as drawn, on a bench that keeps what its file declares.

    Raises
    ------
    BadInput
        The board cannot be planned on this bench, or a stage's points give no figures.
    """
    known = _path_by_hand(board, bench, seed)
    planner = Planner(board, bench, known)
    make = _Records(board, bench, seed)
    points = list[Point]()
    while steps := planner.more(points):
        points += [make.point(step) for step in steps]
    known = {**known, **paths(points)}
    results = tuple(
        evaluate_stage(board, bench, stage, [point for point in points if point.stage == stage.name], known)
        for stage in board.stages
    )
    for result in results:
        if not result.budgets:
            raise BadInput(
                f"stage {result.name!r}: predicted points give no figures on this bench ({result.status}); "
                "look at its ceiling and the board's input maximum"
            )
    return results


class _Records:
    """Makes the points of steps, one after the other in bench time."""

    def __init__(self, board: Board, bench: Bench, seed: int) -> None:
        self._board, self._bench, self._time = board, bench, 0.0
        self._rng = np.random.default_rng([seed, _RECORDS])
        self._bits = converter_bits(bench)

    def point(self, step: Step) -> Point:
        """Return the point of a step on a path that changes nothing."""
        ranges = _ranges(self._bench, self._channels(step), step.ranges)
        lsb = (2.0 * ranges[0] / 2.0**self._bits, 2.0 * ranges[1] / 2.0**self._bits)
        steps = np.array(lsb)[:, None]
        volts = self._signal(step) + NOISE * steps * self._rng.normal(size=(2, step.samples))
        volts = steps * np.round(volts / steps)
        self._time += step.dwell + step.duration + _PAUSE
        interval, over = step.duration / step.samples, (False, False)
        taken = Taken(volts, interval, over, lsb, ranges, step.frequency, step.amplitude, self._time, 0)
        return point_of(step, taken, self._bench.mains, self._bench.accuracy.linearity)

    def _stage(self, step: Step) -> Stage | None:
        return None if step.stage == THRU else self._board.stage(step.stage)

    def _channels(self, step: Step) -> tuple[int, int]:
        stage, wires = self._stage(step) or thru_stage(self._board, self._bench), self._bench.wires
        assert stage is not None  # nobody plans a thru where none is wired
        return wires[stage.tap_in].channel, wires[stage.tap_out].channel

    def _signal(self, step: Step) -> FloatArray:
        if not step.tones:
            return np.zeros((2, step.samples))
        stage, ratio = self._stage(step), 1.0 + 0.0j
        if stage is not None:
            ratio = complex(predicted_response(self._board, stage, np.array([step.frequency]))[0])
        phase = 2.0 * np.pi * step.frequency * step.duration / step.samples * np.arange(step.samples)
        turn = step.amplitude * np.exp(1j * phase)
        signal: FloatArray = np.stack([turn.real, (ratio * turn).real])
        return signal


def _ranges(bench: Bench, channels: tuple[int, int], asked: Ranges) -> Ranges:
    """Return the ranges at the probe tips that a scope of 1-2-5 steps has (common practice)."""
    factors = [bench.probe_factors[channel] for channel in channels]
    first, second = (f * _range(reach / f) for f, reach in zip(factors, asked, strict=True))
    return first, second


def _range(reach: float) -> float:
    decade = 10.0 ** floor(log10(reach) + 1e-12)
    return decade * min(step for step in (1.0, 2.0, 5.0, 10.0) if step >= reach / decade * (1.0 - 1e-9))


def _path_by_hand(board: Board, bench: Bench, seed: int) -> dict[Ranges, Path]:
    """Return the path as hands would measure it before; nothing where a switch does, or nobody can."""
    path = thru_stage(board, bench)
    if path is None or not bench.wires[THRU].by_hand:
        return {}
    channels = bench.wires[path.tap_in].channel, bench.wires[path.tap_out].channel
    asked, found = Planner(board, bench).asked(), dict[Ranges, Asked]()
    level = min(one.level for one in asked)
    for one in asked:
        ranges = _ranges(bench, channels, one.ranges)
        other = found.get(ranges, one).span
        found[ranges] = Asked(ranges, level, (min(one.span[0], other[0]), max(one.span[1], other[1])))
    make = _Records(board, bench, seed + 1)
    steps = PathPlanner(path, bench, list(found.values())).more(())
    return paths([make.point(step) for step in steps], before=THRU_AGE)


def converter_bits(bench: Bench) -> float:
    """Return the scope's resolution in bits as its dialect says it, else 8 (common practice)."""
    dialect = load_dialects(bench)["scope"]
    assert isinstance(dialect, ScopeDialect)
    overload = dialect.overload
    if overload.bits or overload.high <= overload.low:
        return float(overload.bits or 8)
    return log2(overload.high - overload.low + 1.0)


def _thru_in_words(board: Board, bench: Bench) -> str:
    path = thru_stage(board, bench)
    if path is None:
        return "none: no wire named thru"
    return f"by hand, {THRU_AGE / 60.0:.0f} min before" if bench.wires[THRU].by_hand else "measured at the end"
