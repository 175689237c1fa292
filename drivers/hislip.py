"""A HiSLIP client with an end to every wait, lent to PyVISA-py in place of its own.

PyVISA-py's client loses bytes when a time-out falls inside a payload, waits a full time-out for each byte that drips,
allocates what a header announces, spins for ever when the connection ends inside a message it drops, and prints. This
one has the same few names and none of that. Source: IVI-6.1; synchronized mode.
"""

from __future__ import annotations

import select
import socket
import struct
from collections.abc import Iterator
from contextlib import contextmanager

from bandproof.drivers.clock import RealClock

__all__ = ["HislipClient", "lent"]

PORT = 4880
_HEADER = struct.Struct("!2sBBIQ")  # prologue, type, control code, parameter, payload length
_INITIALIZE, _INITIALIZED, _FATAL_ERROR, _ERROR, _DATA, _DATA_END = 0, 1, 2, 3, 6, 7
_INTERRUPTED, _SIZE, _SIZE_TOLD, _ASYNC_INITIALIZE, _ASYNC_INITIALIZED = 13, 15, 16, 17, 18
_FIRST_ID, _ANY_ID = 0xFFFFFF00, 0xFFFFFFFF
_VERSION_AND_VENDOR = 0x0100 << 16 | int.from_bytes(b"xx", "big")  # 1.0; a vendor id nobody owns
_WANTED_SIZE = 1 << 20  # bytes of one message, the default of VISA
_LEAST_SIZE = 256  # bytes: a server that takes less is none (arbitrary)
_WORDS = 200  # bytes of an error's text that are read
_PIECE = 65536  # bytes thrown away at a time


