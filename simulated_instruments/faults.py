"""Faults by name at a chosen step: what real instruments do at three in the morning.

A fault strikes once, on the first attempt of its step, unless it is persistent: then it strikes each attempt. What it
does to a connection ends with that connection, so that closing, reopening and measuring again succeeds.
"""

from collections.abc import Collection, Iterable, Mapping
from dataclasses import asdict, dataclass
from typing import Any

from bandproof.simulated_instruments.timebase import Timebase

__all__ = ["BLOCK_FAULTS", "ERROR_ENTRY", "NAMES", "REPLY_FAULTS", "UNFINISHED", "Fault", "FaultPlan"]

SILENT, LATE, DROPPED = "silent-instrument", "late-answer", "dropped-connection"
TRUNCATED, LYING = "truncated-block", "lying-block-length"
ENDLESS, DRIPPING, GARBAGE = "endless-reply", "dripping-reply", "garbage-bytes"
ERROR_ENTRY, UNFINISHED = "error-entry", "unfinished-acquisition"

BLOCK_FAULTS = frozenset({TRUNCATED, LYING})
REPLY_FAULTS = frozenset({SILENT, LATE, DROPPED, ENDLESS, DRIPPING, GARBAGE})
NAMES = tuple(sorted(BLOCK_FAULTS | REPLY_FAULTS | {ERROR_ENTRY, UNFINISHED}))
_INSTRUMENTS = ("generator", "scope", "switch")


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault.

    Attributes
    ----------
    name : str
        One of NAMES.
    step : int
        Step, as the controller numbers them, during which it strikes.
    instrument : str
        generator, scope or switch; the faults of blocks and acquisitions are the scope's.
    persistent : bool
        Strikes every attempt, so that no recovery can succeed.
    """

    name: str
    step: int
    instrument: str = "scope"
    persistent: bool = False

    def __post_init__(self) -> None:
        if self.name not in NAMES:
            raise ValueError(f"there is no fault {self.name!r}; there are {', '.join(NAMES)}")
        if self.instrument not in _INSTRUMENTS:
            raise ValueError(f"instrument must be one of {', '.join(_INSTRUMENTS)}, found {self.instrument!r}")
        if self.instrument != "scope" and self.name in BLOCK_FAULTS | {UNFINISHED}:
            raise ValueError(f"{self.name} is a fault of the scope, not of the {self.instrument}")
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
    """Which faults are due, and which have struck.

    Parameters
    ----------
    faults : iterable of Fault
    timebase : Timebase
        Names step and attempt; in real time, where nobody does, records are counted by `count_record` instead.
    """

    def __init__(self, faults: Iterable[Fault], timebase: Timebase) -> None:
        self._faults, self._timebase, self._records = tuple(faults), timebase, 0
        self._struck: dict[int, tuple[int, int]] = {}

    def count_record(self) -> None:
        """Note that a record was armed; in real time that is the next step."""
        self._records += 1

    def due(self, instrument: str, names: Collection[str]) -> str | None:
        """Return the name of a fault that strikes now, and remember that it did."""
        if not self._faults:
            return None
        step, attempt = self._timebase.mark() or (self._records, 0)
        for index, fault in enumerate(self._faults):
            if fault.name not in names or fault.instrument != instrument or fault.step != step:
                continue
            if index in self._struck and (not fault.persistent or self._struck[index] == (step, attempt)):
                continue
            self._struck[index] = (step, attempt)
            return fault.name
        return None
