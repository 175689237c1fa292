"""The edge to PyVISA: raw reads and writes that return in time, and the table that translates foreign errors.

PyVISA-py's own socket reads loop until they have all that was asked for, whatever the time-out, and its writes wait for
ever (measured; see the tests named "dripping" and "does not read"). So where PyVISA-py's socket can be reached, we wait
on it and take from it ourselves; going through PyVISA for bytes that are there costs a sweep a fifth of its CPU seconds
(measured). Other libraries and interfaces keep their own limit.
"""

from __future__ import annotations

import select
import socket
from contextlib import nullcontext
from functools import cache
from typing import TYPE_CHECKING, Any, Protocol, cast

if TYPE_CHECKING:
    from pyvisa import ResourceManager
    from pyvisa.resources import MessageBasedResource

    from bandproof.drivers.serial_line import Serial

__all__ = ["VisaPort", "is_timeout", "listed", "prepare", "translated"]

PEEK = 1 << 18  # bytes taken in one raw read; bounds memory (a 2 MB block takes 8 to 30 reads)
PYVISA_PY = "@py"
PIECE = 4096  # bytes sent at a time: what a socket ready for writing takes at once

_managers: dict[str, ResourceManager] = {}


class Wire(Protocol):
    """What reads in PyVISA's place where its own reads have no end: `HislipClient` or `SerialLine`."""

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return 1 to `count` bytes within `limit` seconds, or raise TimeoutError."""

    def has_stray(self) -> bool:
        """Whether bytes are waiting that nobody asked for."""


class VisaPort:
    """One open PyVISA resource, read and written in short steps.

    Parameters
    ----------
    address : str
        As PyVISA spells it, handed on untouched.
    library : str
        VISA library as PyVISA names it; ``"@py"`` is PyVISA-py.
    limit : float
        Seconds that opening may take.
    serial : Serial or None
        How a serial line is set; None leaves it as the library opens it.

    Raises
    ------
    ConnectionError
        The instrument refused. Any other error of PyVISA or of its library may also come out; see `translated`.
    """

    def __init__(self, address: str, library: str, limit: float, serial: Serial | None = None) -> None:
        from bandproof.drivers.hislip import lent

        manager = _manager(library)
        with lent(limit) if library.endswith(PYVISA_PY) else nullcontext():
            resource = manager.open_resource(address, open_timeout=_milliseconds(limit))
        self._resource = cast("MessageBasedResource", resource)
        self._ends_at_newline: bool | None = None
        self._taken = memoryview(bytearray(PEEK))
        self._socket = _socket_of(self._resource)
        if self._socket is not None:
            self._refuse_failed_connection(self._socket)
        try:
            if serial is not None:
                _set_line(self._resource, serial)
            self._wire = _wire_of(self._resource, limit)
        except BaseException:
            self.close()
            raise

    def write(self, data: bytes | memoryview, limit: float) -> int:
        """Send the beginning of `data` within `limit` seconds; return how many bytes went."""
        if self._socket is None:
            self._resource.timeout = _milliseconds(limit)
            return self._visa_write(bytes(data))
        if not select.select([], [self._socket], [], limit)[1]:
            raise TimeoutError("the instrument does not read")
        self._socket.settimeout(max(limit, 0.001))  # a send that finds less room than its piece would block
        return self._socket.send(data[:PIECE])

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        """Return 1 to `count` bytes as soon as some are there, within `limit` seconds.

        `line` tells libraries whose reads cannot be cut short that the reply ends with a newline.
        """
        if self._socket is not None:
            return self._received(self._socket, min(count, PEEK), limit)
        if self._wire is not None:
            return self._wire.read(count, limit, line=line)
        self._resource.timeout = _milliseconds(limit)
        self._end_at_newline(line)
        return self._visa_read(count)

    def has_stray(self) -> bool:
        """Whether bytes are waiting that nobody asked for; False where that cannot be seen."""
        if self._wire is not None:
            return self._wire.has_stray()
        return self._socket is not None and bool(select.select([self._socket], [], [], 0)[0])

    def close(self) -> None:
        """Close the resource; the shared manager stays open."""
        self._resource.close()

    def _received(self, connection: socket.socket, most: int, limit: float) -> bytes:
        if not select.select([connection], [], [], limit)[0]:
            raise TimeoutError("nothing came")
        count = connection.recv_into(self._taken, most)
        if count == 0:
            raise ConnectionResetError("the instrument closed the connection")
        return bytes(self._taken[:count])

    def _visa_read(self, count: int) -> bytes:
        from pyvisa.constants import StatusCode

        with self._resource.ignore_warning(StatusCode.success_max_count_read, StatusCode.success_device_not_present):
            data, _ = self._resource.visalib.read(self._resource.session, count)
        return bytes(data)

    def _visa_write(self, data: bytes) -> int:
        count, _ = self._resource.visalib.write(self._resource.session, data)
        return int(count)

    def _end_at_newline(self, line: bool) -> None:
        if self._ends_at_newline != line:
            from pyvisa.constants import ResourceAttribute

            self._resource.set_visa_attribute(ResourceAttribute.termchar_enabled, line)
            self._ends_at_newline = line

    def _refuse_failed_connection(self, connection: socket.socket) -> None:
        number = connection.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
        if number:  # PyVISA-py opens a refused port without a word; the first write would fail
            self._resource.close()
            raise ConnectionRefusedError(number, "the instrument refused the connection")


def _manager(library: str) -> ResourceManager:
    """Return the one manager of a library; it is never closed, closing it closes everybody's links."""
    if library not in _managers:
        from pyvisa import ResourceManager

        _managers[library] = ResourceManager(library)
    return _managers[library]


