"""Locks of one instrument between its HiSLIP clients: one exclusive, or several shared under the same word."""

import asyncio
from collections.abc import Callable
from dataclasses import dataclass

__all__ = ["GRANTED", "GRANTED_NOT", "RELEASED_SHARED", "WRONG", "Locks"]

GRANTED_NOT, GRANTED, RELEASED_SHARED, WRONG = 0, 1, 2, 3  # control codes of AsyncLockResponse

WAITING_LIMIT = 100  # requests, arbitrary


@dataclass(eq=False, slots=True)
class _Request:
    client: object
    word: bytes
    answer: Callable[[int], None]
    timer: asyncio.TimerHandle | None = None


class Locks:
    """Who holds what; clients are any objects.

    `freed` is called whenever a lock is given back, so that who was kept out may go on.
    """

    def __init__(self, freed: Callable[[], None]) -> None:
        self._freed = freed
        self._exclusive: object | None = None
        self._shared: dict[object, bytes] = {}
        self._waiting: list[_Request] = []

    @property
    def is_exclusive(self) -> bool:
        """Whether somebody holds the exclusive lock."""
        return self._exclusive is not None

    @property
    def holders(self) -> int:
        """Return how many clients hold locks."""
        return len(self._shared.keys() | ({self._exclusive} - {None}))

    def may_use(self, client: object) -> bool:
        """Whether a client's messages may be executed."""
        if self._exclusive is not None:
            return self._exclusive is client
        return not self._shared or client in self._shared

    def request(self, client: object, word: bytes, limit: float, answer: Callable[[int], None]) -> None:
        """Have `answer` called with a control code, at once or within `limit` s.

        Parameters
        ----------
        client : object
        word : bytes
            Word of a shared lock; empty: an exclusive one.
        limit : float
            s by the wall, as a client counts it.
        answer : callable
        """
        request = _Request(client, word, answer)
        if self._holds(client, word) or any(other.client is client for other in self._waiting):
            answer(WRONG)
        elif self._is_free(request):
            self._grant(request)
        elif limit <= 0 or len(self._waiting) >= WAITING_LIMIT:
            answer(GRANTED_NOT)
        else:
            request.timer = asyncio.get_running_loop().call_later(limit, self._give_up, request)
            self._waiting.append(request)

    def release(self, client: object) -> int:
        """Give back a client's exclusive lock, or else its shared one; return the control code that says which."""
        if self._exclusive is client:
            self._exclusive, code = None, GRANTED
        elif client in self._shared:
            del self._shared[client]
            code = RELEASED_SHARED
        else:
            return WRONG
        self._serve_waiting()
        return code

    def leave(self, client: object) -> None:
        """Forget a client that is gone."""
        for request in [request for request in self._waiting if request.client is client]:
            self._forget(request)
        while self.release(client) != WRONG:
            pass

    def _holds(self, client: object, word: bytes) -> bool:
        return client in self._shared if word else self._exclusive is client

    def _is_free(self, request: _Request) -> bool:
        if self._exclusive not in (None, request.client):
            return False
        if request.word:
            return all(word == request.word for word in self._shared.values())
        return not self._shared or request.client in self._shared

    def _grant(self, request: _Request) -> None:
        if request.word:
            self._shared[request.client] = request.word
        else:
            self._exclusive = request.client
        request.answer(GRANTED)

    def _serve_waiting(self) -> None:
        for request in list(self._waiting):
            if request in self._waiting and self._is_free(request):
                self._forget(request)
                self._grant(request)
        self._freed()

    def _forget(self, request: _Request) -> None:
        self._waiting.remove(request)
        if request.timer is not None:
            request.timer.cancel()

    def _give_up(self, request: _Request) -> None:
        self._waiting.remove(request)
        request.answer(GRANTED_NOT)
