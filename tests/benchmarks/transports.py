"""HiSLIP and serial: time per message against the raw socket, and damaged bytes in both directions.

Bounds: a message over HiSLIP takes at most 3 times as long as over the raw socket; whatever bytes come, the server
lives and serves the next client, and the driver returns a whole block or one of its errors within its time limit.
"""

from __future__ import annotations

import contextlib
import random
import socket
import statistics
import struct
import threading
import time
from collections.abc import Callable, Iterator

from bandproof.analysis.network import Capacitor, Network, Resistor
from bandproof.drivers.clock import RealClock
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.link import Link
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.visa import prepare
from bandproof.simulated_instruments.bench import World, start
from tests.benchmarks._serial_bridge import serial_address
from tests.benchmarks._tally import Tally, traced

CASES = 200  # of each kind
BOUND = 3.0  # times the raw socket's time per message
LIMIT = 0.2  # s, patience of the driver
LONGEST = LIMIT + 2.0  # s, of one damaged reply, opening and a busy machine included
MEMORY = 2_000_000  # bytes, of one damaged reply

Behaviour = Callable[[socket.socket], None]
_HEADER = struct.Struct("!2sBBIQ")
_FIRST = 0xFFFFFF00
_OPENING = {
    0: _HEADER.pack(b"HS", 1, 0, 0x01000001, 0),
    17: _HEADER.pack(b"HS", 18, 0, 0, 0),
    15: _HEADER.pack(b"HS", 16, 0, 0, 8) + struct.pack("!Q", 1 << 20),
}
_WORLD = World(
    network=Network((Resistor("R1", "in", "out", 1e3),), (Capacitor("C1", "out", "0", 1e-7),), ()),
    scope={1: "in", 2: "out"},
)


def packed(kind: int, control: int = 0, parameter: int = 0, payload: bytes = b"") -> bytes:
    """Return a HiSLIP message."""
    return _HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload


def damaged(data: bytes, draw: random.Random) -> bytes:
    """Return the data with up to three flipped bits, lost or foreign bytes."""
    found = bytearray(data)
    for _ in range(draw.randint(0, 3)):
        place = draw.randrange(len(found))
        match draw.randrange(3):
            case 0:
                found[place] ^= 1 << draw.randrange(8)
            case 1:
                del found[place : place + draw.randint(1, 20)]
            case _:
                found[place:place] = draw.randbytes(draw.randint(1, 40))
        found = found or bytearray(b"H")
    return bytes(found)


def spoken(reply: Callable[[], bytes]) -> Callable[..., None]:
    """Return an instrument that answers every line with what `reply` gives."""

    def behave(connection: socket.socket, *_: object) -> None:
        with connection.makefile("rb") as lines:
            for _line in lines:
                connection.sendall(reply())

    return behave


def spoken_in_messages(reply: Callable[[int], bytes]) -> Callable[..., None]:
    """Return a HiSLIP instrument that opens rightly and answers each message with the bytes `reply(id)` gives."""

    def behave(connection: socket.socket, *_: object) -> None:
        with connection.makefile("rb") as file:
            while len(head := file.read(_HEADER.size)) == _HEADER.size:
                _, kind, _, parameter, length = _HEADER.unpack(head)
                file.read(length)
                connection.sendall(_OPENING[kind] if kind in _OPENING else reply(parameter))

    return behave


CONVERSATION = (
    packed(7, 0, _FIRST, b"*IDN?\n"),
    packed(6, 1, _FIRST + 2, b"SENS:SWE:POIN 100"),
    packed(7, 0, _FIRST + 4, b";*OPC?\n"),
    packed(12, 1, _FIRST + 6),
    packed(8),
    packed(7, 0, _FIRST, b"DATA:BLOC #15abcde\n"),
)
ASIDE = (packed(15, payload=struct.pack("!Q", 4096)), packed(21), packed(4, 1, 5), packed(24), packed(19), packed(10))


def assault(port: int, draw: random.Random) -> None:
    """Open a HiSLIP session, or fail to, send damaged messages on both channels, read nothing, hang up."""
    place = ("127.0.0.1", port)
    with socket.create_connection(place, 5.0) as sync, socket.create_connection(place, 5.0) as other:
        first = packed(0, 0, 0x01007878, b"hislip0")
        sync.sendall(first if draw.random() < 0.8 else damaged(first, draw))
        with contextlib.suppress(OSError, struct.error):
            sync.settimeout(0.2)
            other.settimeout(0.2)
            session = _HEADER.unpack(sync.recv(_HEADER.size, socket.MSG_WAITALL))[3] & 0xFFFF
            other.sendall(packed(17, 0, session))
            other.recv(_HEADER.size, socket.MSG_WAITALL)
            sync.sendall(damaged(_shuffled(CONVERSATION, draw), draw))
            other.sendall(damaged(_shuffled(ASIDE, draw), draw))


