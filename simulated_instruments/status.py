"""Status model of IEEE 488.2 and SCPI-99: event registers, status byte, error queue, pending operations.

Registers know no clock: whoever asks hands over the time, and what happened until then is worked out. Source: IEEE
488.2-1992 chapters 11 and 12, SCPI-99 volume 1 chapters 5 and 21 (from memory).
"""

import math
from collections import deque
from dataclasses import dataclass, field

from bandproof.simulated_instruments.error_texts import TEXTS, event_bit
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["MEASURING", "ErrorQueue", "Register", "Status"]

MEASURING = 0x10  # bit 4 of the operation register, SCPI-99
_OPERATION_COMPLETE, _POWER_ON = 0x01, 0x80
_ERROR_QUEUE, _QUESTIONABLE, _EVENT_SUMMARY, _MASTER, _OPERATION = 0x04, 0x08, 0x20, 0x40, 0x80
_ENTRY_LIMIT = 255  # characters of an entry's text, SCPI-99


class ErrorQueue:
    """First in, first out; when it is full the last entry gives way to -350 and what follows is lost.

    Parameters
    ----------
    depth : int
        Entries it holds, at least 2.
    """

    def __init__(self, depth: int = 10) -> None:
        self._depth = depth
        self._entries: deque[tuple[int, str]] = deque()

    def __len__(self) -> int:
        return len(self._entries)

    def push(self, number: int, detail: str = "") -> None:
        """Add an entry."""
        if len(self._entries) < self._depth:
            self._entries.append((number, detail))
        else:
            self._entries[-1] = (-350, "")

    def pop(self) -> bytes:
        """Take the oldest entry off and return it as response data."""
        number, detail = self._entries.popleft() if self._entries else (0, "")
        text = TEXTS.get(number, "Device-dependent error") + (f";{detail}" if detail else "")
        quoted = text[:_ENTRY_LIMIT].replace('"', "'")
        return f'{number},"{quoted}"'.encode("ascii", "replace")

    def clear(self) -> None:
        """Forget all entries."""
        self._entries.clear()


@dataclass(slots=True)
class Register:
    """A SCPI status register: condition, event (set by a rising condition), enable."""

    condition: int = 0
    event: int = 0
    enable: int = 0

    def update(self, condition: int) -> None:
        """Take a new condition; bits that rise set the event."""
        self.event |= condition & ~self.condition
        self.condition = condition

    def read_event(self) -> int:
        """Return the event register and clear it."""
        value, self.event = self.event, 0
        return value


@dataclass(slots=True)
class Status:
    """All status of one instrument.

    `pending_until` is the instant, in s, when the operations under way are finished; inf: never.
    """

    errors: ErrorQueue = field(default_factory=ErrorQueue)
    operation: Register = field(default_factory=Register)
    questionable: Register = field(default_factory=Register)
    standard_event: int = _POWER_ON
    standard_enable: int = 0
    service_enable: int = 0
    pending_until: float = -math.inf
    completion_asked: bool = False

    def report(self, error: ScpiError) -> None:
        """Put an error into the queue and its class into the event register."""
        self.standard_event |= event_bit(error.number)
        self.errors.push(error.number, error.detail)

    def begin(self, now: float, until: float) -> None:
        """Note an operation that goes on while further commands are taken."""
        self.pending_until = max(self.pending_until, until)
        self.operation.update(self.operation.condition | MEASURING)
        self.look(now)

    def abort(self) -> None:
        """Drop the operations under way; *OPC waits no longer."""
        self.pending_until = -math.inf
        self.completion_asked = False
        self.operation.update(self.operation.condition & ~MEASURING)

    def look(self, now: float) -> None:
        """Work out what has finished by now."""
        if now < self.pending_until:
            return
        self.operation.update(self.operation.condition & ~MEASURING)
        if self.completion_asked:
            self.completion_asked = False
            self.standard_event |= _OPERATION_COMPLETE

    def read_standard_event(self, now: float) -> int:
        """Return the event status register and clear it."""
        self.look(now)
        value, self.standard_event = self.standard_event, 0
        return value

    def byte(self, now: float) -> int:
        """Return the status byte with the master summary in bit 6; message available (bit 4) is never pending here."""
        self.look(now)
        value = _ERROR_QUEUE if len(self.errors) else 0
        value |= _QUESTIONABLE if self.questionable.event & self.questionable.enable else 0
        value |= _OPERATION if self.operation.event & self.operation.enable else 0
        value |= _EVENT_SUMMARY if self.standard_event & self.standard_enable else 0
        return value | (_MASTER if value & self.service_enable else 0)

    def clear(self) -> None:
        """*CLS: clear events and queue, keep the enable registers."""
        self.errors.clear()
        self.standard_event = self.operation.event = self.questionable.event = 0
        self.completion_asked = False

    def preset(self) -> None:
        """STATus:PRESet: clear the enable registers of the SCPI registers."""
        self.operation.enable = self.questionable.enable = 0
