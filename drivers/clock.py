"""The clock everything waits through: real on a real bench, one shared number in a rehearsal."""

from __future__ import annotations

import mmap
import struct
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Protocol

__all__ = ["CLOCK_FILE_SIZE", "Clock", "RealClock", "VirtualClock", "create_clock_file"]

CLOCK_FILE_SIZE = 64  # bytes: float64 t, uint64 step, uint64 attempt, rest zero; little endian
EPOCH = datetime(2026, 1, 1, tzinfo=UTC)  # of every rehearsal, so that a seed gives the same bytes (arbitrary)
MARGIN, FACTOR = 2.0, 3.0  # of a real bench's patience: s, and times the expected duration (arbitrary, generous)


class Clock(Protocol):
    """What the drivers and the controller need from a clock."""

    def now(self) -> float:
        """Return seconds since an arbitrary start; never runs backwards."""

    def wait(self, duration: float) -> None:
        """Let `duration` seconds of the bench pass."""

    def patience(self, expected: float) -> float:
        """Return how many seconds to wait, by the wall, for what should take `expected` seconds."""

    def expired(self, expected: float) -> float:
        """Account for a wait that ended in vain; return the seconds the bench waited."""

    def utc(self) -> datetime:
        """Return the date and time in UTC."""

    def mark(self, step: int, attempt: int) -> None:
        """Tell a simulated bench which step and attempt follow; a real one need not know."""

    @property
    def is_virtual(self) -> bool:
        """Whether the time is a rehearsal's."""

    def catch_up(self, t: float) -> None:
        """In a rehearsal, let time pass until t; a real bench's time cannot be chosen."""


class RealClock:
    """Time of the wall; `margin` and `factor` make the patience: margin + factor * expected.

    Parameters
    ----------
    margin : float
        Seconds waited at least.
    factor : float
        How many times the expected duration is waited on top.
    """

    def __init__(self, *, margin: float = MARGIN, factor: float = FACTOR) -> None:
        self._margin, self._factor = margin, factor

    def now(self) -> float:
        """Return the monotonic time in seconds."""
        return time.monotonic()

    def wait(self, duration: float) -> None:
        """Sleep for `duration` seconds."""
        time.sleep(_checked(duration))

    def patience(self, expected: float) -> float:
        """Return margin + factor * expected, in seconds."""
        return self._margin + self._factor * expected

    def expired(self, expected: float) -> float:
        """Return the seconds that were waited."""
        return self.patience(expected)

    def utc(self) -> datetime:
        """Return the wall clock's time in UTC."""
        return datetime.now(UTC)

    def mark(self, step: int, attempt: int) -> None:
        """Do nothing: a real bench counts nothing."""

    @property
    def is_virtual(self) -> bool:
        """Return False."""
        return False

    def catch_up(self, t: float) -> None:
        """Do nothing."""


class VirtualClock:
    """Time of a rehearsal: one number in a mapped file that the simulated instruments share.

    Parameters
    ----------
    path : path
        The clock file, 64 bytes (see `create_clock_file`).
    patience : float
        Seconds by the wall that any reply may take: a simulated instrument computes, it does not wait.
    """

    def __init__(self, path: str | Path, *, patience: float = 2.0) -> None:
        self._patience, self._utc_shift = patience, 0.0
        with open(path, "r+b") as file:
            self._memory = mmap.mmap(file.fileno(), CLOCK_FILE_SIZE)

    def now(self) -> float:
        """Return the seconds since the rehearsal began."""
        (t,) = struct.unpack_from("<d", self._memory, 0)
        return float(t)

    def wait(self, duration: float) -> None:
        """Move the time on by `duration` seconds, at once."""
        self._set(self.now() + _checked(duration))

    def patience(self, expected: float) -> float:
        """Return the short limit by the wall, in seconds."""
        return self._patience

    def expired(self, expected: float) -> float:
        """Move the time on by what a real bench would have waited, and return that."""
        waited = MARGIN + FACTOR * expected
        self.wait(waited)
        return waited

    def utc(self) -> datetime:
        """Return the fixed epoch plus the time that passed."""
        return EPOCH + timedelta(seconds=self.now() + self._utc_shift)

    def shift_utc(self, seconds: float) -> None:
        """Set the date and time forward or back, as somebody may do on a real computer; durations stay."""
        self._utc_shift += seconds

    def _set(self, t: float) -> None:
        # Whole nanoseconds: sums in another order, as after a resume, then give the same number.
        struct.pack_into("<d", self._memory, 0, round(t, 9))

    def mark(self, step: int, attempt: int) -> None:
        """Write step and attempt, which seed the simulated noise and place the faults."""
        struct.pack_into("<QQ", self._memory, 8, step, attempt)

    @property
    def is_virtual(self) -> bool:
        """Return True."""
        return True

    def catch_up(self, t: float) -> None:
        """Move the time on to exactly t; a t that has passed is left alone."""
        self._set(max(t, self.now()))

    def close(self) -> None:
        """Unmap the file; the clock cannot be used afterwards."""
        self._memory.close()


def create_clock_file(path: str | Path, t: float = 0.0) -> None:
    """Write a clock file at time t, step 0, attempt 0; an existing file is written over."""
    Path(path).write_bytes(struct.pack("<d", t).ljust(CLOCK_FILE_SIZE, b"\0"))


def _checked(duration: float) -> float:
    if not 0 <= duration < float("inf"):
        raise ValueError(f"duration must be finite and not negative (no clock runs backwards), got {duration!r}")
    return duration
