"""TCP servers on the loopback interface: bytes to messages to an instrument, and its replies back, faults included.

One instrument may have several connections; each takes its messages one after the other, the next one when the reply to
the last is sent. Whatever comes, memory stays bounded: messages by the framer, waiting messages and unread replies by
pausing the reading.
"""

import asyncio
import math
import socket
from collections import deque

import numpy as np

from bandproof.simulated_instruments import faults as names
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.framing import Framer, Overrun
from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["Connection", "Server", "serve"]

WAITING_LIMIT = 1000  # messages, arbitrary
TURN = 20  # messages one client may have executed before the others have their turn, arbitrary
DRIP = 0.3  # s between bytes of a dripping reply
CHUNK = b"1" * 65536  # of an endless reply


class Connection(asyncio.Protocol):
    """One client of one instrument.

    Parameters
    ----------
    name : str
        generator, scope or switch.
    device : Device
    timebase : Timebase
    plan : FaultPlan
    others : set of Connection
        The open connections, among which this one counts itself.
    """

    def __init__(
        self, name: str, device: Device, timebase: Timebase, plan: FaultPlan, others: "set[Connection]"
    ) -> None:
        self._name, self._device, self._timebase, self._plan = name, device, timebase, plan
        self._others = others
        self._framer = Framer()
        self._waiting: deque[bytes | Overrun] = deque()
        self._late: list[bytes] = []
        self._busy = self._full = self._mute = self._unanswered = False
        self._transport: asyncio.Transport | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        """Send small replies at once."""
        assert isinstance(transport, asyncio.Transport)
        self._transport = transport
        self._others.add(self)
        transport.get_extra_info("socket").setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def connection_lost(self, exc: Exception | None) -> None:
        """Forget the client; the instrument goes on."""
        self._transport = None
        self._waiting.clear()
        self._others.discard(self)

    def drop(self) -> None:
        """End the connection at once."""
        if self._transport is not None:
            self._transport.abort()

    def pause_writing(self) -> None:
        """Work on nothing more while the client does not read."""
        self._full = True

    def resume_writing(self) -> None:
        """Go on."""
        self._full = False
        self._pump()

    def data_received(self, data: bytes) -> None:
        """Take bytes."""
        self._waiting.extend(message for message in self._framer.feed(data) if message)
        self._pump()

    def _pump(self) -> None:
        turn = 0
        while self._waiting and not self._busy and not self._full and self._transport is not None:
            if turn == TURN:  # others shall be heard too
                self._busy = True
                asyncio.get_running_loop().call_soon(self._go_on)
                break
            self._take(self._waiting.popleft())
            turn += 1
        if self._transport is not None:
            if len(self._waiting) > WAITING_LIMIT or self._full:
                self._transport.pause_reading()
            else:
                self._transport.resume_reading()

    def _take(self, message: bytes | Overrun) -> None:
        if self._late and self._transport is not None:
            self._transport.writelines(self._late)
            self._late.clear()
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
            asyncio.get_running_loop().call_later(wait, self._ready, answer.reply)
        else:
            self._reply(answer.reply)

    def _go_on(self) -> None:
        self._busy = False
        self._pump()

    def _ready(self, reply: bytes) -> None:
        self._busy = False
        self._reply(reply)
        self._pump()

    def _reply(self, reply: bytes) -> None:
        kinds = names.REPLY_FAULTS | names.BLOCK_FAULTS if reply[:1] == b"#" else names.REPLY_FAULTS
        fault = self._plan.due(self._name, kinds)
        if self._mute or self._transport is None:
            return
        if fault is None:
            self._transport.write(reply)
        else:
            self._spoil(fault, reply, self._transport)

    def _spoil(self, fault: str, reply: bytes, transport: asyncio.Transport) -> None:
        """Send a reply as a fault makes it."""
        if fault == names.SILENT:
            self._mute = True
        elif fault == names.LATE:
            self._late.append(reply)
        elif fault == names.DROPPED:
            transport.abort()
        elif fault == names.TRUNCATED:
            transport.write(reply[: len(reply) // 2])
            self._mute = True
        elif fault == names.LYING:
            transport.write(_lie(reply))
        elif fault == names.GARBAGE:
            transport.write(np.random.default_rng(0).bytes(64).replace(b"\n", b"\r") + b"\n")
        elif fault == names.DRIPPING:
            self._mute = True
            self._drip(reply, 0)
        else:
            self._mute = True
            self._flood()

    def _drip(self, reply: bytes, position: int) -> None:
        if self._transport is not None and position < len(reply):
            self._transport.write(reply[position : position + 1])
            asyncio.get_running_loop().call_later(DRIP, self._drip, reply, position + 1)

    def _flood(self) -> None:
        if self._transport is not None:
            if self._transport.get_write_buffer_size() < len(CHUNK):
                self._transport.write(CHUNK)
            asyncio.get_running_loop().call_later(0.001, self._flood)


def _lie(reply: bytes) -> bytes:
    """Return a block reply of which the header announces 1000 bytes more than come."""
    count = int(reply[1:2])
    length = str(int(reply[2 : 2 + count]) + 1000)
    return f"#{len(length)}{length}".encode("ascii") + reply[2 + count :]


class Server:
    """A listening server of one instrument; `port` is the system's choice. Closing it drops its clients."""

    def __init__(self, listener: asyncio.Server, connections: set[Connection]) -> None:
        self._listener, self._connections = listener, connections
        self.port: int = listener.sockets[0].getsockname()[1]

    @property
    def clients(self) -> int:
        """How many clients are connected."""
        return len(self._connections)

    async def close(self) -> None:
        """Listen no more and drop the clients."""
        self._listener.close()
        for connection in self._connections:
            connection.drop()
        await asyncio.sleep(0)  # lets the loop close what was dropped


async def serve(name: str, device: Device, timebase: Timebase, plan: FaultPlan) -> Server:
    """Return a server of one instrument on a loopback port."""
    connections: set[Connection] = set()
    listener = await asyncio.get_running_loop().create_server(
        lambda: Connection(name, device, timebase, plan, connections), "127.0.0.1", 0
    )
    return Server(listener, connections)
