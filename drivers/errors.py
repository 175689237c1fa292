"""Everything that can go wrong between the controller and an instrument.

::

    InstrumentProblem
      LinkClosed        our own mistake: the link is not open, or has to be reopened first
      LinkBroken        the world: refused, dropped, unreachable
        NoAnswer        nothing, or not enough, came in time
      ReplyError        an answer came and was not understood
      InstrumentError   the instrument reported an error
      SettingRefused    the instrument took another value than it was given
      BeyondLimits      it was asked for what its dialect says it cannot; nothing was sent

After `LinkBroken`, `NoAnswer` and `ReplyError` the link is dirty: it refuses everything until it is reopened, because a
late answer would be taken for the next one. After the others it is still in step. `BeyondLimits` is a `ValueError` too.
"""

from __future__ import annotations

__all__ = [
    "BeyondLimits",
    "InstrumentError",
    "InstrumentProblem",
    "LinkBroken",
    "LinkClosed",
    "NoAnswer",
    "ReplyError",
    "SettingRefused",
]

WORDS = 255  # characters of an instrument's own words: the longest error text of SCPI-99 (from memory)
_CORRECT = "correct the dialect and begin a new run (a resumed one keeps the dialect it began with)"
EXCERPT = 40  # bytes of a reply or command shown to people: half a line of a terminal (arbitrary)


class InstrumentProblem(Exception):
    """Base of all errors of the drivers; `address` and `command` say where."""

    address: str
    command: str
    line: int  # of the exchange log; 0: none was kept

    def _where(self) -> str:
        return f" [exchange log line {self.line}]" if self.line else ""


class LinkClosed(InstrumentProblem):
    """The link was used while closed, or after a failure without being reopened; nothing was sent."""

    def __init__(self, address: str, command: str, reason: str, line: int = 0) -> None:
        super().__init__(address, command, reason, line)
        self.address, self.command, self.reason, self.line = address, command, reason, line

    def __str__(self) -> str:
        return (
            f"{self.address}: {_short(self.command)} was not sent, {self.reason}: reopen the link first{self._where()}"
        )


class LinkBroken(InstrumentProblem):
    """The connection was refused or lost; the link has to be reopened before it is used again."""

    def __init__(
        self, address: str, command: str, reason: str, limit: float = 0.0, received: int = 0, line: int = 0
    ) -> None:
        super().__init__(address, command, reason, limit, received, line)
        self.address, self.command, self.reason = address, command, reason
        self.limit, self.received, self.line = limit, received, line

    def __str__(self) -> str:
        return (
            f"{self.address} lost the connection at {_short(self.command)}: {self.reason} "
            f"(limit {self.limit:g} s, {self.received} bytes came): "
            f"check power, cable and address{self._where()}"
        )


class NoAnswer(LinkBroken):
    """No complete answer came in time; the link has to be reopened before it is used again."""

    def __init__(self, address: str, command: str, limit: float, received: int, line: int = 0) -> None:
        InstrumentProblem.__init__(self, address, command, limit, received, line)
        self.address, self.command, self.limit = address, command, limit
        self.received, self.line, self.reason = received, line, "no answer in time"

    def __str__(self) -> str:
        return (
            f"{self.address} gave no complete answer to {_short(self.command)} within {self.limit:g} s "
            f"({self.received} bytes came): check power, cable and trigger{self._where()}"
        )


class ReplyError(InstrumentProblem):
    """An answer came that was not understood; the link has to be reopened before it is used again."""

    def __init__(
        self, address: str, command: str, expected: str, limit: float, received: int, excerpt: bytes, line: int = 0
    ) -> None:
        excerpt = bytes(excerpt[:EXCERPT])
        super().__init__(address, command, expected, limit, received, excerpt, line)
        self.address, self.command, self.expected, self.limit = address, command, expected, limit
        self.received, self.excerpt, self.line = received, excerpt, line

    def __str__(self) -> str:
        return (
            f"{self.address} answered {_short(self.command)} with {self.received} bytes beginning {self.excerpt!r} "
            f"(limit {self.limit:g} s): expected {self.expected}; check the dialect{self._where()}"
        )


class InstrumentError(InstrumentProblem):
    """The instrument put an error into its queue; the link is in step."""

    def __init__(self, address: str, command: str, number: int, words: str, line: int = 0) -> None:
        super().__init__(address, command, number, words, line)
        self.address, self.command, self.number, self.words, self.line = address, command, number, words, line

    def __str__(self) -> str:
        return (
            f"{self.address} reported error {self.number} {_short(self.words, WORDS)} after {_short(self.command)}: "
            f"check the value asked and the dialect{self._where()}"
        )


class SettingRefused(InstrumentProblem):
    """The value read back is outside what the dialect accepts; the instrument keeps the value found."""

    def __init__(self, address: str, command: str, asked: str, found: str, accepted: str, line: int = 0) -> None:
        super().__init__(address, command, asked, found, accepted, line)
        self.address, self.command, self.asked, self.found = address, command, asked, found
        self.accepted, self.line = accepted, line

    def __str__(self) -> str:
        found = self.found if len(self.found) <= WORDS else self.found[:WORDS] + "..."
        return (
            f"{self.address} was given {self.asked} by {_short(self.command)} and reads back {found} "
            f"(accepted: {self.accepted}): ask for a value the instrument can set, or {_CORRECT}"
            f"{self._where()}"
        )


class BeyondLimits(InstrumentProblem, ValueError):
    """The dialect says that the instrument cannot be set so; nothing was sent, the link is in step."""

    def __init__(self, address: str, command: str, rule: str, line: int = 0) -> None:
        super().__init__(address, command, rule, line)
        self.address, self.command, self.rule, self.line = address, command, rule, line

    def __str__(self) -> str:
        return f"{self.address}: {self.rule}: nothing was sent; ask for what it can, or {_CORRECT}{self._where()}"


def _short(text: str, most: int = EXCERPT) -> str:
    return repr(text if len(text) <= most else text[:most] + "...")
