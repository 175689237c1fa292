"""A serial port without hardware in front of a TCP instrument: a pseudo-terminal, and a thread that carries bytes."""

from __future__ import annotations

import contextlib
import os
import pty
import select
import socket
import termios
import threading
import tty
from collections.abc import Iterator

__all__ = ["serial_address"]

_LOOK = 20  # ms between looks whether the port was opened or the test is over


@contextlib.contextmanager
def serial_address(
    port: int, hung_up: threading.Event | None = None, seen: set[tuple[int, ...]] | None = None
) -> Iterator[str]:
    """Yield the VISA address of a serial port behind which the instrument at a loopback TCP port answers.

    Opening the port connects to the instrument, closing it hangs up, as an instrument that watches the line's DTR does;
    then `hung_up` is set. `seen` gets how the line was set whenever bytes came: the flags and speeds of POSIX's termios
    (iflag, oflag, cflag, lflag, ispeed, ospeed), save that a pseudo-terminal has 8 bits without parity whatever it is
    told (Linux). A port opened again at once is one that was never closed, as on a real line.
    """
    far, near = pty.openpty()
    tty.setraw(near)
    path = os.ttyname(near)
    os.close(near)  # so that the far end sees when nobody has the port open
    stop = threading.Event()
    thread = threading.Thread(
        target=_serve, args=(far, port, stop, hung_up or threading.Event(), set() if seen is None else seen)
    )
    thread.start()
    try:
        yield f"ASRL{path}::INSTR"
    finally:
        stop.set()
        thread.join(10)
        os.close(far)
        assert not thread.is_alive()


def _serve(far: int, port: int, stop: threading.Event, hung_up: threading.Event, seen: set[tuple[int, ...]]) -> None:
    while not stop.is_set():
        if _is_open(far):
            with socket.create_connection(("127.0.0.1", port)) as connection:
                connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                _carry(far, connection, stop, seen)
            hung_up.set()
        else:
            stop.wait(_LOOK / 1000)


def _is_open(far: int) -> bool:
    look = select.poll()
    look.register(far, 0)
    return not look.poll(0)  # hung up: nobody has the near end open


def _carry(far: int, connection: socket.socket, stop: threading.Event, seen: set[tuple[int, ...]]) -> None:
    """Carry bytes both ways until the port is closed; a connection that has ended leaves the port silent."""
    look = select.poll()
    look.register(far, select.POLLIN)
    look.register(connection, select.POLLIN)
    while not stop.is_set():
        ready = dict(look.poll(_LOOK))
        if ready.get(far, 0) & select.POLLHUP:
            return
        if far in ready:
            seen.add(tuple(termios.tcgetattr(far)[:6]))
            with contextlib.suppress(OSError):
                connection.sendall(os.read(far, 65536))
        if connection.fileno() in ready:
            data = _received(connection)
            if not data:
                look.unregister(connection)
            _write(far, data, stop)


def _received(connection: socket.socket) -> bytes:
    try:
        return connection.recv(65536)
    except OSError:
        return b""


def _write(far: int, data: bytes, stop: threading.Event) -> None:
    """Write to the port; what nobody reads is given up when the port is closed or the test is over."""
    look = select.poll()
    look.register(far, select.POLLOUT)
    os.set_blocking(far, False)
    while data and not stop.is_set():
        state = dict(look.poll(_LOOK)).get(far, 0)
        if state & select.POLLHUP:
            return
        if state & select.POLLOUT:
            with contextlib.suppress(BlockingIOError):
                data = data[os.write(far, data) :]
