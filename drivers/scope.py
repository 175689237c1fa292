"""A two-channel scope or digitizer: channels, record, acquisition, volts at the probe tips."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from math import inf
from typing import TYPE_CHECKING, Literal

from bandproof.drivers.answers import is_like
from bandproof.drivers.errors import SettingRefused
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.record import read_channel
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.slots import ScopeDialect

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

__all__ = ["ChannelSetting", "Coupling", "Record", "RecordSetting", "Scope"]

Coupling = Literal["DC", "AC"]

_MOST_POINTS = 10_000_000  # of a record, 80 MB a channel; arbitrary
_FAR = 10.0  # times the duration asked; arbitrary, far beyond any scope's rounding


@dataclass(frozen=True, slots=True)
class ChannelSetting:
    """How a channel is set, as read back; `range` (peak) and `offset` are volts at the probe tip."""

    range: float
    offset: float
    coupling: Coupling
    bandwidth_limit: bool
    probe_factor: float


@dataclass(frozen=True, slots=True)
class RecordSetting:
    """The record as read back; `duration` is points times sample interval, in s."""

    sample_interval: float
    points: int
    duration: float


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """One acquisition of both channels.

    Parameters
    ----------
    volts : (2, N) float64 array
        At the probe tips; read-only.
    sample_interval : float
        s, the one really used.
    overload : (2,) bool array
        A sample stands at the end of the converter; read-only.
    lsb : (2,) float64 array
        V at the probe tip, one code of the converter; read-only.
    """

    volts: NDArray[np.float64]
    sample_interval: float
    overload: NDArray[np.bool_]
    lsb: NDArray[np.float64]


class Scope(Instrument):
    """A scope as its dialect describes it.

    Parameters
    ----------
    session : Session
        The conversation.
    dialect : ScopeDialect
        What it understands.

    Notes
    -----
    Every method may raise `LinkClosed`, `LinkBroken`, `NoAnswer`, `ReplyError`, `InstrumentError` and `SettingRefused`.
    A scope drives nothing: after any of them the board is as it was, only the scope's settings may be unknown.
    """

    def __init__(self, session: Session, dialect: ScopeDialect) -> None:
        super().__init__(session, dialect.identity)
        self.dialect = dialect
        self._channels: dict[int, ChannelSetting] = {}
        self._record: RecordSetting | None = None

    def be_safe(self) -> None:
        """Do nothing: a scope drives nothing."""

    def set_channel(
        self,
        channel: int,
        *,
        range: float,  # noqa: A002 -- the trade's word
        offset: float = 0.0,
        coupling: Coupling = "DC",
        bandwidth_limit: bool = True,
        probe_factor: float = 1.0,
    ) -> ChannelSetting:
        """Set a channel and return its setting as read back.

        Parameters
        ----------
        channel : {1, 2}
            First or second input.
        range, offset : float
            V at the probe tip, peak and middle.
        coupling : {"DC", "AC"}
            Of the input.
        bandwidth_limit : bool
            Ignored where the dialect has no command for it; the setting returned then says False.
        probe_factor : float
            10 for a 10:1 probe; multiplied in software where the instrument cannot.
        """
        options = {"range": range, "offset": offset, "coupling": coupling}
        more = {"bandwidth_limit": bandwidth_limit, "probe_factor": probe_factor}
        self._remember("channel", channel, partial(self.set_channel, channel, **options, **more))  # type: ignore[arg-type]
        name = self.name_of(channel)
        self._channels.pop(channel, None)
        self._once("prepare", "", self.prepare)
        found_probe = self._set_probe(name, probe_factor)
        self._set_coupling(name, coupling)
        limited = self._set_bandwidth(name, bandwidth_limit)
        software = 1.0 if self.dialect.probe_factor.set else probe_factor
        found_range = self._set_range(name, range / software) * software
        found_offset = self._set_offset(name, offset / software) * software
        setting = ChannelSetting(found_range, found_offset, coupling, limited, found_probe)
        self._channels[channel] = setting
        return setting

    def set_record(self, duration: float, points: int) -> RecordSetting:
        """Set the record's duration in s and its points; return what is really used."""
        self._remember("record", "", partial(self.set_record, duration, points))
        self._record = None
        text = f"{duration!r} {points}"
        self._record = self._once("record", text, partial(self._set_and_read_record, duration, points))
        return self._record

    def acquire(self) -> Record:
        """Take one record of both channels, at once, and return it in volts at the probe tips.

        Raises
        ------
        ValueError
            Channels or record have not been set.
        """
        import numpy as np

        record, channels = self._settings()
        self.start_and_wait(record.duration)
        traces = [
            read_channel(self.session, self.dialect, self.name_of(number), record.points, setting)
            for number, setting in channels
        ]
        self.check_errors()
        volts, overload, lsb = (np.array(column) for column in zip(*traces, strict=True))
        for array in (volts, overload, lsb):
            array.flags.writeable = False
        return Record(volts, record.sample_interval, overload, lsb)

    def reset(self) -> None:
        """Bring the instrument to its start settings; see `Instrument.reset`."""
        self._channels.clear()
        self._record = None
        super().reset()

    def reopen(self) -> None:
        """Close and open the link, end an acquisition still pending; see `Instrument.reopen`."""
        self._channels.clear()
        self._record = None
        super().reopen()

    def _recovery(self) -> tuple[str, ...]:
        abort = self.dialect.acquisition.abort
        return ((abort,) if abort else ()) + super()._recovery()

    def _telling_query(self) -> str:
        return self.dialect.interval.query.format(channel=self.dialect.channels[0])

    def _settings(self) -> tuple[RecordSetting, list[tuple[int, ChannelSetting]]]:
        if self._record is None or set(self._channels) != {1, 2}:
            raise ValueError("set_channel(1), set_channel(2) and set_record must come before acquire")
        return self._record, sorted(self._channels.items())

    def _set_probe(self, name: str, factor: float) -> float:
        if not self.dialect.probe_factor.set:
            return factor
        return self._set_number("probe_factor", self.dialect.probe_factor, factor, name)

    def _set_coupling(self, name: str, coupling: Coupling) -> None:
        words = list(self.dialect.coupling.words)
        if self.dialect.coupling.set:
            self._set_choice("coupling", self.dialect.coupling, coupling, name)
        elif coupling != (words[0] if len(words) == 1 else "DC"):
            raise self._beyond("coupling", f"coupling must be what it has without a command, got {coupling!r}")

    def _set_bandwidth(self, name: str, limited: bool) -> bool:
        if not self.dialect.bandwidth_limit.on:
            return False
        self._set_toggle("bandwidth_limit", self.dialect.bandwidth_limit, limited, name)
        return limited

    def _set_range(self, name: str, peak: float) -> float:
        before = self._made.get("range" + name)
        found = self._set_number("range", self.dialect.range, peak, name)
        if self._made.get("range" + name) is not before:
            self._forget("offset" + name)  # a new range may have moved or rounded it
        return found

    def _set_offset(self, name: str, offset: float) -> float:
        if self.dialect.offset.set:
            return self._set_number("offset", self.dialect.offset, offset, name)
        if offset:
            raise self._beyond("offset", f"offset must be 0, the dialect has no command for it, got {offset!r}")
        return 0.0

    def _set_and_read_record(self, duration: float, points: int) -> RecordSetting:
        self._once("prepare", "", self.prepare)
        self._forget("points", "duration", "interval")
        dialect = self.dialect
        used = self._set_points(points)
        if dialect.duration.set:
            self._set_number("duration", dialect.duration, duration)
        elif dialect.interval.set:  # longer than asked where it cannot be as short: that does no harm
            duration = max(duration, used * dialect.interval.limits[0])
            self._set_number("interval", dialect.interval, duration / used)
        interval = self.read_number(dialect.interval)
        if dialect.points.query:  # the duration may have changed them
            used = round(self.read_number(dialect.points))
        setting = RecordSetting(interval, used, used * interval)
        self._refuse_strange(setting, duration, points)
        return setting

    def _refuse_strange(self, found: RecordSetting, duration: float, points: int) -> None:
        """Refuse a record no scope takes when asked for this one: a reply garbled into another number says so."""
        low, high = self.dialect.points.readback if self.dialect.points.set else (0.0, inf)
        fits = low * points <= found.points <= min(high * points, _MOST_POINTS) and found.points >= 2
        if fits and found.sample_interval > 0 and duration / _FAR <= found.duration <= duration * _FAR:
            return
        asked, read = (f"{n} points in {t:.9g} s" for n, t in ((points, duration), (found.points, found.duration)))
        accepted = f"the dialect's limits for points, at most {_MOST_POINTS}, a duration within {_FAR:g} times"
        raise SettingRefused(self.address, "record", asked, read, accepted, self.session.setting_line)

    def _set_points(self, points: int) -> int:
        """Set the points of a record and return how many it will have."""
        slot = self.dialect.points
        if slot.set:
            return round(self._set_number("points", slot, points))
        return self.points()

    def points(self) -> int:
        """Return how many points a record has now, as the instrument or its dialect says."""
        slot = self.dialect.points
        return slot.fixed or round(self.read_number(slot))

    def prepare(self) -> None:
        """Send what comes once, before anything is set: it may change the points of a record, or their format."""
        for text in self.dialect.acquisition.prepare:
            self.session.command(text)
        self.check_errors()

    def start_and_wait(self, duration: float) -> None:
        """Start one acquisition of so many s and return when it is complete."""
        slot = self.dialect.acquisition
        expected = duration + slot.latency
        if slot.completes == "awaited":
            self.session.command(slot.start, confirm=slot.complete, confirmed=slot.is_complete, expected=expected)
        else:
            self.session.command(slot.start)
            self._poll(expected)

    def _poll(self, expected: float) -> None:
        slot, clock = self.dialect.acquisition, self.session.link.clock
        limit = 2.0 + 3 * expected  # bench seconds: as generous as the real clock's patience
        end = clock.now() + limit
        while not is_like(slot.is_complete, self.session.ask(slot.complete, as_text)):
            if clock.now() >= end:
                self.session.give_up(slot.complete, limit)
            clock.wait(slot.poll)

    def name_of(self, channel: int) -> str:
        """Return the instrument's name of a channel (1, 2)."""
        if not 1 <= channel <= min(2, len(self.dialect.channels)):
            raise ValueError(f"channel must be 1 or 2, got {channel!r}")
        return self.dialect.channels[channel - 1]
