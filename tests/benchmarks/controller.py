"""What the controller adds to a bench: (bench seconds + its CPU seconds) / bench seconds, at most 1.15.

Bench seconds are settling, acquisition and the instruments' delays, in virtual time; the simulated instruments run in a
process of their own. ``python -m tests.benchmarks.controller --profile`` shows where the CPU seconds go.
"""

from __future__ import annotations

import cProfile
import pstats
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bandproof.analysis.planning import dwell_after_step, plan_record, shift_from_mains
from bandproof.bench.circuit import predict, stage_network, taps
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.plan import HEADROOM, LONGEST, Planner, greatest_level
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Bench, Board, Point, Stage, Step, Tone
from bandproof.bench.verbs.rehearse import Rehearsal, simulated

BOUND = 1.15
PER_DECADE, LOWEST, HIGHEST = 40, 20.0, 20e3  # of the uniform sweep
SEED, ROUNDS = 1, 5


@dataclass(frozen=True)
class Cost:
    """What one sweep took."""

    points: int
    bench: float  # s
    cpu: float  # s, of the controller's process

    @property
    def ratio(self) -> float:
        """Return the controller figure."""
        return (self.bench + self.cpu) / self.bench

    def __str__(self) -> str:
        return (
            f"{self.points} points, bench {self.bench:.2f} s, controller's CPU {self.cpu:.2f} s "
            f"= {1e3 * self.cpu / self.points:.1f} ms a point, ratio {self.ratio:.3f} (bound {BOUND})"
        )


class Uniform:
    """A plan of one stage: the frequencies of a uniform log sweep, one after the other, with the planner's rules."""

    def __init__(self, board: Board, bench: Bench, per_decade: int = PER_DECADE) -> None:
        stage = board.stages[0]
        count = round(per_decade * np.log10(HIGHEST / LOWEST)) + 1
        asked = shift_from_mains(np.geomspace(LOWEST, HIGHEST, count), mains=bench.mains, longest=0.1 * LONGEST)
        prediction = predict(board, stage)
        level = greatest_level(board, bench, stage, prediction)
        ranges = (HEADROOM * level, HEADROOM * level * prediction.gain)
        before: list[float | None] = [None, *map(float, asked[:-1])]
        self._steps = tuple(
            _step(board, bench, stage, i, float(frequency), before[i], level, ranges)
            for i, frequency in enumerate(asked)
        )

    def more(self, points: Sequence[Point]) -> tuple[Step, ...]:
        """Return all steps, once."""
        return () if points else self._steps

    def seconds_left(self, points: Sequence[Point]) -> float:
        """Return what is left of the plan."""
        return sum(step.dwell + step.duration for step in self._steps[len(points) :])


def _step(
    board: Board,
    bench: Bench,
    stage: Stage,
    index: int,
    frequency: float,
    before: float | None,
    level: float,
    ranges: tuple[float, float],
) -> Step:
    record = plan_record(frequency, mains=bench.mains, longest=LONGEST)
    network, nodes = stage_network(board, stage), taps(board, stage)
    dwell = dwell_after_step(network, nodes, frequency, duration=record.duration, previous=before)
    tones = (Tone(frequency, level),)
    return Step(index, stage.name, "curve", tones, dwell, record.duration, record.points, ranges)


def cost(
    board: Board, planner: Callable[[Board, Bench], Planner | Uniform], *, profile: cProfile.Profile | None = None
) -> Cost:
    """Sweep a board on a simulated bench, journal and exchange log on disk.

    The controller's CPU counts from making the plan to the last record.
    """
    bench = rehearsal_bench(board)
    with (
        tempfile.TemporaryDirectory() as folder,
        closing(Journal.begin(Path(folder), _head(board, bench))) as journal,
        simulated(Rehearsal(SEED).world(board, bench, 1), bench) as (reachable, clock),
        opened(reachable, clock, Path(folder) / "exchange.log") as devices,
    ):
        sweep = Sweep(board, reachable, devices, clock, Absent(), journal)
        sweep.prepare()
        if profile is not None:
            profile.enable()
        start, began = clock.now(), time.process_time()
        sweep.planner = planner(board, reachable)  # type: ignore[assignment]
        sweep.run()
        took, passed = time.process_time() - began, clock.now() - start
        if profile is not None:
            profile.disable()
    return Cost(len(journal.points), passed, took)


def _head(board: Board, bench: Bench) -> dict[str, Any]:
    texts = dict.fromkeys(("run_id", "serial", "version", "started", "operator", "note", "bench_path"), "benchmark")
    tables = {"identities": {}, "dialects": {}, "rehearsal": None}
    return {
        **texts,
        **tables,
        "attempt": 1,
        "clock_start": 0.0,
        "board": board.text,
        "bench": bench.text,
        "keep_raw": False,
    }


def main(profile: cProfile.Profile | None = None) -> bool:
    """Print the figure of the planned run and of the uniform sweep; return whether both are within the bound."""
    board = demo_board()
    cost(board, Planner)  # loads what is loaded late, so that importing does not count
    # The least of some runs: other processes on the same cores can only make CPU seconds more.
    planned = min((cost(board, Planner, profile=profile) for _ in range(ROUNDS)), key=lambda one: one.cpu)
    uniform = min((cost(board, Uniform, profile=profile) for _ in range(ROUNDS)), key=lambda one: one.cpu)
    print(f"planned run of the demo board: {planned}")
    print(f"uniform log sweep of one band: {uniform}")
    return planned.ratio <= BOUND and uniform.ratio <= BOUND


if __name__ == "__main__":
    if "--profile" in sys.argv:
        profiler = cProfile.Profile()
        main(profiler)
        pstats.Stats(profiler).sort_stats("tottime").print_stats(40)
    else:
        raise SystemExit(0 if main() else 1)
