"""The whole job on one board: open, sweep, fit, compare, keep; begun or resumed, on a real bench or in a rehearsal."""

import re
from collections.abc import Callable, Mapping
from contextlib import AbstractContextManager, closing, nullcontext
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any, Protocol

from bandproof.bench.errors import BadInput, BenchFault, BenchProblem
from bandproof.bench.finish import Outcome, finish
from bandproof.bench.instruments import Devices, opened, with_dialect_texts
from bandproof.bench.journal import Journal
from bandproof.bench.locks import locked
from bandproof.bench.operator import Operator
from bandproof.bench.recovery import plainly
from bandproof.bench.resumption import ResumeRefused, check_again, check_identities
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.system import detached
from bandproof.bench.types import Bench, Board
from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.lifeline import Lifeline

__all__ = ["Job", "Progress", "new_attempt"]

LOG = "exchange.log"
_SERIAL = re.compile(r"[A-Za-z0-9._-]{1,64}")


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
    again. ``begin_journal`` makes the journal of a new run in its folder.
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
    keep_raw: bool = False
    rehearsal: Mapping[str, Any] | None = None
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
            with (
                self._lock(),
                self._lifeline(bench) as lifeline,
                opened(bench, self.clock, self.folder / LOG, lifeline) as devices,
            ):
                identities = devices.identities()
                if journal is None:
                    journal = self.begin_journal(self.folder, self._head(bench, identities))
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

    def _lock(self) -> AbstractContextManager[None]:
        """Return the lock of this bench; a rehearsal's instruments are its own."""
        if self.rehearsal is not None:
            return nullcontext()
        addresses = [instrument.address for instrument in self.bench.instruments.values()]
        return locked(addresses, who=f"the sweep of serial number {self.serial}")

    def _lifeline(self, bench: Bench) -> Lifeline:
        """Return the process that switches the generator off should this one be killed."""
        generator = bench.instruments["generator"]
        return Lifeline.start(
            generator.address,
            dialect_text=bench.dialect_texts["generator"],
            visa_library=bench.visa_library,
            clock_path=bench.clock,
            popen_options=detached(),
            serial=generator.serial,
        )

    def _sweep(self, devices: Devices, bench: Bench, journal: Journal) -> Sweep:
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
        )
        sweep.prepare()
        return sweep

    def _head(self, bench: Bench, identities: Mapping[str, str]) -> dict[str, Any]:
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
            "thru": None,
            "identities": dict(identities),
            "board": self.board.text,
            "bench": bench.text,
            "bench_path": self.bench_path,
            "dialects": dict(bench.dialect_texts),
            "keep_raw": self.keep_raw,
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
