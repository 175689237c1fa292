"""The measurement of the path itself: both probes on one node, on every pair of ranges that is asked for."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path as FilePath

from bandproof.bench.errors import BenchFault
from bandproof.bench.instruments import occupied, with_dialect_texts
from bandproof.bench.job import Progress
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Operator
from bandproof.bench.path_plan import PathPlanner, bare_board, path_of, usual_asked
from bandproof.bench.plan import Planner
from bandproof.bench.quantities import engineering
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.thru import Path, Ranges, paths
from bandproof.bench.thru_use import asked_of_scope, conditions_of
from bandproof.bench.types import Bench, Board, Thru
from bandproof.drivers.clock import Clock

__all__ = ["MeasuredThru", "ThruJob"]


@dataclass(frozen=True, slots=True)
class MeasuredThru:
    """A thru as measured, the path on each pair of ranges, and what a reader must know of it."""

    thru: Thru
    paths: Mapping[Ranges, Path]
    alarms: tuple[str, ...]


@dataclass(frozen=True)
class ThruJob:
    """What measuring the path needs; without a ``board`` its ranges are those of stages of usual gains.

    ``log`` is where the exchange log goes.
    """

    bench: Bench
    board: Board | None
    clock: Clock
    operator: Operator
    stop: Stop
    progress: Progress
    log: FilePath | None
    operator_name: str = ""
    ambient: float | None = None

    def carry_out(self) -> MeasuredThru:
        """Measure the path in the order that is safe: generator off, wiring, a record without signal, one at low level.

        Raises
        ------
        BadInput
            The bench file does not say how the probe gets there, or the board cannot be planned.
        BenchFault, InstrumentProblem, Stopped
            It could not be measured; the generator is off where it could be reached.
        """
        bench = with_dialect_texts(self.bench)
        board = self.board or bare_board(bench)
        path = path_of(board, bench)
        asked = Planner(board, bench).asked() if self.board else usual_asked(bench)
        stages = board.stages if self.board else [path] * len(asked)
        journal = Journal()
        with occupied(bench, self.clock, self.log, who="bandproof thru") as devices:
            identities = devices.identities()
            sweep = Sweep(
                board, bench, devices, self.clock, self.operator, journal, stop=self.stop, progress=self.progress
            )
            started = self.clock.utc().isoformat(timespec="seconds")
            sweep.prepare()
            pairs = asked_of_scope(devices, bench, stages, asked, most=self.board is None)
            if not pairs:
                raise BenchFault(f"the scope has no range for the bench's ceiling, {engineering(bench.ceiling, 'V')}")
            sweep.planner = PathPlanner(path, bench, tuple(pairs.values()))
            sweep.run()
        conditions = conditions_of(bench, path, identities, self.ambient, self.operator_name)
        points = tuple(point for point in journal.points if point.purpose == "thru")
        found = paths(points)
        if missing := [ranges for ranges in pairs if ranges not in found]:
            raise BenchFault(
                f"too few sound records on the ranges {' and '.join(engineering(reach, 'V') for reach in missing[0])}: "
                "they were overloaded. Is there anything but the generator on that node?"
            )
        return MeasuredThru(Thru(started, conditions, points), found, tuple(journal.alarms))
