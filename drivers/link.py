"""Bytes to and from one instrument: deadline, byte cap, and a dirty flag after any failure.

All traffic happens inside a `transaction`. Whatever leaves it by an exception, even Ctrl-C, makes the link dirty: an
answer that comes late would be taken for the next one, so the link refuses everything until it is reopened.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from typing import Protocol, TypeVar

from bandproof.drivers.clock import Clock
from bandproof.drivers.errors import EXCERPT, LinkBroken, LinkClosed, NoAnswer, ReplyError
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.serial_line import Serial

__all__ = ["Link", "Opener", "Port", "Transaction"]

LINE_CAP = 65_536  # bytes of an ordinary reply; the longest in the trade is a few kB (common practice)
CHUNK = 1 << 18  # bytes of one raw read; bounds memory beyond what was asked for

T = TypeVar("T")


class Port(Protocol):
    """What a link stands on: `bandproof.drivers.visa.VisaPort`, or an in-memory one in tests."""

    def write(self, data: bytes | memoryview, limit: float) -> int:
        """Send the beginning of `data` within `limit` seconds; return the number of bytes that went."""

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return 1 to `count` bytes within `limit` seconds, or raise TimeoutError."""

    def has_stray(self) -> bool:
        """Whether bytes are waiting that nobody asked for."""

    def close(self) -> None:
        """Close the port."""


Opener = Callable[[str, str, float], Port]


class Link:
    """The connection to one instrument; opened by `open` or at the first transaction.

    Parameters
    ----------
    address : str
        As PyVISA spells it, handed on untouched.
    clock : Clock
        Gives the time limits.
    log : ExchangeLog or None
        Gets every message.
    visa_library : str
        As PyVISA names it; the default is PyVISA-py.
    serial : Serial or None
        How a serial line is set each time it is opened; None: as the library opens it.
    opener : callable or None
        Makes the port from address, library and limit; None: PyVISA.
    """

    def __init__(
        self,
        address: str,
        clock: Clock,
        log: ExchangeLog | None = None,
        *,
        visa_library: str = "@py",
        serial: Serial | None = None,
        opener: Opener | None = None,
    ) -> None:
        self.address, self.clock, self.is_dirty = address, clock, False
        self._log, self._library = log or ExchangeLog(None), visa_library
        self._opener = opener or partial(_visa_port, serial=serial)
        self._port: Port | None = None
        self._was_closed = False

    @property
    def is_open(self) -> bool:
        """Whether the connection stands."""
        return self._port is not None

    def open(self) -> None:
        """Open the connection if it is not open.

        Raises
        ------
        LinkBroken
            It could not be opened; nothing was sent.
        """
        if self._port is None:
            limit = self.clock.patience(0.0)
            try:
                self._port = self._opener(self.address, self._library, limit)
            except Exception as problem:
                if type(problem) is not Exception and not isinstance(problem, _foreign()):
                    raise  # PyVISA-py raises bare Exceptions here; others are mistakes of ours
                raise LinkBroken(self.address, "open", _reason(problem), limit) from problem
            self.is_dirty = self._was_closed = False

    def close(self) -> None:
        """Close the connection; a connection that cannot even be closed counts as closed."""
        port, self._port, self._was_closed = self._port, None, True
        if port is not None:
            try:
                port.close()
            except Exception as problem:
                if not isinstance(problem, _foreign()):
                    raise

    def reopen(self) -> None:
        """Close and open again: the only way out of the dirty state."""
        self.close()
        self.open()

    @contextmanager
    def transaction(self, command: str, *, expected: float = 0.0) -> Iterator[Transaction]:
        """Send and receive within one time limit; any exception that leaves it makes the link dirty.

        Parameters
        ----------
        command : str
            What is named in errors.
        expected : float
            Seconds the instrument should need; the clock makes the limit from it.

        Raises
        ------
        LinkClosed
            The link is closed or dirty; nothing was sent.
        LinkBroken, NoAnswer, ReplyError
            The link is dirty afterwards.
        """
        port = self._ready_port(command)
        exchange = Transaction(self, port, command, expected)
        try:
            exchange.refuse_stray()
            yield exchange
            exchange.refuse_rest()
        except BaseException:
            self.is_dirty = True
            raise
        finally:
            exchange.log_received()

    def log(self, outgoing: bool, head: bytes, length: int) -> int:
        """Write one message into the exchange log; return its line number."""
        return self._log.add(self.clock.utc(), self.address, ">" if outgoing else "<", head, length)

    def _ready_port(self, command: str) -> Port:
        if self.is_dirty:
            raise LinkClosed(self.address, command, "the transaction before it failed")
        if self._was_closed:
            raise LinkClosed(self.address, command, "the link was closed")
        self.open()
        assert self._port is not None
        return self._port