def prepare(library: str) -> None:
    """Load a VISA library and what translates its errors, which takes a while; no connection is opened."""
    _manager(library)
    translated()


def listed(library: str) -> tuple[str, ...]:
    """Return the addresses a VISA library lists by itself."""
    return tuple(_manager(library).list_resources("?*"))


def _socket_of(resource: Any) -> socket.socket | None:
    """Return PyVISA-py's raw socket without its delay, or None where there is none to reach.

    Without TCP_NODELAY a setting followed by a query costs 41 to 44 ms (measured); the VISA attribute for it raises.
    """
    session: Any = getattr(resource.visalib, "sessions", {}).get(resource.session)
    connection = getattr(session, "interface", None)
    if type(session).__name__ != "TCPIPSocketSession" or not isinstance(connection, socket.socket):
        return None
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    if hasattr(session, "max_recv_size"):
        session.max_recv_size = PEEK
    return connection


def _wire_of(resource: Any, limit: float) -> Wire | None:
    """Return what reads in PyVISA-py's place, or None where its own reads or its raw socket do."""
    from bandproof.drivers.hislip import HislipClient
    from bandproof.drivers.serial_line import SerialLine

    session: Any = getattr(resource.visalib, "sessions", {}).get(resource.session)
    interface: Any = getattr(session, "interface", None)
    if isinstance(interface, HislipClient):
        return interface
    if type(session).__name__ == "SerialSession" and hasattr(interface, "in_waiting"):
        return SerialLine(interface, limit)
    return None


def _set_line(resource: MessageBasedResource, serial: Serial) -> None:
    """Set a serial line by the attributes of VPP-4.3, which every VISA library has."""
    from pyvisa.constants import ControlFlow, Parity, ResourceAttribute, StopBits

    resource.set_visa_attribute(ResourceAttribute.asrl_baud_rate, serial.baud)
    resource.set_visa_attribute(ResourceAttribute.asrl_data_bits, serial.data_bits)
    resource.set_visa_attribute(ResourceAttribute.asrl_parity, Parity[serial.parity])
    resource.set_visa_attribute(ResourceAttribute.asrl_stop_bits, {1: StopBits.one, 2: StopBits.two}[serial.stop_bits])
    resource.set_visa_attribute(ResourceAttribute.asrl_flow_control, ControlFlow[serial.flow.replace("/", "_")])


def _milliseconds(limit: float) -> int:
    return max(1, round(limit * 1000))


@cache
def translated() -> tuple[type[BaseException], ...]:
    """Return the foreign errors that mean trouble with the instrument; others are mistakes of ours and pass.

    One word for each source: the operating system, PyVISA, PyVISA-py's protocols (HiSLIP raises RuntimeError, RPC and
    VXI-11 their own and EOFError, wrong addresses ValueError). The table is built once, when first needed.
    """
    from pyvisa.errors import Error
    from pyvisa_py.protocols.rpc import RPCError
    from pyvisa_py.protocols.vxi11 import Vxi11Error
    from pyvisa_py.protocols.xdrlib import Error as XdrError

    found = (OSError, Error, RuntimeError, EOFError, ValueError, RPCError, Vxi11Error, XdrError)
    try:
        from termios import error as terminal_error  # PySerial lets some through; there is none on Windows
    except ImportError:
        return found
    return (*found, terminal_error)


def is_timeout(problem: BaseException) -> bool:
    """Whether a foreign error says that the time was up."""
    from pyvisa.constants import StatusCode
    from pyvisa.errors import VisaIOError

    if isinstance(problem, VisaIOError):
        return bool(problem.error_code == StatusCode.error_timeout)
    return isinstance(problem, TimeoutError)
