"""TCP servers on the loopback interface, raw sockets: newline-terminated messages in, replies out as they are.

One instrument may have several connections; each takes its messages one after the other, the next one when the reply to
the last is sent.
"""

import asyncio
import socket
from collections.abc import Collection
from typing import Protocol

from bandproof.simulated_instruments.conversation import Conversation
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.framing import Framer
from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["Connection", "Droppable", "Server", "send_at_once", "serve"]


class Connection(asyncio.Protocol):
    """One client of one instrument; the wire of its conversation.

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

    may_go = True  # raw sockets know no locks

    def __init__(
        self, name: str, device: Device, timebase: Timebase, plan: FaultPlan, others: "set[Connection]"
    ) -> None:
        self._conversation = Conversation(name, device, timebase, plan, self)
        self._others = others
        self._framer = Framer()
        self._transport: asyncio.Transport | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        """Count the client."""
        self._transport = send_at_once(transport)
        self._others.add(self)

    def connection_lost(self, exc: Exception | None) -> None:
        """Forget the client; the instrument goes on."""
        self._transport = None
        self._conversation.end()
        self._others.discard(self)

    def pause_writing(self) -> None:
        """Work on nothing more while the client does not read."""
        self._conversation.full(True)

    def resume_writing(self) -> None:
        """Go on."""
        self._conversation.full(False)

    def data_received(self, data: bytes) -> None:
        """Take bytes."""
        self._conversation.take(self._framer.feed(data))

    def begin(self, tag: int) -> None:
        """Do nothing: the order tells which message a reply belongs to."""

    def framed(self, reply: bytes, *, ends: bool = True) -> bytes:
        """Return the reply as it is."""
        return reply

    def write(self, data: bytes) -> None:
        """Send bytes."""
        if self._transport is not None:
            self._transport.write(data)

    def backlog(self) -> int:
        """Return how many bytes wait for the client to read."""
        return 0 if self._transport is None else self._transport.get_write_buffer_size()

    def hold(self, is_held: bool) -> None:
        """Take no more bytes, or go on."""
        if self._transport is not None:
            (self._transport.pause_reading if is_held else self._transport.resume_reading)()

    def drop(self) -> None:
        """End the connection at once."""
        if self._transport is not None:
            self._transport.abort()


class Droppable(Protocol):
    """A connection that a server can end."""

    def drop(self) -> None:
        """End the connection at once."""


class Server:
    """A listening server of one instrument; `port` is the system's choice. Closing it drops its clients."""

    def __init__(self, listener: asyncio.Server, connections: Collection[Droppable]) -> None:
        self._listener, self._connections = listener, connections
        self.port: int = listener.sockets[0].getsockname()[1]

    @property
    def clients(self) -> int:
        """How many clients are connected."""
        return len(self._connections)

    async def close(self) -> None:
        """Listen no more and drop the clients."""
        self._listener.close()
        for connection in list(self._connections):
            connection.drop()
        await asyncio.sleep(0)  # lets the loop close what was dropped


async def serve(name: str, device: Device, timebase: Timebase, plan: FaultPlan) -> Server:
    """Return a server of one instrument on a loopback port."""
    connections: set[Connection] = set()
    listener = await asyncio.get_running_loop().create_server(
        lambda: Connection(name, device, timebase, plan, connections), "127.0.0.1", 0
    )
    return Server(listener, connections)


def send_at_once(transport: asyncio.BaseTransport) -> asyncio.Transport:
    """Return a connection's transport, told to send small replies at once."""
    assert isinstance(transport, asyncio.Transport)
    transport.get_extra_info("socket").setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    return transport
