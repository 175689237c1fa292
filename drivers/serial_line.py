"""A serial port with an end to every wait, on top of the port PyVISA-py has opened.

PyVISA-py reads serial ports byte by byte and begins its time-out anew with each read. A serial line also knows no
connection: what an instrument was still saying when the port was closed arrives after it is opened again.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

from bandproof.drivers.clock import RealClock

__all__ = ["Flow", "Parity", "Serial", "SerialLine"]

Parity = Literal["none", "even", "odd"]
Flow = Literal["none", "xon/xoff", "rts/cts"]

QUIET = 0.05  # s without a byte after which an instrument has nothing more to say; arbitrary, six characters at 1200 Bd


@dataclass(frozen=True, slots=True)
class Serial:
    """How a serial line is set; the defaults are those VISA gives a port (VPP-4.3): 9600 Bd, 8N1."""

    baud: int = 9600
    data_bits: int = 8
    parity: Parity = "none"
    stop_bits: int = 1
    flow: Flow = "none"


class SerialPort(Protocol):
    """What is used of PySerial's port."""

    timeout: float | None

    @property
    def in_waiting(self) -> int:
        """How many bytes have come."""

    def read(self, size: int = 1) -> bytes:
        """Return `size` bytes, or fewer after `timeout` s."""


class SerialLine:
    """One open serial port; what is still on its way from before is thrown away.

    Parameters
    ----------
    port : SerialPort
        PySerial's.
    limit : float
        s that the line may take to fall quiet.

    Raises
    ------
    OSError
        The port is gone.
    TimeoutError
        The instrument does not stop talking.
    """

    def __init__(self, port: SerialPort, limit: float) -> None:
        self._port = port
        clock = RealClock()
        deadline = clock.now() + limit
        while self._some(1 << 16, QUIET):
            if clock.now() > deadline:
                raise TimeoutError("the instrument does not stop talking")

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return 1 to `count` bytes as soon as some are there, within `limit` s."""
        data = self._some(count, limit)
        if not data:
            raise TimeoutError("nothing came")
        return data

    def has_stray(self) -> bool:
        """Whether bytes are waiting that nobody asked for."""
        return self._port.in_waiting > 0

    def _some(self, count: int, limit: float) -> bytes:
        self._port.timeout = limit
        first = self._port.read(1)
        return first + self._port.read(min(count - 1, self._port.in_waiting)) if first else b""
