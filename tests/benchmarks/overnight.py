"""An hour of bench time, board after board, while instruments fail at one step in 50: its figures are still true."""

from __future__ import annotations

import random
import tempfile
import time
from collections import Counter
from contextlib import closing
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path

from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import predict
from bandproof.bench.errors import BenchProblem
from bandproof.bench.finish import Outcome
from bandproof.bench.job import Job
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text, rehearsal_bench
from bandproof.bench.stop import Stop
from bandproof.bench.types import QUANTITIES, Bench, Board, StageResult
from bandproof.bench.verbs.rehearse import Rehearsal, simulated
from bandproof.drivers.clock import VirtualClock
from bandproof.drivers.errors import InstrumentProblem
from bandproof.simulated_instruments.faults import CONDITIONS, NAMES, PLACES, Fault

__all__ = ["Night", "measured"]

HOUR = 3600.0  # s of bench time
ODDS = 1 / 50  # of a fault at a step
COMPLETE, FURTHEST = 0.95, 5.0  # share of boards; |error| over u
STEPS = 84  # numbered steps a board's faults are drawn for: two stages of three batches; most take 28 and a thru
WIRING_STEPS = (0, 1, 2, 15, 28)  # where the switch is spoken to, if no batch is repeated
PATIENCE = 0.25  # s by the wall a simulated instrument has for a reply
TRANSIENT = tuple(name for name in NAMES if name not in CONDITIONS)


@dataclass
class Night:
    """What came of a night's boards."""

    boards: int = 0
    complete: int = 0
    bench_seconds: float = 0.0
    points: int = 0
    drawn: int = 0
    failures: Counter[str] = field(default_factory=Counter)
    recovered: int = 0
    cut_short: list[str] = field(default_factory=list)
    dishonest: list[str] = field(default_factory=list)
    worst: float = 0.0
    figures: int = 0
    beyond: list[str] = field(default_factory=list)

    @property
    def is_good(self) -> bool:
        """Whether the night was as it must be."""
        return self.complete >= COMPLETE * self.boards and not self.beyond and not self.dishonest

    def show(self) -> None:
        """Print the account."""
        share = self.complete / self.boards
        print(
            f"{self.boards} boards in {self.bench_seconds / HOUR:.3f} h of bench time, {self.points} points; faults "
            f"due {self.drawn}, failures seen {sum(self.failures.values())}, recovered {self.recovered}"
        )
        for words, count in self.failures.most_common():
            print(f"  {count:5d}  {words}")
        print(f"complete {self.complete} = {share:.1%} (bound {COMPLETE:.0%}), cut short {len(self.cut_short)}")
        for reason in self.cut_short:
            print(f"  {reason}")
        print(f"worst |error|/u of {self.figures} figures {self.worst:.2f} (bound {FURTHEST:g})")
        for text in (*self.beyond, *self.dishonest):
            print(f"  WRONG {text}")


def measured(*, hours: float, most_boards: int, seed: int, folder: Path, bands: int = 2) -> Night:
    """Measure boards until the bench time or the number of boards is reached."""
    board, night = _board(bands), Night()
    bench = rehearsal_bench(board)
    while night.bench_seconds < hours * HOUR and night.boards < most_boards:
        number = night.boards
        faults = _faults(random.Random(f"{seed} {number}"))
        world = replace(Rehearsal(1000 * seed + number).world(board, bench, 1), faults=faults)
        place = folder / f"TB-{number:04d}" / "1"
        place.mkdir(parents=True)
        with simulated(world, bench) as (reachable, _), closing(_clock(reachable)) as clock:
            outcome = _carried_out(_job(board, reachable, place, clock, number))
            night.bench_seconds += clock.now()
        if isinstance(outcome, Exception):  # before the first record a failure is told at once, for the one who began
            night.boards += 1
            night.cut_short.append(f"TB-{number:04d}: not begun: {outcome}")
            continue
        night.drawn += sum(fault.step < len(outcome.run.points) for fault in faults)
        _account(night, board, outcome, Rehearsal(1000 * seed + number).drawn(board))
    return night


