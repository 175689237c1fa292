"""A network, clients, and servers in this process and in others."""

import asyncio
import socket
import struct
import threading
from contextlib import contextmanager

import numpy as np
import pytest

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor
from bandproof.simulated_instruments.bench import World, start
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.timebase import VirtualTimebase
from bandproof.simulated_instruments.transport import serve

PATIENCE = 5.0  # s: a reply on loopback takes well under 1 ms


class Client:
    """A bare socket with lines."""

    def __init__(self, port):
        self.socket = socket.create_connection(("127.0.0.1", port), PATIENCE)
        self.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self.file = self.socket.makefile("rb")

    def send(self, message):
        self.socket.sendall(message if isinstance(message, bytes) else message.encode("latin-1") + b"\n")

    def ask(self, message):
        self.send(message)
        return self.line()

    def line(self):
        return self.file.readline().decode("latin-1").rstrip("\n")

    def reply_with(self, newlines):
        """Return a reply that has newlines inside, as bytes."""
        return b"".join(self.file.readline() for _ in range(newlines + 1))

    def block(self, message):
        self.send(message)
        count = int(self.file.read(2)[1:])
        data = self.file.read(int(self.file.read(count)))
        assert self.file.read(1) == b"\n"
        return data

    def close(self):
        self.file.close()
        self.socket.close()


@pytest.fixture
def connect():
    """Make clients, and close them in the end."""
    clients = []

    def make(port):
        clients.append(Client(port))
        return clients[-1]

    yield make
    for client in clients:
        client.close()


@pytest.fixture
def band():
    """A multiple-feedback band-pass around 500 Hz, with input "in" and output "out"."""
    return Network(
        (Resistor("R1", "in", "a", 10e3), Resistor("R2", "a", "0", 1e3), Resistor("R3", "m", "out", 100e3)),
        (Capacitor("C1", "a", "out", 33e-9), Capacitor("C2", "a", "m", 33e-9)),
        (OpAmp("U1", "0", "m", "out", gbw=4e6, swing=12.0),),
    )


@pytest.fixture
def world(band, tmp_path):
    """An ideal bench in virtual time around the band."""

    def make(**changes):
        given = {"network": band, "scope": {1: "in", 2: "switch"}, "routes": {"101": "out", "102": "a"}}
        return World(**(given | {"clock": str(tmp_path / "time")} | changes))

    return make


@pytest.fixture
def bench(world):
    """Start benches, and stop them in the end."""
    started = []

    def make(**changes):
        started.append(start(world(**changes)))
        return started[-1]

    yield make
    for one in started:
        one.stop()


@contextmanager
def serving(device, timebase, faults=()):
    """Serve one device from a thread; gives the port."""
    ready, box = threading.Event(), {}

    async def main():
        box["loop"], box["stop"] = asyncio.get_running_loop(), asyncio.Event()
        server = await serve("scope", device, timebase, FaultPlan(faults, timebase))
        box["port"] = server.port
        ready.set()
        await box["stop"].wait()
        await server.close()

    thread = threading.Thread(target=asyncio.run, args=(main(),))
    thread.start()
    assert ready.wait(PATIENCE)
    try:
        yield box["port"]
    finally:
        box["loop"].call_soon_threadsafe(box["stop"].set)
        thread.join(PATIENCE)
        assert not thread.is_alive()


@pytest.fixture
def served(tmp_path):
    """Serve a device in this process, in virtual time."""
    return lambda device, faults=(): serving(device, VirtualTimebase(tmp_path / "served-time"), faults)


@pytest.fixture
def clock(tmp_path):
    """The controller's side of the time file."""
    return ControllerClock(tmp_path / "time")


class ControllerClock:
    """Reads and writes the agreed format by hand, not by the module under test."""

    def __init__(self, path):
        self.path = path

    def now(self):
        return struct.unpack("<d", self.path.read_bytes()[:8])[0]

    def wait(self, seconds):
        self._write(0, struct.pack("<d", self.now() + seconds))

    def mark(self, step, attempt):
        self._write(8, struct.pack("<QQ", step, attempt))

    def _write(self, offset, data):
        with self.path.open("r+b") as file:
            file.seek(offset)
            file.write(data)


def acquire(scope):
    """Return both channels of a new record as volts."""
    scope.send("INIT")
    assert scope.ask("*OPC?") == "1"
    return [np.frombuffer(scope.block(f"TRAC? CH{channel}"), ">f4") for channel in (1, 2)]


@pytest.fixture
def record():
    return acquire
