"""A laboratory supply: voltages, current limits, measured currents, outputs; every number read back."""

from __future__ import annotations

from functools import partial

from bandproof.drivers.instrument import Instrument
from bandproof.drivers.session import Session
from bandproof.drivers.slots import SupplyDialect

__all__ = ["Supply"]


class Supply(Instrument):
    """A supply as its dialect describes it.

    Parameters
    ----------
    session : Session
        The conversation.
    dialect : SupplyDialect
        What it understands.

    Notes
    -----
    Every method may raise `LinkClosed`, `LinkBroken`, `NoAnswer`, `ReplyError`, `InstrumentError` and `SettingRefused`.
    The first four leave it unknown whether the setting was made (reopen, restore). `restore` makes voltages and limits
    again and then the outputs as they were: it takes the supply away from no board that has it.
    """

    def __init__(self, session: Session, dialect: SupplyDialect) -> None:
        super().__init__(session, dialect.identity)
        self.dialect = dialect

    @property
    def channels(self) -> tuple[int, ...]:
        """The outputs, from 1."""
        return tuple(range(1, len(self.dialect.channels) + 1))

    def be_safe(self) -> None:
        """Turn every output off and see it confirmed; a dirty or closed link is reopened."""
        link = self.session.link
        if link.is_dirty or not link.is_open:
            self._made.clear()
            link.reopen()
        self._remember("output", "", partial(self.output, False), last=True)
        for name in self.switches():
            self._forget("output" + name)
            toggle = self.dialect.output
            query = toggle.query.format(channel=name)
            self._command_and_see(toggle.off.format(channel=name), query, toggle.is_off, channel=name)

    def set_voltage(self, channel: int, voltage: float) -> float:
        """Set the voltage of a channel (from 1) in V; return the one read back."""
        name = self.name_of(channel)
        self._remember("voltage", channel, partial(self.set_voltage, channel, voltage))
        return self._set_number("voltage", self.dialect.voltage, voltage, name)

    def set_current_limit(self, channel: int, current: float) -> float:
        """Set the greatest current a channel (from 1) gives, in A; return the one read back."""
        name = self.name_of(channel)
        self._remember("current_limit", channel, partial(self.set_current_limit, channel, current))
        return self._set_number("current_limit", self.dialect.current_limit, current, name)

    def read_current(self, channel: int) -> float:
        """Return the current that a channel (from 1) gives now, in A."""
        return self.read_number(self.dialect.current, self.name_of(channel))

    def output(self, on: bool) -> None:
        """Turn all outputs on or off and see it confirmed; `restore` does this last."""
        self._remember("output", "", partial(self.output, on), last=True)
        for name in self.switches():
            self._set_toggle("output", self.dialect.output, on, name)

    def _telling_query(self) -> str:
        return self.dialect.current.query.format(channel=self.dialect.channels[0])

    def switches(self) -> tuple[str, ...]:
        """Return the channels to switch: each, or one where one command switches all."""
        return self.dialect.channels if "{channel}" in self.dialect.output.on else self.dialect.channels[:1]

    def name_of(self, channel: int) -> str:
        """Return the instrument's name of a channel (from 1)."""
        if channel not in self.channels:
            raise ValueError(f"channel must be from 1 to {len(self.channels)}, got {channel!r}")
        return self.dialect.channels[channel - 1]