def _carried_out(job: Job) -> Outcome | InstrumentProblem | BenchProblem:
    try:
        return job.carry_out()
    except (InstrumentProblem, BenchProblem) as problem:
        return problem


def _clock(bench: Bench) -> VirtualClock:
    assert bench.clock is not None
    return VirtualClock(bench.clock, patience=PATIENCE)


def _board(bands: int) -> Board:
    """Return a slow board, so that some 250 fill an hour: the demo's two lowest bands, 16 times the capacitance."""
    text = "\n[stages.".join(demo_text(DEMO_BOARD).split("\n[stages.")[: bands + 1]) + "\n"
    for demo, slow in (("160 Hz", "10 Hz"), ("400 Hz", "25 Hz"), ("33 nF", "528 nF"), ("15 nF", "240 nF")):
        text = text.replace(f'"{demo}"', f'"{slow}"')
    return parse_board(text, "the night's board")


def _faults(draw: random.Random) -> tuple[Fault, ...]:
    """Draw the faults of one board: each step is struck with the odds, by any transient fault anywhere it can be."""
    struck = [step for step in range(STEPS) if draw.random() < ODDS]
    faults = []
    for step in struck:
        name = draw.choice(TRANSIENT)
        places = [place for place in PLACES[name] if place in ("generator", "scope", "switch")]
        faults.append(Fault(name, step, draw.choice([p for p in places if p != "switch" or step in WIRING_STEPS])))
    return tuple(faults)


def _job(board: Board, bench: Bench, folder: Path, clock: VirtualClock, number: int) -> Job:
    return Job(
        board=board,
        bench=bench,
        serial=f"TB-{number:04d}",
        attempt=1,
        run_id=f"night-{number}",
        folder=folder,
        clock=clock,
        operator=Absent(),
        stop=Stop(),
        progress=_Silent(),
        rehearsal=asdict(Rehearsal(number)),
    )


class _Silent:
    def __call__(self, done: int, planned: int, left: float, stage: str) -> None:
        pass

    def close(self) -> None:
        pass


def _account(night: Night, board: Board, outcome: Outcome, drawn: dict[str, dict[str, float]]) -> None:
    run = outcome.run
    night.boards += 1
    night.complete += run.ended == "complete"
    night.points += len(run.points)
    failures = [str(entry["words"]) for entry in run.history if entry["event"] == "failure"]
    night.failures.update(_kind(words) for words in failures)
    night.recovered += sum(entry["event"] == "recovered" for entry in run.history)
    if run.ended == "cut_short":
        night.cut_short.append(f"{run.serial}: {run.reason}")
        if not run.reason or outcome.result["verdict"] is not None:
            night.dishonest.append(f"{run.serial}: cut short with {run.reason!r}, {outcome.result['verdict']!r}")
    if failures and run.ended == "complete" and not outcome.result["alarms"]:
        night.dishonest.append(f"{run.serial}: recovered without a word in its alarms")
    for stage in outcome.stages:
        _compare(night, run.serial, board, stage, drawn)


def _kind(words: str) -> str:
    for part in ("no complete answer", "lost the connection", "reported error", "answered"):
        if part in words:
            return part
    return words


def _compare(night: Night, serial: str, board: Board, stage: StageResult, drawn: dict[str, dict[str, float]]) -> None:
    """Compare a stage's figures with what its drawn parts truly give."""
    true = predict(board, board.stage(stage.name), drawn[stage.name])
    for quantity in QUANTITIES if stage.theta else ():
        figure = stage.figures[quantity]
        error = abs(figure.measured - true[quantity]) / figure.standard_uncertainty
        night.figures += 1
        night.worst = max(night.worst, error)
        if error > FURTHEST:
            night.beyond.append(f"{serial} {stage.name} {quantity}: off by {error:.1f} u")


def main() -> bool:
    """Measure an hour of boards; return whether enough were complete, and every figure and story is true."""
    began = time.perf_counter()
    with tempfile.TemporaryDirectory() as folder:
        night = measured(hours=1.0, most_boards=10_000, seed=3, folder=Path(folder))
    night.show()
    print(f"{time.perf_counter() - began:.0f} s by the wall")
    return night.is_good
