"""Stopping on request: Ctrl-C, SIGTERM and a closed terminal set a flag, read between two exchanges."""

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from bandproof.bench.errors import Stopped
from bandproof.bench.system import STOP_SIGNALS

__all__ = ["Stop", "watching_signals"]


class Stop:
    """The flag. ``check`` raises Stopped once a stop was requested."""

    def __init__(self) -> None:
        self.requested = ""
        self._at_once = False

    @contextmanager
    def at_once(self) -> Iterator[None]:
        """While inside, a request raises Stopped at once: for waiting on a person, with no exchange in flight."""
        self._at_once = True
        try:
            self.check()
            yield
        finally:
            self._at_once = False

    def request(self, how: str) -> None:
        """Ask for a stop; the first reason is kept."""
        self.requested = self.requested or how
        if self._at_once:
            self.check()

    def check(self) -> None:
        """Raise Stopped if a stop was requested."""
        if self.requested:
            raise Stopped(self.requested)


@contextmanager
def watching_signals(stop: Stop) -> Iterator[None]:
    """While inside, the signals that end a process request a stop instead of ending it where it stands."""

    def on_signal(number: int, _frame: FrameType | None) -> None:
        stop.request("Ctrl-C" if number == signal.SIGINT else signal.Signals(number).name)

    before = {number: signal.signal(number, on_signal) for number in STOP_SIGNALS}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
