"""Damaged replies of instruments, over TCP: an error of the drivers or a right result, the link in step or dirty."""

from __future__ import annotations

import contextlib
import random
import socket
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import partial

from bandproof.drivers.clock import RealClock
from bandproof.drivers.dialect import Dialect, load
from bandproof.drivers.errors import InstrumentProblem, LinkBroken, LinkClosed, ReplyError
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch
from bandproof.drivers.visa import prepare
from tests.benchmarks._instrument import Registers
from tests.benchmarks._mutations import mutated
from tests.benchmarks._tally import Tally

__all__ = ["Damage", "damaged_replies", "listening"]

LIMIT = 0.2  # s, the patience
LONGEST = 10.0  # s for one case: a time-out, reopening, all of it again; arbitrary, a hang and no slow computer
POINTS, INTERVAL = 512, 1e-5
FLOOD = b"7" * 200_000  # a reply beyond every cap of a line
ERROR_ENTRIES = (b'-113,"Undefined header"', b"-222", b'-240,"a ""quoted"" word"', b'32767,"' + b"x" * 300 + b'"')


@dataclass
class Damage:
    """Which reply of a connection's next ones is damaged (0 the first), and how."""

    draw: random.Random
    countdown: int = -1
    held: bytes = b""
    struck: str = ""

    def reply(self, query: str, reply: bytes) -> bytes:
        """Return what is sent for a reply; what is held back comes with the next one."""
        held, self.held = self.held, b""
        self.countdown -= 1
        if self.countdown != -1:
            return held + reply
        kind = self.draw.choice(
            ("bytes", "bytes", "bytes", "late", "missing", "extra", "nothing", "flood", "entry", "other", "closed")
        )
        self.struck = f"{kind} at {query}"
        match kind:
            case "bytes":
                return mutated(reply, self.draw)
            case "late":
                self.held = reply
                return b""
            case "missing":
                return reply[: self.draw.randrange(len(reply))]
            case "extra":
                return reply + self.draw.choice((b"\n", b"1\n", b"x", b'0,"No error"\n', reply))
            case "nothing":
                return b""
            case "flood":
                return FLOOD
            case "entry":
                return self.draw.choice(ERROR_ENTRIES) + b"\n"
            case "other":
                return self.draw.choice(
                    (b"1\n", b"0\n", b"9.91E37\n", b"-1\n", b"1E9\n", b"#0\n", b"#512345", b"#9999999999")
                )
            case _:
                raise ConnectionResetError


@dataclass
class _Listener:
    """Serves connections one after another, one instrument behind each, all damaged by `damage`."""

    damage: Damage
    answers: Callable[[], Registers] = Registers
    socket: socket.socket = field(default_factory=lambda: socket.create_server(("127.0.0.1", 0)))
    open: list[socket.socket] = field(default_factory=list)
    is_over: bool = False

    def serve(self) -> None:
        registers = self.answers()
        while True:
            connection, _ = self.socket.accept()
            with connection:
                if self.is_over:
                    return
                with contextlib.suppress(OSError):
                    self._answer(connection, registers)

    def _answer(self, connection: socket.socket, registers: Registers) -> None:
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self.damage.held, rest = b"", b""  # what is late on one connection never comes on another
        while received := connection.recv(65536):
            *messages, rest = (rest + received).split(b"\n")
            for message in messages:
                reply = registers(message)
                if reply:
                    connection.sendall(self.damage.reply(message.decode("latin-1"), reply))


@contextmanager
def listening(damage: Damage) -> Iterator[str]:
    """Serve an instrument while inside; yield its address."""
    listener = _Listener(damage)
    thread = threading.Thread(target=listener.serve)
    thread.start()
    port = listener.socket.getsockname()[1]
    try:
        yield f"TCPIP::127.0.0.1::{port}::SOCKET"
    finally:
        listener.is_over = True
        socket.create_connection(("127.0.0.1", port)).close()
        thread.join()
        listener.socket.close()


