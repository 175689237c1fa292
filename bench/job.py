"""The whole job on one board: open, sweep, fit, compare, keep; begun or resumed, on a real bench or in a rehearsal."""

from collections.abc import Callable, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any, Protocol

from bandproof.bench.attempts import Attempt, numbers, place_of
from bandproof.bench.errors import BadInput, BenchFault, BenchProblem
from bandproof.bench.finish import Outcome, finish
from bandproof.bench.instruments import Devices, occupied, with_dialect_texts
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Operator
from bandproof.bench.plain import checks_plain, thru_from, thru_plain
from bandproof.bench.plan import Planner
from bandproof.bench.recovery import plainly
from bandproof.bench.resumption import ResumeRefused, check_again, check_identities
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.thru import paths
from bandproof.bench.thru_use import Now, asked_of_scope, thru_for
from bandproof.bench.types import Bench, Board, CheckHistory, Thru
from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import InstrumentProblem

__all__ = ["Job", "Progress", "new_attempt"]

LOG = "exchange.log"


class Progress(Protocol):
    """Told how far a run is: records done and planned so far, bench seconds left, stage; closed at its end."""

    def __call__(self, done: int, planned: int, left: float, stage: str) -> None:
        """Tell how far it is."""

    def close(self) -> None:
        """Tell that no more will come."""


