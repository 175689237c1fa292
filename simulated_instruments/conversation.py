"""One client's messages, worked through in order: executed, answered when the reply is ready, spoiled by faults.

How bytes become messages, and replies bytes, is the business of the wire below it: a raw socket or HiSLIP. Whatever
comes, memory stays bounded: waiting messages and unread replies pause the reading.
"""

import asyncio
import math
from collections import deque
from collections.abc import Iterable
from typing import Protocol

import numpy as np

from bandproof.simulated_instruments import faults as names
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.framing import Overrun
from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["Conversation", "Wire"]

WAITING_LIMIT = 1000  # messages, arbitrary
TURN = 20  # messages one client may have executed before the others have their turn, arbitrary
DRIP = 0.3  # s between bytes of a dripping reply
CHUNK = b"1" * 65536  # of an endless reply


class Wire(Protocol):
    """What a conversation needs from the connection below it."""

    @property
    def may_go(self) -> bool:
        """Whether messages may be executed now: nobody else holds a lock."""

    def begin(self, tag: int) -> None:
        """Note that the message that came with this tag is executed next."""

    def framed(self, reply: bytes, *, ends: bool = True) -> bytes:
        """Return a reply to that message, or the beginning of one, as it goes over the wire."""

    def write(self, data: bytes) -> None:
        """Send bytes."""

    def backlog(self) -> int:
        """Return how many bytes wait for the client to read."""

    def hold(self, is_held: bool) -> None:
        """Take no more bytes, or go on."""

    def drop(self) -> None:
        """End the connection at once."""


class Conversation:
    """One client of one instrument.

    Parameters
    ----------
    name : str
        generator, scope or switch.
    device : Device
    timebase : Timebase
    plan : FaultPlan
    wire : Wire
    """

    def __init__(self, name: str, device: Device, timebase: Timebase, plan: FaultPlan, wire: Wire) -> None:
        self._name, self._device, self._timebase, self._plan, self._wire = name, device, timebase, plan, wire
        self._waiting: deque[tuple[bytes | Overrun, int]] = deque()
        self._late: list[bytes] = []
        self._busy = self._full = self._mute = self._unanswered = self._ended = False
        self._generation = 0

    @property
    def is_busy(self) -> bool:
        """Whether a reply is under way that is not ready yet."""
        return self._busy

    def take(self, messages: Iterable[bytes | Overrun], tag: int = 0) -> None:
        """Take messages; the wire is told the tag when the turn of each comes."""
        self._waiting.extend((message, tag) for message in messages if message)
        self.go_on()

    def full(self, is_full: bool) -> None:
        """Work on nothing more while the client does not read; go on when it does."""
        self._full = is_full
        if not is_full:
            self.go_on()

    def clear(self) -> None:
        """Forget what waits and the reply under way."""
        self._waiting.clear()
        self._late.clear()
        self._busy = self._unanswered = False
        self._generation += 1

    def end(self) -> None:
        """Forget the client; the instrument goes on."""
        self.clear()
        self._ended = True

    def go_on(self) -> None:
        """Work on what waits, as far as possible now."""
        turn = 0
        while self._waiting and not (self._busy or self._full or self._ended) and self._wire.may_go:
            if turn == TURN:  # others shall be heard too
                self._busy = True
                asyncio.get_running_loop().call_soon(self._resume, self._generation, None)
                break
            self._execute(*self._waiting.popleft())
            turn += 1
        if not self._ended:
            self._wire.hold(len(self._waiting) > WAITING_LIMIT or self._full)

    def _execute(self, message: bytes | Overrun, tag: int) -> None:
        for late in self._late:
            self._wire.write(late)
        self._late.clear()
        self._wire.begin(tag)
        if isinstance(message, Overrun):
            self._device.refuse(message.number)
            return
        if self._unanswered:
            self._device.refuse(-410)
            self._unanswered = False
        self._plan.look(self._timebase.now())
        if self._plan.due(self._name, (names.ERROR_ENTRY,)):
            self._device.refuse(-240, "fault asked for")
        answer = self._device.message(message, self._timebase.now())
        if answer.reply is None:
            self._unanswered = math.isinf(answer.ready_at)
            return
        wait = self._timebase.reach(answer.ready_at)
        if wait > 0:
            self._busy = True
            asyncio.get_running_loop().call_later(wait, self._resume, self._generation, answer.reply)
        else:
            self._reply(answer.reply)

    def _resume(self, generation: int, reply: bytes | None) -> None:
        if generation != self._generation:
            return  # cleared meanwhile
        self._busy = False
        if reply is not None:
            self._reply(reply)
        self.go_on()

    def _reply(self, reply: bytes) -> None:
        kinds = names.REPLY_FAULTS | names.BLOCK_FAULTS if reply[:1] == b"#" else names.REPLY_FAULTS
        fault = self._plan.due(self._name, kinds)
        if self._mute or self._ended:
            return
        if fault is None:
            self._wire.write(self._wire.framed(reply))
        else:
            self._spoil(fault, reply)

    def _spoil(self, fault: str, reply: bytes) -> None:
        """Send a reply as a fault makes it."""
        wire = self._wire
        if fault == names.SILENT:
            self._mute = True
        elif fault == names.LATE:
            self._late.append(wire.framed(reply))
        elif fault == names.DROPPED:
            wire.drop()
        elif fault == names.TRUNCATED:
            whole = wire.framed(reply)
            wire.write(whole[: len(whole) // 2])
            self._mute = True
        elif fault == names.LYING:
            wire.write(wire.framed(_lie(reply)))
        elif fault == names.GARBAGE:
            garbage = np.random.default_rng(0).bytes(64).replace(b"\n", b"\r") + b"\n"
            wire.write(wire.framed(garbage))
        elif fault == names.DRIPPING:
            self._mute = True
            self._drip(wire.framed(reply), 0)
        else:
            self._mute = True
            self._flood()

    def _drip(self, reply: bytes, position: int) -> None:
        if not self._ended and position < len(reply):
            self._wire.write(reply[position : position + 1])
            asyncio.get_running_loop().call_later(DRIP, self._drip, reply, position + 1)

    def _flood(self) -> None:
        if not self._ended:
            if self._wire.backlog() < len(CHUNK):
                self._wire.write(self._wire.framed(CHUNK, ends=False))
            asyncio.get_running_loop().call_later(0.001, self._flood)


def _lie(reply: bytes) -> bytes:
    """Return a block reply of which the header announces 1000 bytes more than come."""
    count = int(reply[1:2])
    length = str(int(reply[2 : 2 + count]) + 1000)
    return f"#{len(length)}{length}".encode("ascii") + reply[2 + count :]
