"""Tiny instruments on loopback and in memory, whose every byte the test decides."""

from __future__ import annotations

import contextlib
import socket
import threading
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from bandproof.drivers.clock import RealClock, VirtualClock, create_clock_file
from bandproof.drivers.dialect import parse, source
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch
from bandproof.simulated_instruments.bench import World, start

LIMIT = 0.8  # s, the tests' patience: room for a busy machine to open a connection
Behaviour = Callable[[socket.socket, threading.Event], None]


class LoopbackInstrument:
    """A server that hands each connection to `behaviour(connection, stop)`, one thread each."""

    def __init__(self, behaviour: Behaviour) -> None:
        self._behaviour, self.stop, self._threads = behaviour, threading.Event(), []
        self._connections: list[socket.socket] = []
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.address = f"TCPIP::127.0.0.1::{self._listener.getsockname()[1]}::SOCKET"
        self._start(self._accept)

    def _start(self, work: Callable[..., None], *arguments: object) -> None:
        thread = threading.Thread(target=work, args=arguments)
        self._threads.append(thread)
        thread.start()

    def _accept(self) -> None:
        while True:
            connection, _ = self._listener.accept()
            if self.stop.is_set():
                connection.close()
                return
            self._connections.append(connection)
            self._start(self._serve, connection)

    def _serve(self, connection: socket.socket) -> None:
        try:
            self._behaviour(connection, self.stop)
        except OSError:
            pass  # the controller hung up, which is what many tests are about
        finally:
            connection.close()

    def end(self) -> None:
        self.stop.set()
        for connection in self._connections:
            with contextlib.suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)
        with socket.create_connection(self._listener.getsockname()):
            pass  # wakes the accepting thread
        for thread in self._threads:
            thread.join(10)
            assert not thread.is_alive()
        self._listener.close()


@pytest.fixture
def loopback() -> Iterator[Callable[[Behaviour], str]]:
    """Return a maker of instruments: give it a behaviour, get an address."""
    instruments: list[LoopbackInstrument] = []

    def make(behaviour: Behaviour) -> str:
        instruments.append(LoopbackInstrument(behaviour))
        return instruments[-1].address

    yield make
    for instrument in instruments:
        instrument.end()


@pytest.fixture
def linked() -> Iterator[Callable[..., Link]]:
    """Return a maker of links with the tests' short patience, closed at the end."""
    links: list[Link] = []

    def make(address: str, log: ExchangeLog | None = None, *, limit: float = LIMIT) -> Link:
        links.append(Link(address, RealClock(margin=limit, factor=1.0), log))
        return links[-1]

    yield make
    for link in links:
        link.close()


class MemoryPort:
    """A port whose instrument is a function from one message to its reply, cut into chunks of `sizes` in turn."""

    def __init__(self, answer: Callable[[bytes], bytes], sizes: tuple[int, ...] = (1 << 20,)) -> None:
        self._answer, self._sizes, self._turn = answer, sizes, 0
        self._incoming, self._outgoing = b"", b""
        self.messages: list[bytes] = []

    def write(self, data: bytes | memoryview, limit: float) -> int:
        self._incoming += bytes(data)
        *messages, self._incoming = self._incoming.split(b"\n")
        for message in messages:
            self.messages.append(message)
            self._outgoing += self._answer(message)
        return len(data)

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        if not self._outgoing:
            raise TimeoutError
        size = min(count, self._sizes[self._turn % len(self._sizes)])
        self._turn += 1
        chunk, self._outgoing = self._outgoing[:size], self._outgoing[size:]
        return chunk

    def has_stray(self) -> bool:
        return bool(self._outgoing)

    def close(self) -> None:
        self._incoming = self._outgoing = b""


@pytest.fixture
def memory() -> Callable[..., tuple[Link, MemoryPort]]:
    """Return a maker of links to an in-memory instrument."""

    def make(answer: Callable[[bytes], bytes], sizes: tuple[int, ...] = (1 << 20,)) -> tuple[Link, MemoryPort]:
        port = MemoryPort(answer, sizes)
        return Link("MEMORY", RealClock(), opener=lambda address, library, limit: port), port

    return make


class Registers:
    """An in-memory instrument that keeps what it is set to and gives it back; `fixed` answers come first."""

    def __init__(self, fixed: dict[str, bytes] | None = None) -> None:
        self.fixed = {"*OPC?": b"1", "SYSTem:ERRor?": b'0,"No error"', "*IDN?": b"Nobody,Nothing,0,0"} | (fixed or {})
        self.values: dict[str, str] = {}

    def __call__(self, message: bytes) -> bytes:
        text = message.decode()
        if text in self.fixed:
            reply = self.fixed[text]
            return (reply.pop(0) if isinstance(reply, list) else reply) + b"\n"
        if "?" in text:
            return self.values.get(text.replace("?", "").strip(), "0").encode() + b"\n"
        head, _, value = text.partition(" ")
        self.values[head] = {"ON": "1", "OFF": "0"}.get(value, value)
        return b""


@pytest.fixture
def registers() -> type[Registers]:
    return Registers


@pytest.fixture(scope="session")
def memory_port() -> type[MemoryPort]:
    return MemoryPort


KINDS = {"generator": Generator, "scope": Scope, "switch": Switch, "supply": Supply}
SCPI99 = {
    "generator": "scpi99-generator",
    "scope": "scpi99-digitizer",
    "switch": "scpi99-switch",
    "supply": "scpi99-supply",
}


class Stand:
    """Drivers of every instrument of a simulated bench in virtual time, and what each was told (40 bytes a message)."""

    def __init__(self, world: World, texts: dict[str, str], folder: Path) -> None:
        create_clock_file(folder / "clock")
        self.drivers: dict[str, Any] = {}
        dialects = {role: parse(text, role) for role, text in texts.items()}
        self.clock = VirtualClock(folder / "clock", patience=2.0)
        self._open: list[ExchangeLog] = []
        self._logs = {role: folder / f"{role}.log" for role in KINDS}
        self.bench = start(replace(world, clock=str(folder / "clock")))
        for role, port in self.bench.ports.items():
            dialect = dialects[role]
            self._open.append(log := ExchangeLog(self._logs[role]))
            link = Link(f"TCPIP::127.0.0.1::{port}::SOCKET", self.clock, log)
            self.drivers[role] = KINDS[role](Session(link, dialect.habits), dialect)  # type: ignore[arg-type]

    def __getattr__(self, role: str) -> Any:
        return self.drivers[role]

    def sent(self, role: str) -> list[str]:
        """Return the messages an instrument was sent, in order."""
        lines = [line.split(" ", 4) for line in self._logs[role].read_text().splitlines()]
        return [fields[4].removesuffix("\\n").removesuffix("\\r") for fields in lines if fields[2] == ">"]

    def end(self) -> None:
        for driver in self.drivers.values():
            driver.disconnect()
        for log in self._open:
            log.close()
        self.clock.close()
        self.bench.stop()


@pytest.fixture
def stand(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Callable[..., Stand]]:
    """Return a maker of stands from a world and changes of its dialect texts by role."""
    stands: list[Stand] = []

    def make(world: World, changes: dict[str, Callable[[str], str]] | None = None, **texts: str) -> Stand:
        all_texts = {role: texts.get(role) or source(name) for role, name in SCPI99.items()}
        for role, change in (changes or {}).items():
            all_texts[role] = change(all_texts[role])
        stands.append(Stand(world, all_texts, tmp_path_factory.mktemp("stand")))
        return stands[-1]

    yield make
    for one in stands:
        one.end()