@dataclass(frozen=True)
class Job:
    """What a job needs.

    ``rehearsal`` is what a rehearsal was asked for (seed, defects, faults): a resume starts the same simulated bench
    again. ``thru`` is one stored in a file, used by a new run if all its conditions hold; a resumed run uses that of
    its journal. ``earlier`` are the attempts on the serial number; the verdict is pooled with those that count.
    ``retest`` is why it is asked again, ``longer`` how many times as long as usual its records are. ``checks`` are
    those of the bench on its check standard, ``notes`` what is to be told of a new run from its beginning.
    ``begin_journal`` makes the journal of a new run in its folder.
    """

    board: Board
    bench: Bench
    serial: str
    attempt: int
    run_id: str
    folder: Path
    clock: Clock
    operator: Operator
    stop: Stop
    progress: Progress
    operator_name: str = ""
    note: str = ""
    ambient: float | None = None
    thru: Thru | None = None
    thru_path: str = ""
    keep_raw: bool = False
    rehearsal: Mapping[str, Any] | None = None
    earlier: Sequence[Attempt] = ()
    retest: str = ""
    longer: float = 1.0
    checks: CheckHistory | None = None
    notes: Sequence[str] = ()
    bench_path: str = ""
    begin_journal: Callable[[Path, dict[str, Any]], Journal] = Journal.begin

    def carry_out(self) -> Outcome:
        """Sweep the board and leave run file and picture; a run that cannot end is kept as cut short.

        Raises
        ------
        InstrumentProblem, BenchFault, Stopped
            Nothing was measured, or the run's folder cannot be written.
        FileMistakes, DialectMistakes
            A file cannot be used.
        """
        return self._carried_out(None)

    def go_on(self, journal: Journal) -> Outcome:
        """Go on where a journal stands, after measuring its last point again.

        Raises
        ------
        ResumeRefused
            Other instruments answer, or the last point reads something else; nothing was changed.
        InstrumentProblem, BenchFault, Stopped
            As for ``carry_out``.
        """
        return self._carried_out(journal)

    def _carried_out(self, journal: Journal | None) -> Outcome:
        bench = with_dialect_texts(self.bench)
        problem, words = None, ""
        try:
            with occupied(bench, self.clock, self.folder / LOG, who=self._who()) as devices:
                identities = devices.identities()
                if journal is None:
                    thru, told = self._usable_thru(devices, bench, identities)
                    journal = self.begin_journal(self.folder, self._head(bench, identities, thru))
                    for text in (*self.notes, *((told,) if told else ())):
                        journal.alarm(text)
                    self._sweep(devices, bench, journal).run()
                else:
                    check_identities(journal, identities)
                    journal.resumed(self.clock.utc().isoformat(timespec="seconds"))
                    if not journal.points:
                        self.clock.catch_up(journal.head["clock_start"])
                    sweep = self._sweep(devices, bench, journal)
                    check_again(sweep, journal)
                    sweep.run()
        except (InstrumentProblem, BenchProblem) as failure:
            if journal is None or not journal.points or isinstance(failure, ResumeRefused):
                _close(journal)
                raise
            problem, words = failure, plainly(failure, devices)
        except OSError as failure:
            _close(journal)
            raise _no_room(self.folder, failure) from failure
        with closing(journal):
            try:
                return finish(journal, self.folder, problem, words)
            except OSError as failure:
                raise _no_room(self.folder, failure) from failure

    def _who(self) -> str:
        """Return who has the instruments, for whoever comes second; a rehearsal's are its own."""
        return "" if self.rehearsal is not None else f"the sweep of serial number {self.serial}"

    def _usable_thru(self, devices: Devices, bench: Bench, identities: Mapping[str, str]) -> tuple[Thru | None, str]:
        """Return the stored thru if every condition of it holds, and what to tell (ThruRefused)."""
        if self.thru is None:
            return None, ""
        asked = Planner(self.board, bench).asked()
        devices.generator.be_safe()
        devices.scope.reset()
        real = asked_of_scope(devices, bench, self.board.stages, asked)
        now = Now(identities, self.ambient, self.clock.utc(), real)
        usable, told = thru_for(
            self.thru, Path(self.thru_path), board=self.board, bench=bench, bench_path=self.bench_path, now=now
        )
        return self.thru if usable else None, told

    def _sweep(self, devices: Devices, bench: Bench, journal: Journal) -> Sweep:
        thru = journal.head["thru"]
        known = paths(thru_from(thru).points) if thru else {}
        sweep = Sweep(
            self.board,
            bench,
            devices,
            self.clock,
            self.operator,
            journal,
            stop=self.stop,
            progress=self.progress,
            keep_raw=self.keep_raw,
            start=journal.head["clock_start"],
            planner=Planner(self.board, bench, known, longer=journal.head["longer"]),
        )
        sweep.prepare()
        return sweep

    def _head(self, bench: Bench, identities: Mapping[str, str], thru: Thru | None) -> dict[str, Any]:
        return {
            "run_id": self.run_id,
            "serial": self.serial,
            "attempt": self.attempt,
            "version": version("bandproof"),
            "started": self.clock.utc().isoformat(timespec="seconds"),
            "clock_start": self.clock.now(),
            "operator": self.operator_name or "not stated",
            "note": self.note,
            "ambient": self.ambient,
            "thru": None if thru is None else thru_plain(thru),
            "checks": None if self.checks is None else checks_plain(self.checks),
            "identities": dict(identities),
            "board": self.board.text,
            "bench": bench.text,
            "bench_path": self.bench_path,
            "dialects": dict(bench.dialect_texts),
            "keep_raw": self.keep_raw,
            "earlier": [entry.plain() for entry in self.earlier],
            "retest": self.retest,
            "longer": self.longer,
            "rehearsal": dict(self.rehearsal) if self.rehearsal is not None else None,
        }


def _close(journal: Journal | None) -> None:
    if journal is not None:
        journal.close()


def _no_room(folder: Path, failure: OSError) -> BenchFault:
    return BenchFault(
        f"{folder} cannot be written ({failure.strerror or failure}). The generator is off; every finished record is "
        f"in the journal there. Mend it, then: bandproof resume {folder}"
    )


def new_attempt(folder: Path, serial: str) -> tuple[Path, int]:
    """Make and return the folder of the next attempt on a serial number; an existing one is never used again.

    Raises
    ------
    BadInput
        The serial number has other characters than letters, digits and ``. _ -``.
    OSError
        The folder cannot be made.
    """
    place = place_of(folder, serial)
    place.mkdir(parents=True, exist_ok=True)
    last = max(numbers(place), default=0)
    for attempt in range(last + 1, last + 1000):
        try:
            (place / str(attempt)).mkdir()
        except FileExistsError:
            continue
        return place / str(attempt), attempt
    raise BadInput(f"{place} has no room for another attempt")
