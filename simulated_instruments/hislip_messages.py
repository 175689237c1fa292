"""HiSLIP messages as bytes: header and payload, taken out of a stream with bounded memory.

Source: IVI-6.1 High-Speed LAN Instrument Protocol; types, codes and the header as two independent readers of it agree.
"""

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from enum import IntEnum

__all__ = ["PAYLOAD_LIMIT", "Fatal", "Flaw", "Malformed", "Message", "Parser", "TooLarge", "Type", "packed"]

PAYLOAD_LIMIT = 1 << 20  # bytes, arbitrary: above the longest program message an instrument takes
_HEADER = struct.Struct("!2sBBIQ")  # prologue, type, control code, parameter, payload length
_PROLOGUE = b"HS"


class Type(IntEnum):
    """Message types of HiSLIP 1.0."""

    INITIALIZE = 0
    INITIALIZE_RESPONSE = 1
    FATAL_ERROR = 2
    ERROR = 3
    ASYNC_LOCK = 4
    ASYNC_LOCK_RESPONSE = 5
    DATA = 6
    DATA_END = 7
    DEVICE_CLEAR_COMPLETE = 8
    DEVICE_CLEAR_ACKNOWLEDGE = 9
    ASYNC_REMOTE_LOCAL_CONTROL = 10
    ASYNC_REMOTE_LOCAL_RESPONSE = 11
    TRIGGER = 12
    INTERRUPTED = 13
    ASYNC_INTERRUPTED = 14
    ASYNC_MAX_MSG_SIZE = 15
    ASYNC_MAX_MSG_SIZE_RESPONSE = 16
    ASYNC_INITIALIZE = 17
    ASYNC_INITIALIZE_RESPONSE = 18
    ASYNC_DEVICE_CLEAR = 19
    ASYNC_SERVICE_REQUEST = 20
    ASYNC_STATUS_QUERY = 21
    ASYNC_STATUS_RESPONSE = 22
    ASYNC_DEVICE_CLEAR_ACKNOWLEDGE = 23
    ASYNC_LOCK_INFO = 24
    ASYNC_LOCK_INFO_RESPONSE = 25


class Fatal(IntEnum):
    """Codes of FatalError: the connection ends."""

    UNIDENTIFIED = 0
    POOR_HEADER = 1
    CHANNEL_MISSING = 2
    WRONG_START = 3
    TOO_MANY_CLIENTS = 4


class Flaw(IntEnum):
    """Codes of Error: the message is ignored."""

    UNIDENTIFIED = 0
    TYPE = 1
    CONTROL_CODE = 2
    VENDOR_TYPE = 3
    TOO_LARGE = 4


@dataclass(frozen=True, slots=True)
class Message:
    """One message; `type` is any byte, also one that no Type has."""

    type: int
    control: int = 0
    parameter: int = 0
    payload: bytes = b""


@dataclass(frozen=True, slots=True)
class TooLarge:
    """A message's payload was over PAYLOAD_LIMIT and has been, or is being, thrown away."""

    type: int
    length: int


class Malformed(Exception):
    """The stream has no HiSLIP header where one must be; nothing after it can be understood."""

    def __init__(self, found: bytes) -> None:
        super().__init__(found)
        self.found = found

    def __str__(self) -> str:
        return f"expected a header beginning with {_PROLOGUE!r}, found {self.found!r}"


def packed(kind: int, control: int = 0, parameter: int = 0, payload: bytes = b"") -> bytes:
    """Return a message as bytes.

    >>> packed(Type.DATA_END, parameter=0xFFFFFF00, payload=b"*IDN?").hex(" ", -8)
    '48530700ffffff00 0000000000000005 2a49444e3f'
    """
    return _HEADER.pack(_PROLOGUE, kind, control, parameter, len(payload)) + payload


class Parser:
    """Takes messages out of a stream; holds at most one header and PAYLOAD_LIMIT bytes besides what is fed."""

    def __init__(self) -> None:
        self._buffer = bytearray()
        self._skip = 0

    def feed(self, data: bytes) -> Iterator[Message | TooLarge]:
        """Take bytes and yield the messages they complete.

        Raises
        ------
        Malformed
            A header is wrong; to be raised again by every feed after it.
        """
        self._buffer += data
        position = 0  # what lies before is done with; cut off once, because messages can be many
        try:
            while True:
                skipped = min(self._skip, len(self._buffer) - position)
                position, self._skip = position + skipped, self._skip - skipped
                found = bytes(self._buffer[position : position + len(_PROLOGUE)])
                if not _PROLOGUE.startswith(found):
                    raise Malformed(found)
                if len(self._buffer) - position < _HEADER.size:
                    return
                _, kind, control, parameter, length = _HEADER.unpack_from(self._buffer, position)
                if length > PAYLOAD_LIMIT:
                    position, self._skip = position + _HEADER.size, length
                    yield TooLarge(kind, length)
                    continue
                start = position + _HEADER.size
                if len(self._buffer) - start < length:
                    return
                position = start + length
                yield Message(kind, control, parameter, bytes(self._buffer[start:position]))
        finally:
            del self._buffer[:position]
