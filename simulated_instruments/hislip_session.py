"""One HiSLIP client: what its two channels say, and the wire of its conversation with the instrument.

Synchronized mode. A reply carries the id of the message it answers. A message that comes without "response delivered"
while a reply is outstanding interrupts it (IVI-6.1 with IEEE 488.2 section 6.3.2.3, from memory): Interrupted on both
channels, error -410, and the message is executed. The id in AsyncStatusQuery is not looked at: a widespread client puts
the next one there.
"""

import struct
from collections.abc import Callable
from typing import Protocol

from bandproof.simulated_instruments.conversation import Conversation
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.framing import Framer, Overrun
from bandproof.simulated_instruments.hislip_locks import Locks
from bandproof.simulated_instruments.hislip_messages import PAYLOAD_LIMIT, Fatal, Flaw, Message, Type, packed
from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["FIRST_ID", "Channel", "Session", "flaw"]

FIRST_ID = 0xFFFFFF00
MESSAGE_AVAILABLE = 0x10  # of the status byte, IEEE 488.2 section 11.2
_HEADER_SIZE = 16
_LEAST_PIECE = 256  # bytes of a reply in one message at least, whatever a client asks, arbitrary
_HIGHEST_REMOTE_LOCAL = 6


class Channel(Protocol):
    """One of the two connections."""

    def send(self, data: bytes) -> None:
        """Send bytes."""

    def fatal(self, code: Fatal, words: str) -> None:
        """Send FatalError and end the client's connections."""

    def backlog(self) -> int:
        """Return how many bytes wait for the client to read."""

    def hold(self, is_held: bool) -> None:
        """Take no more bytes, or go on."""

    def drop(self) -> None:
        """End the connection at once."""