class HislipClient:
    """One client, two connections; every call ends within its limit in s.

    `close`, `send`, `receive`, `timeout` and `_rmt` are what PyVISA-py's session uses.

    Parameters
    ----------
    host, port, sub_address
        Where the instrument is.
    limit : float
        s that opening may take.

    Raises
    ------
    OSError
        It could not be opened, the connection was lost, or nothing came in time (TimeoutError).
    RuntimeError
        The server does not speak HiSLIP, or complains.
    """

    def __init__(self, host: str, port: int, sub_address: str, limit: float) -> None:
        self.timeout = limit
        self._rmt, self._next_id, self._last_id = 0, _FIRST_ID, _FIRST_ID
        self._head = b""  # of a message of which the header has not come whole
        self._remaining, self._ends = 0, False  # of the payload being read; whether the reply ends with it
        self._is_over, self._newline = False, True  # whether the reply has ended; whether it did so with a newline
        self._clock = RealClock()
        self._sync, self._async = socket.socket(), socket.socket()
        try:
            self._open((host, port), sub_address.encode("ascii"), self._clock.now() + limit)
        except BaseException:
            self.close()
            raise

    def close(self) -> None:
        """Close both connections."""
        self._sync.close()
        self._async.close()

    def send(self, data: bytes) -> int:
        """Send one message, in parts where the server takes no longer ones."""
        starts = range(0, len(data), self._piece)
        self._sync.settimeout(max(self.timeout, 0.001))
        for start in starts:
            kind = _DATA_END if start == starts[-1] else _DATA
            part = bytes(data[start : start + self._piece])
            self._sync.sendall(_packed(kind, self._rmt, self._next_id, part))
            self._last_id, self._next_id = self._next_id, (self._next_id + 2) & 0xFFFFFFFF
            self._rmt = 0
        self._is_over = False
        return len(data)

    def receive(self, max_len: int = 4096) -> bytes:
        """Return 1 to `max_len` bytes of a reply as soon as some are there."""
        return self.read(max_len, self.timeout, line=False)

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return 1 to `count` bytes of a reply as soon as some are there, within `limit` s.

        Where a `line` is expected, the reply's end counts as a newline if the instrument sends none.
        """
        deadline = self._clock.now() + limit
        while self._remaining == 0:
            if line and self._is_over and not self._newline:
                self._newline = True
                return b"\n"
            self._begin_message(deadline)
        data = self._some(self._sync, min(count, self._remaining), deadline)
        self._remaining -= len(data)
        self._newline = data.endswith(b"\n")
        self._note_end()
        return data

    def has_stray(self) -> bool:
        """Whether something is there, or on its way, that nobody asked for."""
        return self._remaining > 0 or bool(select.select([self._sync], [], [], 0)[0])

    def _open(self, place: tuple[str, int], sub_address: bytes, deadline: float) -> None:
        for connection in (self._sync, self._async):
            connection.settimeout(self._left(deadline))
            connection.connect(place)
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            if connection is self._sync:
                request = _packed(_INITIALIZE, 0, _VERSION_AND_VENDOR, sub_address)
                session, _ = self._ask(connection, request, _INITIALIZED, deadline)
        self._ask(self._async, _packed(_ASYNC_INITIALIZE, 0, session & 0xFFFF), _ASYNC_INITIALIZED, deadline)
        request = _packed(_SIZE, payload=struct.pack("!Q", _WANTED_SIZE))
        _, told = self._ask(self._async, request, _SIZE_TOLD, deadline)
        if len(told) != 8 or struct.unpack("!Q", told)[0] < _LEAST_SIZE:
            raise RuntimeError(f"the server takes messages of {told.hex()} bytes")
        self._piece = min(struct.unpack("!Q", told)[0], _WANTED_SIZE) - _HEADER.size

    def _ask(self, connection: socket.socket, request: bytes, expected: int, deadline: float) -> tuple[int, bytes]:
        """Return parameter and payload of the answer to one request of the opening."""
        connection.sendall(request)
        kind, parameter, length = self._header(connection, deadline)
        payload = self._whole(connection, min(length, _WORDS), deadline)
        if kind != expected:
            raise RuntimeError(_complaint(kind, payload))
        return parameter, payload

    def _begin_message(self, deadline: float) -> None:
        """Read headers up to one of the reply to our last message; what answers an earlier one is thrown away."""
        kind, parameter, length = self._header(self._sync, deadline)
        if kind in (_DATA, _DATA_END) and parameter in (self._last_id, _ANY_ID):
            if self._is_over:
                raise RuntimeError("the server sent more than one reply")
            self._remaining, self._ends = length, kind == _DATA_END
            self._note_end()
        elif kind in (_DATA, _DATA_END, _INTERRUPTED):
            while length > 0:
                length -= len(self._some(self._sync, min(length, _PIECE), deadline))
        else:
            raise RuntimeError(_complaint(kind, self._whole(self._sync, min(length, _WORDS), deadline)))

    def _note_end(self) -> None:
        if self._remaining == 0 and self._ends:
            self._is_over, self._ends, self._rmt = True, False, 1

    def _header(self, connection: socket.socket, deadline: float) -> tuple[int, int, int]:
        while len(self._head) < _HEADER.size:
            self._head += self._some(connection, _HEADER.size - len(self._head), deadline)
        prologue, kind, _, parameter, length = _HEADER.unpack(self._head)
        if prologue != b"HS":
            raise RuntimeError(f"the server does not speak HiSLIP: {self._head!r}")
        self._head = b""
        return kind, parameter, length

    def _whole(self, connection: socket.socket, count: int, deadline: float) -> bytes:
        data = b""
        while len(data) < count:
            data += self._some(connection, count - len(data), deadline)
        return data

    def _some(self, connection: socket.socket, count: int, deadline: float) -> bytes:
        if not select.select([connection], [], [], self._left(deadline))[0]:
            raise TimeoutError("nothing came")
        data = connection.recv(count)
        if not data:
            raise ConnectionResetError("the instrument closed the connection")
        return data

    def _left(self, deadline: float) -> float:
        left = deadline - self._clock.now()
        if left <= 0:
            raise TimeoutError("the time limit has passed")
        return left


@contextmanager
def lent(limit: float) -> Iterator[None]:
    """Have PyVISA-py open HiSLIP with this client, within `limit` s, while inside.

    What the client raises comes out as it is: PyVISA-py would call it all a device that is not present.
    """
    from pyvisa_py.protocols import hislip

    found: list[Exception] = []

    def bounded(
        ip_addr: str, *, port: int = PORT, sub_address: str = "hislip0", **_timeouts: float | None
    ) -> HislipClient:
        try:
            return HislipClient(ip_addr, port, sub_address, limit)
        except Exception as problem:
            found.append(problem)
            raise

    stock = hislip.Instrument
    hislip.Instrument = bounded
    try:
        yield
    except Exception:
        if found:
            raise found[0] from None
        raise
    finally:
        hislip.Instrument = stock


def _packed(kind: int, control: int = 0, parameter: int = 0, payload: bytes = b"") -> bytes:
    return _HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload


def _complaint(kind: int, payload: bytes) -> str:
    if kind in (_FATAL_ERROR, _ERROR):
        return f"the server complains: {payload.decode('latin-1')!r}"
    return f"the server sent a message of type {kind} where none belongs"
