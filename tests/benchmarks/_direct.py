"""A simulated bench in this process: the same messages as over TCP, handed over directly. For studies of thousands."""

import hashlib
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

import numpy as np

from bandproof.analysis import sine
from bandproof.analysis.types import FloatArray
from bandproof.bench.instruments import Devices, load_dialects
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.plan import Planner
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Bench, Board, Point
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import Dialect
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch
from bandproof.simulated_instruments.bench import World, instruments
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.framing import Framer
from bandproof.simulated_instruments.timebase import Timebase, open_timebase

__all__ = ["Measured", "measured", "with_designs_kept"]


@contextmanager
def with_designs_kept() -> Iterator[None]:
    """Keep the sine fits' designs from bench to bench: the same frequencies come again, the answers stay the same."""
    rows, orthogonalized = sine._rows, sine._orthogonalized
    designs: dict[bytes, sine._Design] = {}

    def kept(matrix: FloatArray, *, drift: bool) -> sine._Design:
        key = hashlib.blake2b(matrix[:, 1:40].tobytes() + matrix[:, -3:].tobytes(), digest_size=16).digest()
        if key not in designs:
            designs[key] = orthogonalized(matrix, drift=drift)
        return designs[key]

    @cache
    def kept_rows(samples: int, interval: float, frequency: tuple[float, ...], drift: bool) -> FloatArray:
        return rows(samples, interval, np.array(frequency), drift=drift)

    sine._rows = lambda samples, interval, frequency, *, drift: kept_rows(  # type: ignore[assignment]
        samples, interval, tuple(frequency.tolist()), drift
    )
    sine._orthogonalized = kept
    try:
        yield
    finally:
        sine._rows, sine._orthogonalized = rows, orthogonalized


@dataclass
class _Port:
    """A link's port that is the instrument itself."""

    device: Device
    timebase: Timebase
    plan: FaultPlan
    framer: Framer = field(default_factory=Framer)
    replies: bytearray = field(default_factory=bytearray)

    def write(self, data: bytes | memoryview, limit: float) -> int:
        """Hand bytes to the instrument, which works on what they complete."""
        for message in self.framer.feed(bytes(data)):
            assert isinstance(message, bytes)
            self.plan.look(self.timebase.now())
            answer = self.device.message(message, self.timebase.now())
            if answer.reply is not None:
                assert self.timebase.reach(answer.ready_at) == 0.0
                self.replies += answer.reply
        return len(data)

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return what the instrument has said."""
        if not self.replies:
            raise TimeoutError("nothing came")
        data = bytes(self.replies[:count])
        del self.replies[:count]
        return data

    def has_stray(self) -> bool:
        """Whether there are bytes nobody asked for."""
        return bool(self.replies)

    def close(self) -> None:
        """Nothing to close."""


@dataclass(frozen=True)
class Measured:
    """What a sweep left."""

    points: tuple[Point, ...]
    alarms: tuple[str, ...]
    stopped: str


def measured(board: Board, bench: Bench, world: World, *, planner: Planner | None = None) -> Measured:
    """Sweep a board on a world in this process; what ends the sweep early is told in `stopped`."""
    journal, stopped = Journal(), ""
    with _devices(bench, world) as (devices, clock):
        sweep = Sweep(board, bench, devices, clock, Absent(), journal, planner=planner)
        try:
            sweep.prepare()
            sweep.run()
        except Exception as problem:  # whatever ends a sweep is part of what is studied
            stopped = f"{type(problem).__name__}: {problem}"
    return Measured(tuple(journal.points), tuple(journal.alarms), stopped)


@contextmanager
def _devices(bench: Bench, world: World) -> Iterator[tuple[Devices, VirtualClock]]:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "bench.time"
        create_clock_file(str(path), 0.0)
        timebase, clock = open_timebase(path), VirtualClock(str(path))
        plan = FaultPlan(world.faults, timebase)
        served = instruments(world, timebase, plan)
        ports = {role: _Port(device, timebase, plan) for role, device in served.items()}
        dialects = load_dialects(bench)

        def session(role: str) -> Session:
            dialect: Dialect = dialects[role]
            return Session(Link(role, clock, opener=lambda *_: ports[role]), dialect.habits)

        yield (
            Devices(
                Generator(session("generator"), dialects["generator"], ceiling=bench.ceiling),  # type: ignore[arg-type]
                Scope(session("scope"), dialects["scope"]),  # type: ignore[arg-type]
                Switch(session("switch"), dialects["switch"]),  # type: ignore[arg-type]
            ),
            clock,
        )
        clock.close()
