"""Faults by name at a chosen step: what real instruments do at three in the morning.

An incident strikes once, on the first attempt of its step, unless it is persistent: then it strikes each attempt. What
it does to a connection ends with that connection, so that closing, reopening and measuring again succeeds.

A condition holds from the first exchange of its step until the bench ends, whatever is reopened or measured again.
"""

from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import asdict, dataclass
from types import MappingProxyType
from typing import Any

from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["CONDITIONS", "DESCRIPTIONS", "NAMES", "NO_CONDITIONS", "PLACES", "Fault", "FaultPlan"]

SILENT, LATE, DROPPED = "silent-instrument", "late-answer", "dropped-connection"
TRUNCATED, LYING = "truncated-block", "lying-block-length"
ENDLESS, DRIPPING, GARBAGE = "endless-reply", "dripping-reply", "garbage-bytes"
ERROR_ENTRY, UNFINISHED = "error-entry", "unfinished-acquisition"
OFF_FREQUENCY, OPEN_OUTPUT, WRONG_LOAD = "wrong-frequency", "open-output", "wrong-load-assumption"
SWAPPED, WRONG_PROBE, HUM = "swapped-channels", "wrong-probe-factor", "strong-hum"
UNPOWERED, CLIPPED, DRIFT = "unpowered-board", "clipped-stage", "drift"

BLOCK_FAULTS = frozenset({TRUNCATED, LYING})
REPLY_FAULTS = frozenset({SILENT, LATE, DROPPED, ENDLESS, DRIPPING, GARBAGE})
CONDITIONS = frozenset({OFF_FREQUENCY, OPEN_OUTPUT, WRONG_LOAD, SWAPPED, WRONG_PROBE, HUM, UNPOWERED, CLIPPED, DRIFT})
NO_CONDITIONS: Mapping[str, float] = MappingProxyType({})

_ANY, _SCOPE, _GENERATOR = ("scope", "generator", "switch"), ("scope",), ("generator",)
_WIRING, _BOARD = ("wiring",), ("board",)
_TABLE = {  # name: where it can be, the usual place first; one line of description
    SILENT: (_ANY, "an instrument answers nothing until it is reopened"),
    LATE: (_ANY, "an answer comes only when the next message has been sent"),
    DROPPED: (_ANY, "the connection ends instead of an answer"),
    TRUNCATED: (_SCOPE, "half a record comes, then nothing until the scope is reopened"),
    LYING: (_SCOPE, "a record announces 1000 bytes more than come"),
    ENDLESS: (_ANY, "a reply goes on for ever without its end"),
    DRIPPING: (_ANY, "a reply comes a byte each 0.3 s"),
    GARBAGE: (_ANY, "a line of meaningless bytes comes instead of an answer"),
    ERROR_ENTRY: (_ANY, "an entry appears in the error queue for no reason"),
    UNFINISHED: (_SCOPE, "an acquisition never completes"),
    OFF_FREQUENCY: (_GENERATOR, "the generator runs 2 % above the frequency it answers"),
    OPEN_OUTPUT: (_GENERATOR, "the generator's output is disconnected, and it answers that it is on"),
    WRONG_LOAD: (_GENERATOR, "the generator assumes 50 ohm: the open output gives twice the volts it answers"),
    SWAPPED: (_WIRING, "the probes of the scope's two channels are exchanged"),
    WRONG_PROBE: (_WIRING, "a 10:1 probe taken for 1:1: channel 2 reads a tenth"),
    HUM: (_WIRING, "50 mV peak of mains hum on both channels"),
    UNPOWERED: (_BOARD, "the board has no supply: op-amp outputs stay at 0 V"),
    CLIPPED: (_BOARD, "op-amp outputs reach no more than 0.6 V"),
    DRIFT: (_SCOPE, "the gain of channel 2 grows by 5 % a minute"),
}
NAMES = tuple(sorted(_TABLE))
PLACES = {name: _TABLE[name][0] for name in NAMES}
DESCRIPTIONS = {name: _TABLE[name][1] for name in NAMES}
_EVERYWHERE = (*_ANY, *_WIRING, *_BOARD)


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault.

    Attributes
    ----------
    name : str
        One of NAMES.
    step : int
        Step, as the controller numbers them, during which it strikes, or from which on it holds.
    instrument : str
        One of the PLACES of its name: generator, scope, switch, wiring or board; empty: the first of them.
    persistent : bool
        Strikes every attempt, so that no recovery can succeed. Conditions hold either way.
    """

    name: str
    step: int
    instrument: str = ""
    persistent: bool = False

    def __post_init__(self) -> None:
        if self.name not in NAMES:
            raise ValueError(f"there is no fault {self.name!r}; there are {', '.join(NAMES)}")
        places = PLACES[self.name]
        if not self.instrument:
            object.__setattr__(self, "instrument", places[0])
        if self.instrument not in _EVERYWHERE:
            raise ValueError(f"instrument must be one of {', '.join(_EVERYWHERE)}, found {self.instrument!r}")
        if self.instrument not in places:
            raise ValueError(f"{self.name} is a fault of the {' or '.join(places)}, not of the {self.instrument}")
        if self.step < 0:
            raise ValueError(f"step must not be negative, found {self.step!r}")

    def as_plain(self) -> dict[str, Any]:
        """Return a dictionary for JSON."""
        return asdict(self)

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> "Fault":
        """Return what `as_plain` gave."""
        return cls(**plain)


class FaultPlan:
    """Which incidents are due, which have struck, and which conditions hold.

    Parameters
    ----------
    faults : iterable of Fault
    timebase : Timebase
        Names step and attempt; in real time, where nobody does, records are counted by `count_record` instead.

    Attributes
    ----------
    conditions : dict
        Conditions that hold, with the instant in s since when; the same object always, so that it can be handed on.
    """

    def __init__(self, faults: Iterable[Fault], timebase: Timebase) -> None:
        self._faults, self._timebase, self._records = tuple(faults), timebase, 0
        self._struck: dict[int, tuple[int, int]] = {}
        self._followers: list[Callable[[float], None]] = []
        self.conditions: dict[str, float] = {}

    def count_record(self, at: float) -> None:
        """Note that a record was armed; in real time that is the next step."""
        self._records += 1
        self.look(at)

    def follow(self, tell: Callable[[float], None]) -> None:
        """Have `tell` called with the instant, in s, when conditions begin to hold."""
        self._followers.append(tell)

    def look(self, now: float) -> None:
        """Let the conditions of which the step is reached begin."""
        if not self._faults:
            return
        step, _ = self._mark()
        waiting = {fault.name for fault in self._faults if fault.name in CONDITIONS and fault.step <= step}
        begun = waiting - self.conditions.keys()
        self.conditions.update(dict.fromkeys(sorted(begun), now))
        if begun:
            for tell in self._followers:
                tell(now)

    def due(self, instrument: str, names: Collection[str]) -> str | None:
        """Return the name of an incident that strikes now, and remember that it did."""
        if not self._faults:
            return None
        step, attempt = self._mark()
        for index, fault in enumerate(self._faults):
            if fault.name not in names or fault.instrument != instrument or fault.step != step:
                continue
            if index in self._struck and (not fault.persistent or self._struck[index] == (step, attempt)):
                continue
            self._struck[index] = (step, attempt)
            return fault.name
        return None

    def _mark(self) -> tuple[int, int]:
        return self._timebase.mark() or (self._records, 0)
