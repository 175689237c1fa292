"""A 2 MB block through the link, against a bare socket reading the same bytes: at most 10 times as long."""

from __future__ import annotations

import platform
import socket
import threading
import time

from bandproof.drivers.clock import RealClock
from bandproof.drivers.link import Link
from bandproof.drivers.scpi import definite_block
from bandproof.drivers.session import Session

BOUND = 10.0  # times a bare socket's time
SIZE = 2_000_000  # bytes


def _serve(listener: socket.socket, reply: bytes) -> None:
    """Answer every line of one connection after another with `reply`, until a connection says nothing."""
    while True:
        connection, _ = listener.accept()
        with connection, connection.makefile("rb") as lines:
            asked = False
            for _ in lines:
                asked = True
                connection.sendall(reply)
            if not asked:
                return


def _bare(port: int, size: int, rounds: int) -> float:
    """Return the best time in s of a bare socket."""
    best, buffer = float("inf"), bytearray(size)
    with socket.create_connection(("127.0.0.1", port)) as connection:
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        for _ in range(rounds):
            start, have, view = time.perf_counter(), 0, memoryview(buffer)
            connection.sendall(b"READ?\n")
            while have < size:
                have += connection.recv_into(view[have:])
            best = min(best, time.perf_counter() - start)
    return best


def _linked(port: int, size: int, rounds: int) -> float:
    """Return the best time in s of the link."""
    link = Link(f"TCPIP::127.0.0.1::{port}::SOCKET", RealClock())
    session, best = Session(link), float("inf")
    for _ in range(rounds):
        start = time.perf_counter()
        data = session.ask_block("READ?", size)
        best = min(best, time.perf_counter() - start)
        assert len(data) == size
    link.close()
    return best


def measure(size: int = SIZE, rounds: int = 15) -> tuple[float, float]:
    """Return the best times in s of a bare socket and of the link, for the same bytes in the same process."""
    reply = definite_block(bytes(size)) + b"\n"
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
        server = threading.Thread(target=_serve, args=(listener, reply))
        server.start()
        try:
            return _bare(port, len(reply), rounds), _linked(port, size, rounds)
        finally:
            socket.create_connection(("127.0.0.1", port)).close()
            server.join()


def main() -> bool:
    """Print the figure, its bound and the machine; return whether it holds."""
    bare, linked = measure()
    ratio = linked / bare
    print(
        f"link_speed: {SIZE / 1e6:g} MB block, link {linked * 1e3:.2f} ms, bare socket {bare * 1e3:.2f} ms, "
        f"ratio {ratio:.2f} (bound {BOUND:g}); {platform.machine()}, Python {platform.python_version()}"
    )
    return ratio <= BOUND


if __name__ == "__main__":
    raise SystemExit(0 if main() else 1)
