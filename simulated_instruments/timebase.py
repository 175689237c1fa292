"""Time bases of the simulated bench: virtual time in a mapped file, or the monotonic clock.

The mapped file has 64 bytes, little endian: offset 0 float64 t in s since the bench began, 8 uint64 step, 16 uint64
attempt, rest zero. The controller moves t by waiting and names step and attempt; an instrument moves t only when it is
about to reply, and only forwards. One message is in flight on the whole bench, so nobody else writes meanwhile.
"""

import math
import mmap
import struct
import time
from pathlib import Path
from typing import Protocol

__all__ = ["FILE_SIZE", "RealTimebase", "Timebase", "VirtualTimebase", "open_timebase"]

FILE_SIZE = 64
_TIME = struct.Struct("<d")
_MARK = struct.Struct("<QQ")


class Timebase(Protocol):
    """What an instrument knows about time."""

    def now(self) -> float:
        """Return s since the bench began."""

    def reach(self, ready_at: float) -> float:
        """Make a reply possible at ready_at; return the s somebody still has to wait for it."""

    def mark(self) -> tuple[int, int] | None:
        """Return step and attempt as the controller named them; None where nobody names them."""


class VirtualTimebase:
    """Virtual time in a mapped file, made with 64 zero bytes if it is not there.

    Raises
    ------
    OSError
        The file cannot be made or mapped.
    ValueError
        A file is there but too short to be a time file.
    """

    def __init__(self, path: Path) -> None:
        if not path.exists():
            path.write_bytes(bytes(FILE_SIZE))
        if path.stat().st_size < FILE_SIZE:
            raise ValueError(f"{path} is no time file: it has {path.stat().st_size} bytes, not {FILE_SIZE}")
        with path.open("r+b") as file:
            self._map = mmap.mmap(file.fileno(), FILE_SIZE)

    def now(self) -> float:
        """Return virtual s since the bench began."""
        return float(_TIME.unpack_from(self._map, 0)[0])

    def reach(self, ready_at: float) -> float:
        """Move virtual time forwards to ready_at; nobody has to wait."""
        if math.isfinite(ready_at) and ready_at > self.now():
            _TIME.pack_into(self._map, 0, round(ready_at, 9))  # whole ns, as the controller counts
        return 0.0

    def mark(self) -> tuple[int, int]:
        """Return step and attempt."""
        step, attempt = _MARK.unpack_from(self._map, 8)
        return int(step), int(attempt)


class RealTimebase:
    """Real time, from the making of this object."""

    def __init__(self) -> None:
        self._start = time.monotonic()

    def now(self) -> float:
        """Return real s since the bench began."""
        return time.monotonic() - self._start

    def reach(self, ready_at: float) -> float:
        """Return the s until ready_at."""
        return max(0.0, ready_at - self.now())

    def mark(self) -> None:
        """Return None: nobody names steps in real time."""
        return


def open_timebase(path: Path | None) -> Timebase:
    """Return the virtual time base of a file, or the real one."""
    return RealTimebase() if path is None else VirtualTimebase(path)
