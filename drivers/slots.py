"""The slots of a dialect: what can differ between instruments, as dataclasses that a TOML file fills."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Literal

from bandproof.drivers.quantities import (
    Amplitude,
    CurrentLimit,
    Duration,
    Frequency,
    Interval,
    Level,
    Load,
    Middle,
    Number,
    Peak,
    Points,
    Range,
    Voltage,
    numbered,
    template,
    worded,
)
from bandproof.drivers.scpi import ByteOrder, Encoding
from bandproof.drivers.session import Habits

__all__ = [
    "Acquisition",
    "Amplitude",
    "Choice",
    "Coupling",
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
    "Waveform",
]


@dataclass(frozen=True, slots=True)
class Identity:
    """Which instrument this is: `pattern` is searched in the answer to `query`."""

    query: str = "*IDN?"
    pattern: str = field(default="", metadata={"pattern": True})
    reset: str = "*RST"
    clear: str = "*CLS"


@dataclass(frozen=True, slots=True)
class Choice:
    """A setting that is one of some words; `words` gives its word for each of ours, `answer` is as a number's."""

    set: str = template("value", "channel", needs=("value",))
    query: str = template("channel")
    answer: str = numbered("channel")
    words: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Coupling(Choice):
    """Of a scope's input."""

    words: dict[str, str] = field(default_factory=lambda: {"DC": "DC", "AC": "AC"})


@dataclass(frozen=True, slots=True)
class Toggle:
    """A setting that is on or off; `is_on` and `is_off` are the answers to the query."""

    on: str = template("channel")
    off: str = template("channel")
    query: str = template("channel")
    is_on: str = worded("1", "channel")
    is_off: str = worded("0", "channel")


@dataclass(frozen=True, slots=True)
class Shape:
    """Commands that make a generator's output a steady sine."""

    sine: tuple[str, ...] = ()
    query: str = ""
    is_sine: str = worded("")


@dataclass(frozen=True, slots=True)
class Waveform:
    """How one period of an arbitrary waveform is uploaded and played.

    Parameters
    ----------
    prepare : tuple of str
        Sent before the upload: the format of the data, a place for them.
    upload : str
        With ``{block}`` (IEEE 488.2) or ``{values}`` (numbers as text), perhaps ``{points}``, their count.
    encoding, byte_order
        Of one sample in a block; ``ascii`` for values.
    full : float
        The number that stands for +1: 32767 for codes of 16 bits.
    format, separator : str
        Of values: Python's number format, and what stands between them.
    points : str
        Query of how many points the instrument has, compared with those sent; empty: not compared.
    limits : (low, high)
        How many points it takes.
    select : tuple of str
        Commands that make the output this waveform.
    query, is_selected : str
        Query of the shape, the answer that says so.
    rate, latency : float
        Bytes per second, at least, and seconds, at most, besides; for the time limit.
    """

    prepare: tuple[str, ...] = ()
    upload: str = template("block", "values", "points")
    encoding: Literal["ascii", "real32", "real64", "int16"] = "real32"
    byte_order: ByteOrder = "big"
    full: float = 1.0
    format: str = field(default=".7g", metadata={"format": True})
    separator: str = ","
    points: str = ""
    limits: Range = (2, math.inf)
    select: tuple[str, ...] = ()
    query: str = ""
    is_selected: str = worded("")
    rate: float = 1e5
    latency: float = 1.0


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
    is_complete: str = worded("1")
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
    scale_answer, offset_answer, origin_answer : str
        Templates of the answers to these queries, or of the whole preamble, where a place does not do:
        ``{any}STEP {value};{any}``.
    scale_unit, offset_unit : float
        V in one of its units.
    offset_sign : {1, -1}
        Whether the offset is added or taken away.
    rate : float
        Bytes per second, at least; for the time limit.
    """

    before: tuple[str, ...] = field(default=(), metadata={"names": ("channel",)})
    read: str = template("channel")
    framing: Literal["block", "line"] = "block"
    terminated: bool = True
    encoding: Encoding = "real32"
    byte_order: ByteOrder = "big"
    scaling: Literal["volts", "query", "preamble"] = "volts"
    scale: str = template("channel")
    offset: str = template("channel")
    origin: str = template("channel")
    preamble: str = template("channel")
    separator: str = ","
    scale_field: int = -1
    offset_field: int = -1
    origin_field: int = -1
    scale_answer: str = numbered("channel")
    offset_answer: str = numbered("channel")
    origin_answer: str = numbered("channel")
    scale_unit: float = 1.0
    offset_unit: float = 1.0
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
    query: str = template("channel")
    is_overloaded: str = worded("1", "channel")


@dataclass(frozen=True, slots=True)
class GeneratorDialect:
    """What a generator understands."""

    title: str
    kind: Literal["generator"]
    frequency: Frequency
    amplitude: Amplitude
    offset: Level
    output: Toggle
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    shape: Shape = Shape()
    load: Load = field(default_factory=Load)
    waveform: Waveform = Waveform()


@dataclass(frozen=True, slots=True)
class ScopeDialect:
    """What a scope or digitizer understands; `channels` are its names of inputs 1, 2, ..."""

    title: str
    kind: Literal["scope"]
    range: Peak
    duration: Duration
    points: Points
    interval: Interval
    acquisition: Acquisition
    transfer: Transfer
    overload: Overload
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    channels: tuple[str, ...] = ("1", "2")
    offset: Middle = field(default_factory=Middle)
    coupling: Coupling = Coupling()
    bandwidth_limit: Toggle = Toggle()
    probe_factor: Number = field(default_factory=Number)


@dataclass(frozen=True, slots=True)
class SwitchDialect:
    """What a switch understands.

    Parameters
    ----------
    close, query : str
        With ``{route}``; a query without it asks which route is closed.
    is_closed : str
        The query's answer for a closed route, perhaps with ``{route}``.
    open_all : str
        Opens every route.
    exclusive : bool
        Closing a route opens the others; if not, all are opened before.
    """

    title: str
    kind: Literal["switch"]
    close: str = template("route", needs=("route",))
    query: str = template("route")
    open_all: str = ""
    is_closed: str = worded("1", "route")
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
    voltage: Voltage
    current_limit: CurrentLimit
    current: Number
    output: Toggle
    identity: Identity = Identity()
    habits: Habits = field(default_factory=Habits)
    channels: tuple[str, ...] = ("1", "2")


Dialect = GeneratorDialect | ScopeDialect | SwitchDialect | SupplyDialect
