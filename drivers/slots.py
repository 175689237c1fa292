"""The slots of a dialect: what can differ between instruments, as dataclasses that a TOML file fills."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any, Literal

from bandproof.drivers.scpi import ByteOrder, Encoding
from bandproof.drivers.session import Habits

__all__ = [
    "Acquisition",
    "Amplitude",
    "Choice",
    "Dialect",
    "GeneratorDialect",
    "Identity",
    "Load",
    "Number",
    "Overload",
    "ScopeDialect",
    "Shape",
    "SupplyDialect",
    "SwitchDialect",
    "Toggle",
    "Transfer",
]

Range = tuple[float, float]


def _template(*names: str, needs: tuple[str, ...] = ()) -> Any:
    """Return a slot for a command that may contain the placeholders named; empty: no such command."""
    return field(default="", metadata={"names": names, "needs": needs})


@dataclass(frozen=True, slots=True)
class Identity:
    """Which instrument this is: `pattern` is searched in the answer to `query`."""

    query: str = "*IDN?"
    pattern: str = field(default="", metadata={"pattern": True})
    reset: str = "*RST"
    clear: str = "*CLS"


@dataclass(frozen=True, slots=True)
class Number:
    """A setting that is a number.

    Parameters
    ----------
    set : str
        Command with ``{value}`` and, on a scope, ``{channel}``.
    query : str
        Query of the value really used.
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
        Which of the answer's comma-separated fields is the number, 0 the first.
    """

    set: str = _template("value", "channel", needs=("value",))
    query: str = _template("channel")
    format: str = field(default=".9g", metadata={"format": True})
    unit: float = 1.0
    reciprocal: bool = False
    limits: Range = (-math.inf, math.inf)
    readback: Range = (0.999999, 1.000001)
    absolute: float = 0.0
    place: int = 0


@dataclass(frozen=True, slots=True)
class Amplitude(Number):
    """A sine's amplitude; `meaning` is what the instrument's number counts."""

    meaning: Literal["peak", "peak-to-peak", "rms"] = "peak"


@dataclass(frozen=True, slots=True)
class Load(Number):
    """The load a generator assumes; `fixed` is its ohms if it cannot be told, `high` its word for no load."""

    fixed: float = math.inf
    high: str = ""


@dataclass(frozen=True, slots=True)
class Choice:
    """A setting that is one of some words; `words` gives the instrument's word for each of ours."""

    set: str = _template("value", "channel", needs=("value",))
    query: str = _template("channel")
    words: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Toggle:
    """A setting that is on or off; `is_on` and `is_off` are the answers to the query."""

    on: str = _template("channel")
    off: str = _template("channel")
    query: str = _template("channel")
    is_on: str = "1"
    is_off: str = "0"


@dataclass(frozen=True, slots=True)
class Shape:
    """Commands that make a generator's output a steady sine."""

    sine: tuple[str, ...] = ()
    query: str = ""
    is_sine: str = ""


@dataclass(frozen=True, slots=True)
class Acquisition:
    """How one record is taken.

    Parameters
    ----------
    prepare : tuple of str
        Sent once after opening: sample mode, trigger, record format.
    start : str
        Starts one immediate acquisition.
    complete : str
        Query of its completion.
    completes : {"awaited", "polled"}
        The query is answered when the record is complete, or at once and asked again.
    is_complete : str
        The answer that says so.
    poll : float
        Seconds between two questions.
    abort : str
        Ends an acquisition that does not complete; sent after reopening.
    latency : float
        Seconds from start to the first sample.
    """

    prepare: tuple[str, ...] = ()
    start: str = ""
    complete: str = "*OPC?"
    completes: Literal["awaited", "polled"] = "awaited"
    is_complete: str = "1"
    poll: float = 0.01
    abort: str = ""
    latency: float = 0.05


