"""A language as phrases: patterns of whole messages, each with what the instrument behind it does."""

import re
from collections.abc import Callable, Sequence
from typing import Generic, TypeVar

import numpy as np

from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.dynamics import FloatArray
from bandproof.simulated_instruments.scope import Scope
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["NUMBER", "Phrase", "Speech", "codes_of", "number_of", "volts_of"]

NUMBER = r"([-+]?[\d.]+(?:e[-+]?\d+)?)"
HALF = 128  # codes of the 8-bit converter on either side of the middle

D = TypeVar("D", bound=Device)
Phrase = tuple[str, Callable[..., bytes | None]]


class Speech(Generic[D]):
    """What an instrument understands in a language.

    Parameters
    ----------
    device : Device
        Does what is said; what it refuses stands in its error queue, under the numbers of SCPI-99.
    """

    def __init__(self, device: D) -> None:
        self.device = device
        self._phrases = [(re.compile(pattern), action) for pattern, action in self.phrases()]

    def phrases(self) -> Sequence[Phrase]:
        """Return patterns of messages and what is done, called with the groups; it returns the reply or None."""
        raise NotImplementedError

    def interpret(self, message: bytes, replies: list[bytes]) -> None:
        """Do what a message says and add the reply; what is no phrase is a command error (ScpiError)."""
        text = message.decode("latin-1").strip()
        for pattern, action in self._phrases:
            if found := pattern.fullmatch(text):
                reply = action(*found.groups())
                if reply is not None and self.device.at < float("inf"):
                    replies.append(reply)
                return
        raise ScpiError(-113)

    def finish(self, replies: list[bytes]) -> bytes:
        """Return the reply as it goes over the wire."""
        return replies[0] + b"\n"

    def do(self, text: str) -> None:
        """Have the instrument do something told in SCPI-99."""
        self.device.run_units(text.encode("ascii"), [])

    def is_busy(self) -> bool:
        """Whether an operation is under way."""
        return self.device.at < self.device.status.pending_until

    def oldest_error(self) -> int:
        """Take the oldest entry off the error queue and return its SCPI-99 number, 0 where there is none."""
        return int(self.device.status.errors.pop().split(b",")[0])


def number_of(value: float, spec: str = ".12g") -> bytes:
    """Return a number as text."""
    return format(value, spec).encode("ascii")


def volts_of(scope: Scope, channel: int) -> FloatArray:
    """Return a channel's record (from 0) in V at the input, empty while it is not complete."""
    volts = scope.record(channel)
    return np.zeros(0) if volts is None else volts


def codes_of(scope: Scope, channel: int) -> FloatArray:
    """Return a channel's record (from 0) as codes of its converter, -128 to 127."""
    full, offset = scope.value("range", channel + 1), scope.value("offset", channel + 1)
    return np.asarray(np.rint((volts_of(scope, channel) - offset) * (HALF / full)).clip(-HALF, HALF - 1))
