"""Messages out of a stream of bytes: ended by a newline, except inside definite blocks; bounded."""

import re
from collections.abc import Iterator
from dataclasses import dataclass

__all__ = ["MESSAGE_LIMIT", "Framer", "Overrun"]

MESSAGE_LIMIT = 1_000_000  # bytes, arbitrary

# Strings are passed over as wholes, since # in a string begins no block; a block follows white space or a comma.
_MARKS = re.compile(rb"\"[^\"\n]*[\"\n]?|'[^'\n]*['\n]?|(?<=[\x00-\x20,])#(?:0[^\n]*|[1-9]?)|\n")


@dataclass(frozen=True, slots=True)
class Overrun:
    """A message was too long and has been thrown away; `number` is the error it deserves."""

    number: int


class Framer:
    """Cuts a stream into program messages.

    A message over MESSAGE_LIMIT, or one that announces a block over it, is thrown away up to its next newline and
    reported once as an `Overrun`; memory stays bounded whatever comes.
    """

    def __init__(self) -> None:
        self._buffer = bytearray()
        self._position = 0  # what lies before is understood
        self._solid = 0  # where the last definite block ends: what lies before is data
        self._discarding = False

    def feed(self, data: bytes) -> Iterator[bytes | Overrun]:
        """Take bytes and yield the messages they complete, without terminators."""
        self._buffer += data
        while True:
            if self._discarding and not self._discard():
                return
            end = self._end()
            if isinstance(end, Overrun):
                self._discarding = True
                yield end
            elif end is None:
                return
            else:
                message, solid = bytes(self._buffer[:end]), self._solid
                self._drop(end + 1)
                yield message if end == solid else message.removesuffix(b"\r")

    def end(self) -> bytes:
        """Return what lies here without its terminator and begin anew: the wire says that a message has ended."""
        message = b"" if self._discarding else bytes(self._buffer)
        self._drop(len(self._buffer))
        self._discarding = False
        return message

    def _discard(self) -> bool:
        end = self._buffer.find(b"\n", self._position)
        self._drop(len(self._buffer) if end < 0 else end + 1)
        self._discarding = end < 0
        return not self._discarding

    def _drop(self, count: int) -> None:
        del self._buffer[:count]
        self._position = self._solid = 0

    def _end(self) -> int | Overrun | None:
        """Return where the first message ends, an overrun, or None while it is incomplete."""
        if self._position > len(self._buffer):
            return None
        while (mark := _MARKS.search(self._buffer, self._position)) is not None:
            if mark[0].endswith(b"\n"):
                return mark.end() - 1 if mark.end() <= MESSAGE_LIMIT + 1 else Overrun(-363)
            if mark.end() == len(self._buffer) and _is_open(mark[0]):
                self._position = mark.start()
                break
            if mark[0][:1] != b"#":
                self._position = mark.end()
                continue
            resolved = self._block(mark)
            if not isinstance(resolved, int):
                return resolved
            self._position = resolved
            if not mark[0].startswith(b"#0"):  # where an indefinite block ends only the newline tells
                self._solid = resolved
            if resolved > len(self._buffer):
                return None
        else:
            self._position = max(self._position, len(self._buffer))
        return Overrun(-363) if len(self._buffer) > MESSAGE_LIMIT else None

    def _block(self, mark: re.Match[bytes]) -> int | Overrun | None:
        """Return where a block ends, which may lie beyond what has come."""
        start = mark.start()
        if mark[0].startswith(b"#0") or (mark[0] == b"#" and start + 1 < len(self._buffer)):
            return mark.end()
        count = int(mark[0][1:] or b"0")
        digits = bytes(self._buffer[start + 2 : start + 2 + count])
        if mark[0] == b"#" or (len(digits) < count and digits.isdigit()) or not digits:
            return None if len(self._buffer) <= MESSAGE_LIMIT else Overrun(-363)
        if not digits.isdigit():
            return mark.end()
        end = start + 2 + count + int(digits)
        return Overrun(-223) if end > MESSAGE_LIMIT else end


def _is_open(mark: bytes) -> bool:
    """Return whether a string or an indefinite block may go on with the next bytes."""
    if mark[:1] == b"#":
        return mark[1:2] == b"0"
    return len(mark) == 1 or mark[-1:] != mark[:1]