@dataclass(frozen=True, slots=True)
class Transfer:
    """How a record is read and scaled: volts = (code - origin) * scale + sign * offset.

    Parameters
    ----------
    before : tuple of str
        Sent before each channel is read (selecting the source).
    read : str
        Query of the samples, with ``{channel}``.
    framing : {"block", "line"}
        A block (IEEE 488.2), or a line of text.
    terminated : bool
        A newline follows the block.
    encoding, byte_order
        Of one sample.
    scaling : {"volts", "query", "preamble"}
        Samples are volts; scale, offset and origin are asked for one by one; or they stand in a preamble.
    scale, offset, origin : str
        Queries, with ``{channel}``; an empty offset or origin is 0.
    preamble : str
        Query, with ``{channel}``.
    separator : str
        Between the preamble's fields.
    scale_field, offset_field, origin_field : int
        Places in the preamble, 0 the first; -1: not there (offset and origin are then 0).
    offset_sign : {1, -1}
        Whether the offset is added or taken away.
    rate : float
        Bytes per second, at least; for the time limit.
    """

    before: tuple[str, ...] = field(default=(), metadata={"names": ("channel",)})
    read: str = _template("channel")
    framing: Literal["block", "line"] = "block"
    terminated: bool = True
    encoding: Encoding = "real32"
    byte_order: ByteOrder = "big"
    scaling: Literal["volts", "query", "preamble"] = "volts"
    scale: str = _template("channel")
    offset: str = _template("channel")
    origin: str = _template("channel")
    preamble: str = _template("channel")
    separator: str = ","
    scale_field: int = -1
    offset_field: int = -1
    origin_field: int = -1
    offset_sign: Literal[1, -1] = 1
    rate: float = 1e5


@dataclass(frozen=True, slots=True)
class Overload:
    """How an overload is known.

    Parameters
    ----------
    by : {"end codes", "query"}
        Samples at the end of the converter, or the instrument says so.
    bits : int
        Of the converter. Samples in volts: 0 counts as 8. Integer samples: fewer than the codes have, as of an 8-bit
        converter in the upper half of 16 bits; 0: each code is a step of the converter.
    low, high : float
        End codes of integer samples; equal: none are known.
    query : str
        With ``{channel}``.
    is_overloaded : str
        The answer that says so.
    """

    by: Literal["end codes", "query"] = "end codes"
    bits: int = 0
    low: float = 0.0
    high: float = 0.0
    query: str = _template("channel")
    is_overloaded: str = "1"


@dataclass(frozen=True, slots=True)
class GeneratorDialect:
    """What a generator understands."""

    title: str
    kind: Literal["generator"]
    frequency: Number
    amplitude: Amplitude
    offset: Number
    output: Toggle
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    shape: Shape = Shape()
    load: Load = Load()


@dataclass(frozen=True, slots=True)
class ScopeDialect:
    """What a scope or digitizer understands; `channels` are its names of inputs 1, 2, ..."""

    title: str
    kind: Literal["scope"]
    range: Number
    duration: Number
    points: Number
    interval: Number
    acquisition: Acquisition
    transfer: Transfer
    overload: Overload
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    channels: tuple[str, ...] = ("1", "2")
    offset: Number = Number()
    coupling: Choice = Choice()
    bandwidth_limit: Toggle = Toggle()
    probe_factor: Number = Number()


@dataclass(frozen=True, slots=True)
class SwitchDialect:
    """What a switch understands.

    Parameters
    ----------
    close, query : str
        With ``{route}``.
    is_closed : str
        The query's answer for a closed route.
    open_all : str
        Opens every route.
    exclusive : bool
        Closing a route opens the others; if not, all are opened before.
    """

    title: str
    kind: Literal["switch"]
    close: str = _template("route", needs=("route",))
    query: str = _template("route", needs=("route",))
    open_all: str = ""
    is_closed: str = "1"
    exclusive: bool = True
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)


@dataclass(frozen=True, slots=True)
class SupplyDialect:
    """What a supply understands; `channels` are its names of the outputs 1, 2, ...

    Parameters
    ----------
    voltage, current_limit : Number
        Settings, with ``{channel}``; V and A.
    current : Number
        The measured current; only its query counts.
    output : Toggle
        With ``{channel}`` where each output has a switch of its own; without, one command switches all.
    """

    title: str
    kind: Literal["supply"]
    voltage: Number
    current_limit: Number
    current: Number
    output: Toggle
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    channels: tuple[str, ...] = ("1", "2")


Dialect = GeneratorDialect | ScopeDialect | SwitchDialect | SupplyDialect