def _shuffled(messages: tuple[bytes, ...], draw: random.Random) -> bytes:
    return b"".join(draw.choices(messages, k=draw.randint(1, 12)) if draw.random() < 0.5 else messages)


@contextlib.contextmanager
def _served(behaviour: Callable[..., None]) -> Iterator[int]:
    """Serve each connection by a thread; gives the port."""

    def serve(connection: socket.socket) -> None:
        with connection, contextlib.suppress(OSError):
            behaviour(connection)

    def accept() -> None:
        with contextlib.suppress(OSError):
            while True:
                threading.Thread(target=serve, args=(listener.accept()[0],), daemon=True).start()

    with socket.create_server(("127.0.0.1", 0)) as listener:
        threading.Thread(target=accept, daemon=True).start()
        yield int(listener.getsockname()[1])
        listener.shutdown(socket.SHUT_RDWR)


def _hislip(port: int) -> str:
    return f"TCPIP::127.0.0.1::hislip0,{port}::INSTR"


def _time_per_message(address: str, rounds: int) -> float:
    """Return the median time in s of a query and its answer."""
    link, took = Link(address, RealClock()), []
    session = Session(link)
    for _ in range(rounds):
        began = time.perf_counter()
        session.ask("*OPC?", as_text)
        took.append(time.perf_counter() - began)
    link.close()
    return statistics.median(took)


def measure(rounds: int = 300) -> dict[str, float]:
    """Return s per query to an instrument that answers at once, in the same process, by kind of wire."""
    with (
        _served(spoken(lambda: b"1\n")) as raw,
        _served(spoken_in_messages(lambda number: packed(7, 0, number, b"1\n"))) as hislip,
        serial_address(raw) as serial,
    ):
        addresses = {"raw socket": f"TCPIP::127.0.0.1::{raw}::SOCKET", "HiSLIP": _hislip(hislip), "serial": serial}
        return {name: _time_per_message(address, rounds) for name, address in addresses.items()}


def fuzz_server(cases: int) -> Tally:
    """Send damaged streams to a simulated instrument; after each the next client must be answered."""
    tally = Tally("damaged HiSLIP streams against the simulated instrument", longest=LONGEST)
    with start(_WORLD) as bench:
        port = bench.hislip_ports["scope"]

        def case(seed: int) -> Callable[[], str]:
            def run() -> str:
                assault(port, random.Random(seed))
                link = Link(_hislip(port), RealClock())
                answer = Session(link).ask("*OPC?", as_text)
                link.close()
                return f"the next client was answered {answer}"

            return run

        for seed in range(cases):
            tally.case(f"seed {seed}", case(seed), ())
    return tally


def fuzz_driver(title: str, cases: int, address: str, damage: random.Random) -> Tally:
    """Ask an instrument with damaged replies for a block, again and again, reopening after each error."""
    tally = Tally(f"damaged replies to the driver, {title}", longest=LONGEST)
    session = Session(Link(address, RealClock(margin=LIMIT, factor=0.0)))

    def run() -> str:
        if session.link.is_dirty:
            session.link.reopen()
        return f"a block of {len(session.ask_block('READ?', 5))} bytes"

    for seed in range(cases):
        damage.seed(seed)
        tally.case(f"seed {seed}", run, (InstrumentProblem,))
    session.link.close()
    return tally


def main(cases: int = CASES, rounds: int = 300) -> bool:
    """Print the figures and their bounds; return whether they hold."""
    times = measure(rounds)
    for name, took in times.items():
        print(f"{name}: {took * 1e6:.0f} µs per query, {took / times['raw socket']:.2f} times the raw socket's")
    ratio = times["HiSLIP"] / times["raw socket"]
    print(f"HiSLIP against raw socket: ratio {ratio:.2f} (bound {BOUND:g})")
    good = [ratio <= BOUND]
    prepare("@py")  # what is imported is no memory of a case
    with traced():
        good.append(fuzz_server(cases).is_good(MEMORY))
        draw = random.Random(0)
        block = b"#15abcde\n"
        with _served(spoken_in_messages(lambda number: damaged(packed(7, 0, number, block), draw))) as port:
            good.append(fuzz_driver("HiSLIP", cases, _hislip(port), draw).is_good(MEMORY))
        with _served(spoken(lambda: damaged(block, draw))) as port, serial_address(port) as address:
            good.append(fuzz_driver("serial", cases, address, draw).is_good(MEMORY))
    return all(good)


if __name__ == "__main__":
    raise SystemExit(0 if main() else 1)
