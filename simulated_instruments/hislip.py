"""HiSLIP servers on the loopback interface: each instrument once more, beside its raw socket.

A client opens two connections: Initialize on the first makes it the synchronous channel and gives a session id,
AsyncInitialize with that id makes the second the asynchronous one. When either ends, both do. A stream that is no
HiSLIP is answered with FatalError and closed.
"""

import asyncio
import itertools

from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.hislip_locks import Locks
from bandproof.simulated_instruments.hislip_messages import (
    Fatal,
    Flaw,
    Malformed,
    Message,
    Parser,
    TooLarge,
    Type,
    packed,
)
from bandproof.simulated_instruments.hislip_session import Session, flaw
from bandproof.simulated_instruments.timebase import Timebase
from bandproof.simulated_instruments.transport import Server, send_at_once

__all__ = ["serve_hislip"]

SUB_ADDRESS = "hislip0"
CONNECTIONS_LIMIT = 100  # of one instrument, arbitrary
_VERSION = 0x0100
_VENDOR = int.from_bytes(b"xx", "big")  # an id nobody owns
_SESSION_IDS = 1 << 16


class Hub:
    """What the HiSLIP clients of one instrument share."""

    def __init__(self, name: str, device: Device, timebase: Timebase, plan: FaultPlan) -> None:
        self._name, self._device, self._timebase, self._plan = name, device, timebase, plan
        self._locks = Locks(self._go_on)
        self._numbers = itertools.cycle(range(1, _SESSION_IDS))
        self.channels: set[HislipChannel] = set()
        self.sessions: dict[int, Session] = {}

    def begin(self, sync: "HislipChannel") -> Session:
        """Return a new client's session."""
        number = next(number for number in self._numbers if number not in self.sessions)
        session = Session(number, self._name, self._device, self._timebase, self._plan, self._locks, sync)
        self.sessions[number] = session
        return session

    def end(self, session: Session) -> None:
        """Forget a client."""
        if self.sessions.pop(session.number, None) is not None:
            session.end()

    def _go_on(self) -> None:
        for session in list(self.sessions.values()):
            session.conversation.go_on()


class HislipChannel(asyncio.Protocol):
    """One connection of a client; the first message tells which of the two."""

    def __init__(self, hub: Hub) -> None:
        self._hub, self._parser = hub, Parser()
        self._session: Session | None = None
        self._transport: asyncio.Transport | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        """Count the connection, or refuse it."""
        self._transport = send_at_once(transport)
        self._hub.channels.add(self)
        if len(self._hub.channels) > CONNECTIONS_LIMIT:
            self.fatal(Fatal.TOO_MANY_CLIENTS, f"there are {CONNECTIONS_LIMIT} connections already")

    def connection_lost(self, exc: Exception | None) -> None:
        """End the other connection too; the instrument goes on."""
        self._transport = None
        self._hub.channels.discard(self)
        if self._session is not None:
            self._hub.end(self._session)
            self._session.drop()

    def pause_writing(self) -> None:
        """Take and work on nothing more while the client does not read."""
        self.hold(True)
        if self._is_sync and self._session is not None:
            self._session.conversation.full(True)

    def resume_writing(self) -> None:
        """Go on."""
        self.hold(False)
        if self._is_sync and self._session is not None:
            self._session.conversation.full(False)

    def data_received(self, data: bytes) -> None:
        """Take bytes."""
        try:
            for message in self._parser.feed(data):
                if self._transport is None or self._transport.is_closing():
                    return
                self._handle(message)
        except Malformed as problem:
            self.fatal(Fatal.POOR_HEADER, str(problem))

    def send(self, data: bytes) -> None:
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

    def fatal(self, code: Fatal, words: str) -> None:
        """Send FatalError and end the client."""
        self.send(packed(Type.FATAL_ERROR, code, payload=words.encode("ascii", "replace")))
        if self._transport is not None:
            self._transport.close()
        if self._session is not None:
            self._hub.end(self._session)

    def drop(self) -> None:
        """End the connection at once."""
        if self._transport is not None:
            self._transport.abort()

    @property
    def _is_sync(self) -> bool:
        return self._session is not None and self._session.sync is self

    def _handle(self, message: Message | TooLarge) -> None:
        if isinstance(message, TooLarge):
            self.send(flaw(Flaw.TOO_LARGE, f"{message.length} bytes are too many"))
        elif message.type == Type.FATAL_ERROR:
            self.drop()
        elif self._session is None:
            self._start(message)
        elif message.type in (Type.INITIALIZE, Type.ASYNC_INITIALIZE):
            self.fatal(Fatal.WRONG_START, "this connection is initialized already")
        elif self._is_sync:
            self._session.on_sync(message)
        else:
            self._session.on_async(message)

    def _start(self, message: Message) -> None:
        """Become one of the two channels."""
        if message.type == Type.INITIALIZE:
            if message.payload.lower() not in (b"", SUB_ADDRESS.encode("ascii")):
                self.fatal(Fatal.WRONG_START, f"only {SUB_ADDRESS} is here")
                return
            self._session = self._hub.begin(self)
            self.send(packed(Type.INITIALIZE_RESPONSE, 0, _VERSION << 16 | self._session.number))
        elif message.type == Type.ASYNC_INITIALIZE:
            session = self._hub.sessions.get(message.parameter)
            if session is None or session.asynchronous is not None:
                self.fatal(Fatal.WRONG_START, "no session with this id waits for its asynchronous channel")
                return
            self._session, session.asynchronous = session, self
            self.send(packed(Type.ASYNC_INITIALIZE_RESPONSE, 0, _VENDOR))
        else:
            self.fatal(Fatal.WRONG_START, "a connection begins with Initialize or AsyncInitialize")


async def serve_hislip(name: str, device: Device, timebase: Timebase, plan: FaultPlan) -> Server:
    """Return a HiSLIP server of one instrument on a loopback port."""
    hub = Hub(name, device, timebase, plan)
    listener = await asyncio.get_running_loop().create_server(lambda: HislipChannel(hub), "127.0.0.1", 0)
    return Server(listener, hub.channels)