class Session:
    """One client of one instrument.

    Parameters
    ----------
    number : int
        Session id.
    name : str
        generator, scope or switch.
    device : Device
    timebase : Timebase
    plan : FaultPlan
    locks : Locks
        The instrument's.
    sync : Channel
        The synchronous channel.
    """

    def __init__(
        self, number: int, name: str, device: Device, timebase: Timebase, plan: FaultPlan, locks: Locks, sync: Channel
    ) -> None:
        self.number, self.sync = number, sync
        self.asynchronous: Channel | None = None
        self.conversation = Conversation(name, device, timebase, plan, self)
        self._device, self._timebase, self._locks = device, timebase, locks
        self._framer = Framer()
        self._id = FIRST_ID  # of the message being answered
        self._sent = False  # a reply has gone of which the client has not said that it came
        self._is_clearing = self._is_over = False
        self._piece = PAYLOAD_LIMIT - _HEADER_SIZE

    def end(self) -> None:
        """Forget the client; what its other channel still says is not heard, or a lock would be nobody's."""
        self._is_over = True
        self.conversation.end()
        self._locks.leave(self)

    def on_sync(self, message: Message) -> None:
        """Handle a message of the synchronous channel."""
        if self._is_over:
            return
        if self.asynchronous is None:
            self.sync.fatal(Fatal.CHANNEL_MISSING, "the asynchronous channel comes first")
        elif message.type == Type.DEVICE_CLEAR_COMPLETE:
            self._clear()
            self._is_clearing = False
            self.sync.send(packed(Type.DEVICE_CLEAR_ACKNOWLEDGE))
        elif message.type in (Type.DATA, Type.DATA_END, Type.TRIGGER):
            if not self._is_clearing:
                self._take(message)
        else:
            _refuse_type(self.sync, message)

    def on_async(self, message: Message) -> None:
        """Handle a message of the asynchronous channel."""
        if self._is_over:
            return
        answers: dict[int, Callable[[Message], bytes | None]] = {
            Type.ASYNC_MAX_MSG_SIZE: self._negotiate_size,
            Type.ASYNC_LOCK: self._lock,
            Type.ASYNC_LOCK_INFO: self._tell_locks,
            Type.ASYNC_REMOTE_LOCAL_CONTROL: self._control,
            Type.ASYNC_DEVICE_CLEAR: self._begin_clear,
            Type.ASYNC_STATUS_QUERY: self._tell_status,
        }
        answer = answers.get(message.type)
        if answer is not None:
            self._tell(answer(message))
        elif self.asynchronous is not None:
            _refuse_type(self.asynchronous, message)

    @property
    def may_go(self) -> bool:
        """Whether nobody else holds a lock."""
        return self._locks.may_use(self)

    def begin(self, tag: int) -> None:
        """Note the id of the message that is executed next; interrupt a reply that is outstanding."""
        self._id = tag
        if self._sent:
            self._sent = False
            self._device.refuse(-410)
            self.sync.send(packed(Type.INTERRUPTED, 0, tag))
            self._tell(packed(Type.ASYNC_INTERRUPTED, 0, tag))

    def framed(self, reply: bytes, *, ends: bool = True) -> bytes:
        """Return a reply as Data and DataEnd messages."""
        self._sent = self._sent or ends
        starts = range(0, len(reply), self._piece)
        kinds = [Type.DATA] * (len(starts) - ends) + [Type.DATA_END] * ends
        pieces = (reply[start : start + self._piece] for start in starts)
        return b"".join(packed(kind, 0, self._id, piece) for kind, piece in zip(kinds, pieces, strict=True))

    def write(self, data: bytes) -> None:
        """Send bytes on the synchronous channel."""
        self.sync.send(data)

    def backlog(self) -> int:
        """Return how many bytes wait on the synchronous channel."""
        return self.sync.backlog()

    def hold(self, is_held: bool) -> None:
        """Hold the synchronous channel."""
        self.sync.hold(is_held)

    def drop(self) -> None:
        """End both connections at once."""
        self.sync.drop()
        if self.asynchronous is not None:
            self.asynchronous.drop()

    def _take(self, message: Message) -> None:
        """Take program data; DataEnd ends a message as a newline does."""
        if message.control & 1:
            self._sent = False
        if message.type == Type.TRIGGER:
            self.conversation.take([Overrun(-211)], message.parameter)  # no instrument here has a trigger function
            return
        found = list(self._framer.feed(message.payload))
        if message.type == Type.DATA_END:
            found.append(self._framer.end())
        self.conversation.take(found, message.parameter)

    def _clear(self) -> None:
        self.conversation.clear()
        self._framer = Framer()
        self._sent = False

    def _tell(self, data: bytes | None) -> None:
        if data is not None and self.asynchronous is not None:
            self.asynchronous.send(data)

    def _begin_clear(self, message: Message) -> bytes:
        self._clear()
        self._is_clearing = True
        return packed(Type.ASYNC_DEVICE_CLEAR_ACKNOWLEDGE)

    def _negotiate_size(self, message: Message) -> bytes:
        if len(message.payload) != 8:
            return flaw(Flaw.UNIDENTIFIED, "a size has 8 bytes")
        (size,) = struct.unpack("!Q", message.payload)
        self._piece = max(_LEAST_PIECE, min(size, PAYLOAD_LIMIT) - _HEADER_SIZE)
        return packed(Type.ASYNC_MAX_MSG_SIZE_RESPONSE, payload=struct.pack("!Q", PAYLOAD_LIMIT))

    def _lock(self, message: Message) -> bytes | None:
        if message.control == 0:
            return packed(Type.ASYNC_LOCK_RESPONSE, self._locks.release(self))
        if message.control != 1:
            return flaw(Flaw.CONTROL_CODE, "0 releases, 1 requests")
        self._locks.request(self, message.payload, message.parameter / 1000, self._tell_lock)
        return None

    def _tell_lock(self, code: int) -> None:
        self._tell(packed(Type.ASYNC_LOCK_RESPONSE, code))

    def _tell_locks(self, message: Message) -> bytes:
        return packed(Type.ASYNC_LOCK_INFO_RESPONSE, int(self._locks.is_exclusive), self._locks.holders)

    def _control(self, message: Message) -> bytes:
        if message.control > _HIGHEST_REMOTE_LOCAL:
            return flaw(Flaw.CONTROL_CODE, "remote and local have the codes 0 to 6")
        return packed(Type.ASYNC_REMOTE_LOCAL_RESPONSE)  # no front panel is there to be locked

    def _tell_status(self, message: Message) -> bytes:
        if message.control & 1:
            self._sent = False
        available = MESSAGE_AVAILABLE if self._sent else 0
        return packed(Type.ASYNC_STATUS_RESPONSE, self._device.status.byte(self._timebase.now()) | available)


def flaw(code: Flaw, words: str) -> bytes:
    """Return an Error message."""
    return packed(Type.ERROR, code, payload=words.encode("ascii"))


def _refuse_type(channel: Channel, message: Message) -> None:
    if message.type != Type.ERROR:  # an error is no reason for another one
        is_vendors = message.type >= 128
        channel.send(
            flaw(Flaw.VENDOR_TYPE if is_vendors else Flaw.TYPE, f"message type {message.type} has no place here")
        )