class Transaction:
    """The messages of one exchange; made by `Link.transaction`."""

    def __init__(self, link: Link, port: Port, command: str, expected: float) -> None:
        self._link, self._port, self.command, self._expected = link, port, command, expected
        self._limit = link.clock.patience(expected)
        self._deadline = time.monotonic() + self._limit
        self._buffer = bytearray()
        self._received, self._head, self.line = 0, b"", 0

    def send(self, message: bytes) -> None:
        """Send one message, its terminator included."""
        self.line = self._link.log(True, message[:EXCERPT], len(message)) or self.line
        rest = memoryview(message)
        while rest:
            rest = rest[self._write(rest) :]

    def read_line(self, *, cap: int = LINE_CAP) -> bytes:
        """Return the reply up to a newline, without it and without a carriage return; at most `cap` bytes."""
        searched = 0
        while (end := self._buffer.find(b"\n", searched)) < 0:
            searched = len(self._buffer)
            if searched > cap:
                raise self.not_understood(f"a reply of at most {cap} bytes ended by a newline", bytes(self._buffer))
            self._buffer += self._read(CHUNK, line=True)
        line = bytes(self._buffer[:end])
        del self._buffer[: end + 1]
        return line.removesuffix(b"\r")

    def read_exactly(self, count: int) -> bytearray:
        """Return the next `count` bytes; never asks for more than that."""
        data = bytearray(count)
        have = min(count, len(self._buffer))
        data[:have] = self._buffer[:have]
        del self._buffer[:have]
        while have < count:
            chunk = self._read(min(CHUNK, count - have), line=False)
            data[have : have + len(chunk)] = chunk
            have += len(chunk)
        return data

    def not_understood(self, expected: str, excerpt: bytes) -> ReplyError:
        """Return the error for a reply that is not as `expected`; the caller raises it inside the transaction."""
        command, address = self.command, self._link.address
        return ReplyError(address, command, expected, self._limit, self._received, excerpt, self.line)

    def refuse_stray(self) -> None:
        """Raise ReplyError if something came that nobody asked for: the link is out of step."""
        if self._edge(self._port.has_stray):
            self._buffer += self._read(EXCERPT, line=False)
            raise self.not_understood("no bytes before the command was sent", bytes(self._buffer))

    def refuse_rest(self) -> None:
        """Raise ReplyError if more came than the reply."""
        if self._buffer:
            raise self.not_understood("nothing after the reply's end", bytes(self._buffer))

    def log_received(self) -> None:
        """Write what came into the exchange log, as one message."""
        if self._received:
            self._link.log(False, self._head, self._received)

    def _write(self, data: memoryview) -> int:
        return self._edge(lambda: self._port.write(data, self._remaining()))

    def _read(self, count: int, *, line: bool) -> bytes:
        chunk = self._edge(lambda: self._port.read(count, self._remaining(), line=line))
        self._received += len(chunk)
        if len(self._head) < EXCERPT:
            self._head += chunk[: EXCERPT - len(self._head)]
        return chunk

    def _remaining(self) -> float:
        remaining = self._deadline - time.monotonic()
        if remaining <= 0:
            raise TimeoutError("the time limit has passed")
        return remaining

    def _edge(self, call: Callable[[], T]) -> T:
        """Make a call of the port and translate what it raises."""
        try:
            return call()
        except Exception as problem:
            if not isinstance(problem, _foreign()):
                raise
            raise self._translate(problem) from problem

    def _translate(self, problem: Exception) -> LinkBroken:
        from bandproof.drivers.visa import is_timeout

        address, received = self._link.address, self._received
        if is_timeout(problem):
            waited = self._link.clock.expired(self._expected)
            return NoAnswer(address, self.command, waited, received, self.line)
        return LinkBroken(address, self.command, _reason(problem), self._limit, received, self.line)


def _foreign() -> tuple[type[BaseException], ...]:
    from bandproof.drivers.visa import translated

    return translated()


def _visa_port(address: str, library: str, limit: float, serial: Serial | None) -> Port:
    from bandproof.drivers.visa import VisaPort

    return VisaPort(address, library, limit, serial)


def _reason(problem: BaseException) -> str:
    return " ".join(f"{type(problem).__name__}: {problem}".split())[:200]
