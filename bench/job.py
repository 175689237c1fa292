"""The whole job on one board: open, sweep, fit, compare, keep. Used alike by a real bench and a rehearsal."""

import re
from collections.abc import Callable
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any, Literal

from bandproof.bench.errors import BadInput, BenchProblem
from bandproof.bench.evaluate import evaluate
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Operator
from bandproof.bench.result import result_object
from bandproof.bench.runfile import write_run
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Bench, Board, Run, StageResult
from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import InstrumentProblem

__all__ = ["Job", "Outcome", "new_attempt"]

_SERIAL = re.compile(r"[A-Za-z0-9._-]{1,64}")


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a job ended in: the run, its stages, the result object as stored, where the files are."""

    run: Run
    stages: tuple[StageResult, ...]
    result: dict[str, Any]
    folder: Path
    problem: Exception | None


@dataclass(frozen=True)
class Job:
    """Everything a job needs; ``run_id`` names the run, ``folder`` is the attempt's own."""

    board: Board
    bench: Bench
    serial: str
    attempt: int
    run_id: str
    folder: Path
    clock: Clock
    operator: Operator
    stop: Stop
    progress: Callable[[int, int, float, str], None]
    operator_name: str = ""
    note: str = ""

    def carry_out(self) -> Outcome:
        """Sweep the board and leave run file and picture; a run that cannot end is kept as cut short.

        Raises
        ------
        InstrumentProblem, BenchFault, Stopped
            Nothing was measured: there is nothing to keep.
        FileMistakes
            A dialect cannot be used.
        """
        journal, identities = Journal(), dict[str, str]()
        started = self.clock.utc().isoformat(timespec="seconds")
        begin = self.clock.now()
        problem: Exception | None = None
        try:
            with opened(self.bench, self.clock, self.folder / "exchange.log") as devices:
                identities |= devices.identities()
                Sweep(
                    self.board,
                    self.bench,
                    devices,
                    self.clock,
                    self.operator,
                    journal,
                    stop=self.stop,
                    progress=self.progress,
                ).run()
        except (InstrumentProblem, BenchProblem) as failure:
            if not journal.points:
                raise
            problem = failure
        return self._kept(journal, identities, started, self.clock.now() - begin, problem)

    def _kept(
        self, journal: Journal, identities: dict[str, str], started: str, seconds: float, problem: Exception | None
    ) -> Outcome:
        ended: Literal["complete", "cut_short"] = "complete" if problem is None else "cut_short"
        run = Run(
            run_id=self.run_id,
            serial=self.serial,
            attempt=self.attempt,
            board=self.board,
            bench=self.bench,
            identities=identities,
            version=version("bandproof"),
            started=started,
            ended=ended,
            reason=str(problem or ""),
            bench_seconds=round(seconds, 6),
            operator=self.operator_name or "not stated",
            note=self.note,
            steps=tuple(journal.steps),
            points=tuple(journal.points),
            alarms=tuple(journal.alarms),
            history=tuple(journal.history),
        )
        stages = evaluate(run)
        files = {"run": "run.h5", "picture": "picture.svg", "report": None}
        result = result_object(run, stages, files)
        write_run(self.folder / "run.h5", run, result)
        _draw(run, stages, self.folder / "picture.svg")
        return Outcome(run, stages, result, self.folder, problem)


def _draw(run: Run, stages: tuple[StageResult, ...], path: Path) -> None:
    from bandproof.bench.evaluate import views
    from bandproof.bench.picture import draw, save

    drawn = views(run, stages)
    if drawn:
        save(draw(drawn, f"{run.board.title}   serial {run.serial}, attempt {run.attempt}"), path)


def new_attempt(folder: Path, serial: str) -> tuple[Path, int]:
    """Make and return the folder of the next attempt on a serial number; an existing one is never used again.

    Raises
    ------
    BadInput
        The serial number has other characters than letters, digits and ``. _ -``.
    OSError
        The folder cannot be made.
    """
    if not _SERIAL.fullmatch(serial) or serial in (".", ".."):
        raise BadInput(f"{serial!r} cannot be a serial number: letters, digits and . _ - only, at most 64")
    place = folder / serial
    place.mkdir(parents=True, exist_ok=True)
    taken = [int(entry.name) for entry in place.iterdir() if entry.name.isdigit()]
    for attempt in range(max(taken, default=0) + 1, max(taken, default=0) + 1000):
        try:
            (place / str(attempt)).mkdir()
        except FileExistsError:
            continue
        return place / str(attempt), attempt
    raise BadInput(f"{place} has no room for another attempt")