def damaged_replies(count: int, seed: int) -> Tally:
    """Let so many operations meet a damaged reply; return the account."""
    prepare("@py")  # or the first case waits for PyVISA to be loaded
    tally = Tally("instrument replies", LONGEST)
    for kind, cases in _OPERATIONS.items():
        damage = Damage(random.Random(f"{kind} {seed}"))
        dialect = load(f"scpi99-{kind}")
        with listening(damage) as address:
            for number in range(count * len(cases) // sum(map(len, _OPERATIONS.values()))):
                damage.draw = random.Random(f"{kind} {seed} {number}")
                name, most, work = cases[number % len(cases)]
                instrument = _instrument(address, dialect)
                try:
                    tally.case(f"{name} {number}", partial(_case, instrument, work, most, damage), ())
                finally:
                    instrument.disconnect()
                    damage.countdown, damage.held = -1, b""
    return tally


Tool = Generator | Scope | Switch


def _case(instrument: Tool, work: Callable[[Tool], None], most: int, damage: Damage) -> str:
    """Do some work with one reply damaged; see that link and error agree, and that it succeeds after reopening."""
    link = instrument.session.link
    if isinstance(instrument, Scope):
        _prepared(instrument)
    damage.countdown, damage.struck = damage.draw.randrange(most), ""
    problem: InstrumentProblem | None = None
    try:
        work(instrument)
    except InstrumentProblem as told:
        problem = told
    damage.countdown = -1
    assert len(str(problem)) < 2000, "an endless message"
    assert str(problem).isprintable(), f"prints {problem!s:.200}"
    if problem is None:
        outcome = "right result" if damage.struck else "not struck"
    else:
        outcome = type(problem).__name__
        assert link.is_dirty == isinstance(problem, (LinkBroken, ReplyError)), f"{damage.struck}: dirty {link.is_dirty}"
    _see_step(instrument, outcome, damage)
    instrument.reopen()
    if isinstance(instrument, Scope):
        _prepared(instrument)
    work(instrument)
    return outcome


def _see_step(instrument: Tool, outcome: str, damage: Damage) -> None:
    """See that a dirty link refuses, and that one in step answers the next query with its own reply, or tells."""
    was_dirty, words = instrument.session.link.is_dirty, ""
    with contextlib.suppress(LinkClosed, LinkBroken, ReplyError):
        words = instrument.identify()
    assert words in ("" if was_dirty or instrument.session.link.is_dirty else "Nobody,Nothing,0,0",), (
        f"{damage.struck}, {outcome}: {words!r} for the identity"
    )


def _instrument(address: str, dialect: Dialect) -> Tool:
    session = Session(Link(address, RealClock(margin=LIMIT, factor=0.0)), dialect.habits)
    if dialect.kind == "generator":
        return Generator(session, dialect, ceiling=2.0)  # type: ignore[arg-type]
    return Scope(session, dialect) if dialect.kind == "scope" else Switch(session, dialect)  # type: ignore[arg-type]


def _prepared(scope: Scope) -> None:
    scope.set_channel(1, range=1.0)
    scope.set_channel(2, range=1.0)
    scope.set_record(POINTS * INTERVAL, POINTS)
    scope.acquire()


def _drive(generator: Generator) -> None:
    assert abs(generator.set_frequency(1234.5) / 1234.5 - 1) < 2e-6
    assert abs(generator.set_amplitude(0.5) / 0.5 - 1) < 0.011
    generator.output(True)


def _quiet(generator: Generator) -> None:
    generator.be_safe()


def _start(generator: Generator) -> None:
    generator.reset()
    generator.set_sine()
    assert abs(generator.set_offset(0.25) / 0.25 - 1) < 0.011


def _ranges(scope: Scope) -> None:
    setting = scope.set_channel(1, range=2.0, offset=0.1)
    scope.set_channel(1, range=1.0)
    assert 1.99 < setting.range < 5.3
    assert abs(setting.offset - 0.1) < 0.011


def _length(scope: Scope) -> None:
    setting = scope.set_record(2 * POINTS * INTERVAL, 2 * POINTS)
    assert POINTS <= setting.points <= 4 * POINTS
    assert POINTS * INTERVAL <= setting.duration <= 4 * POINTS * INTERVAL
    assert setting.sample_interval > 0
    scope.set_record(POINTS * INTERVAL, POINTS)


def _record(scope: Scope) -> None:
    import numpy as np

    record = scope.acquire()
    assert record.volts.shape == (2, POINTS)
    assert record.sample_interval == INTERVAL
    strange = ~np.isfinite(record.volts).all(axis=1) | (np.abs(record.volts) > 1.0).any(axis=1)
    assert record.overload[strange].all(), "a number no converter gives is no overload"


def _look(instrument: Tool) -> None:
    assert instrument.is_understood() is None or instrument.session.link


def _route(switch: Switch) -> None:
    switch.close("101")
    switch.close("102")


def _open(switch: Switch) -> None:
    switch.open_all()
    switch.be_safe()


# Per instrument: name, how many replies the work takes at most, the work.
_OPERATIONS: dict[str, list[tuple[str, int, Callable[..., None]]]] = {
    "generator": [("drive", 9, _drive), ("quiet", 2, _quiet), ("start", 9, _start)],
    "digitizer": [("ranges", 12, _ranges), ("length", 9, _length), ("record", 4, _record), ("block", 4, _record)],
    "switch": [("route", 6, _route), ("open", 4, _open)],
}
