"""The slots that are numbers, and what a dialect that leaves a line out has there: the values of the blank dialects."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any, Literal

__all__ = [
    "Amplitude",
    "CurrentLimit",
    "Duration",
    "Frequency",
    "Interval",
    "Level",
    "Load",
    "Middle",
    "Number",
    "Peak",
    "Points",
    "Range",
    "Voltage",
    "numbered",
    "template",
    "worded",
]

Range = tuple[float, float]


def template(*names: str, needs: tuple[str, ...] = ()) -> Any:
    """Return a slot for a command that may contain the placeholders named; empty: no such command."""
    return field(default="", metadata={"names": names, "needs": needs})


def numbered(*names: str) -> Any:
    """Return a slot for the template of an answer with ``{value}`` in it; empty: the answer is the value."""
    return template("value", "any", *names, needs=("value",))


def worded(words: str, *names: str) -> Any:
    """Return a slot for the template of an answer that is compared; it may contain ``{any}`` and the names given."""
    return field(default=words, metadata={"names": ("any", *names)})


@dataclass(frozen=True, slots=True)
class Number:
    """A setting that is a number.

    Parameters
    ----------
    set : str
        Command with ``{value}`` and, on a scope, ``{channel}``.
    query : str
        Query of the value really used.
    answer : str
        Its answer, where that is no bare number: ``TONE {value} kHz``.
    format : str
        Python's format of the number, ``.9g`` or ``.3f`` or ``d``.
    unit : float
        How many of ours (SI) make one of the instrument's: 1000 if it counts in kHz, 4 if it is told volts per
        division and we mean the peak over four divisions.
    reciprocal : bool
        The instrument is told 1 / value (a sample rate for a sample interval).
    limits : (low, high)
        SI; what the instrument can be asked for.
    readback : (low, high)
        Accepted ratio of the value read back to the value asked.
    absolute : float
        SI; a difference this small is accepted whatever its ratio.
    place : int
        Which of the answer's comma-separated fields is the number, 0 the first, where `answer` is empty.
    """

    set: str = template("value", "channel", needs=("value",))
    query: str = template("channel")
    answer: str = numbered("channel")
    format: str = field(default=".9g", metadata={"format": True})
    unit: float = 1.0
    reciprocal: bool = False
    limits: Range = (-math.inf, math.inf)
    readback: Range = (0.999999, 1.000001)
    absolute: float = 0.0
    place: int = 0


@dataclass(frozen=True, slots=True)
class Frequency(Number):
    """A sine's frequency."""

    format: str = field(default=".12g", metadata={"format": True})


@dataclass(frozen=True, slots=True)
class Amplitude(Number):
    """A sine's amplitude; `meaning` is what the instrument's number counts."""

    readback: Range = (0.99, 1.01)
    absolute: float = 1e-4
    meaning: Literal["peak", "peak-to-peak", "rms"] = "peak"


@dataclass(frozen=True, slots=True)
class Level(Number):
    """The direct voltage under a sine."""

    readback: Range = (0.99, 1.01)
    absolute: float = 1e-3


@dataclass(frozen=True, slots=True)
class Load(Number):
    """The load a generator assumes; `fixed` is its ohms if it cannot be told, `high` its word for no load."""

    fixed: float = math.inf
    high: str = ""


@dataclass(frozen=True, slots=True)
class Peak(Number):
    """A scope's range either side of its middle; it may choose the next larger one."""

    readback: Range = (0.9999, 2.6)


@dataclass(frozen=True, slots=True)
class Middle(Number):
    """The voltage at the middle of a scope's range."""

    readback: Range = (0.9, 1.1)
    absolute: float = 0.01


@dataclass(frozen=True, slots=True)
class Duration(Number):
    """Of a record; what it is rounded to does no harm, because interval and points are read back."""

    readback: Range = (0.5, 2.0)


@dataclass(frozen=True, slots=True)
class Interval(Number):
    """Between two samples; it may be set instead of the duration, and does no harm if rounded: it is read back."""

    readback: Range = (0.5, 2.0)


@dataclass(frozen=True, slots=True)
class Points(Number):
    """Samples of a record; `fixed` is their number if it can neither be told nor asked, 0 if it can."""

    fixed: int = 0

    format: str = field(default="d", metadata={"format": True})
    readback: Range = (0.5, 2.0)


@dataclass(frozen=True, slots=True)
class Voltage(Number):
    """Of a supply's output."""

    readback: Range = (0.99, 1.01)
    absolute: float = 0.02


@dataclass(frozen=True, slots=True)
class CurrentLimit(Number):
    """Of a supply's output."""

    readback: Range = (0.98, 1.02)
    absolute: float = 0.002
