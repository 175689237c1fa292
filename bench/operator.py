"""The person at the bench, asked for what no instrument can do; absent where nobody can answer."""

from collections.abc import Callable
from typing import Protocol

from bandproof.bench.errors import OperatorNeeded, Stopped
from bandproof.bench.stop import Stop

__all__ = ["Absent", "AtTerminal", "Operator"]


class Operator(Protocol):
    """Somebody who does what is asked and confirms it."""

    def confirm(self, request: str) -> None:
        """Return when the request was carried out.

        Raises
        ------
        OperatorNeeded
            Nobody can.
        Stopped
            The person asked to stop.
        """


class Absent:
    """Nobody: every request is refused."""

    def confirm(self, request: str) -> None:
        """Raise OperatorNeeded."""
        raise OperatorNeeded(request)


class AtTerminal:
    """A person at a terminal, asked with one line and answering with Enter."""

    def __init__(self, ask: Callable[[str], str], stop: Stop) -> None:
        self._ask, self._stop = ask, stop

    def confirm(self, request: str) -> None:
        """Print the request and wait for Enter; end of input counts as nobody there."""
        try:
            with self._stop.at_once():
                answer = self._ask(f"{request}  [Enter when done, q to stop] ")
        except EOFError as nobody:
            raise OperatorNeeded(request) from nobody
        if answer.strip().lower().startswith("q"):
            raise Stopped("the operator")
