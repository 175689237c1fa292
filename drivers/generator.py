"""A function generator: sine, frequency, amplitude, offset, output; every number read back."""

from __future__ import annotations

import math
from functools import partial

from bandproof.drivers.instrument import Instrument
from bandproof.drivers.scpi import ErrorEntry
from bandproof.drivers.session import Session
from bandproof.drivers.slots import GeneratorDialect

__all__ = ["Generator"]

_PER_PEAK = {"peak": 1.0, "peak-to-peak": 2.0, "rms": 1 / math.sqrt(2)}  # of a sine


class Generator(Instrument):
    """A generator as its dialect describes it.

    Parameters
    ----------
    session : Session
        The conversation.
    dialect : GeneratorDialect
        What it understands.
    ceiling : float
        V; |offset| + peak amplitude is never set above it.

    Notes
    -----
    Every method may raise `LinkClosed`, `LinkBroken`, `NoAnswer`, `ReplyError`, `InstrumentError` and `SettingRefused`.
    The first four leave it unknown whether the setting was made (reopen, restore); after the last two the instrument
    keeps the value it reads back. None of them changes whether the output is on, except `output` and `be_safe`.
    """

    def __init__(self, session: Session, dialect: GeneratorDialect, *, ceiling: float = math.inf) -> None:
        super().__init__(session, dialect.identity)
        self.dialect, self._ceiling = dialect, ceiling
        self._amplitude = self._offset = 0.0
        self._driven = False

    @property
    def has_driven(self) -> bool:
        """Whether the output was ever switched on through this object, whatever came of it."""
        return self._driven

    def be_safe(self) -> None:
        """Turn the output off and see it confirmed, whatever was set before; a dirty or closed link is reopened."""
        link = self.session.link
        if link.is_dirty or not link.is_open:
            self._made.clear()
            link.reopen()
        self._remember("output", "", partial(self.output, False), last=True)
        self._forget("output")
        self._command_and_see(self.dialect.output.off, self.dialect.output.query, self.dialect.output.is_off)

    def set_load(self, load: float) -> float:
        """Tell the load in ohms that amplitudes refer to (inf: the open circuit); return it.

        Amplitude and offset count as unset after a change: an instrument rescales them.

        Raises
        ------
        ValueError
            The instrument cannot be told, and assumes another load.
        """
        slot = self.dialect.load
        if not slot.set:
            if load != slot.fixed:
                rule = f"load must be {slot.fixed:g} ohm, the dialect has no command for it, got {load!r}"
                raise self._beyond("load", rule)
            return load
        self._remember("load", "", partial(self.set_load, load))
        before = self._made.get("load")
        try:
            return self._tell_load(load)
        finally:
            if self._made.get("load") is not before:
                self._forget("amplitude", "offset")

    def _tell_load(self, load: float) -> float:
        slot = self.dialect.load
        if math.isinf(load) and slot.high:
            text = slot.set.format(value=slot.high)
            self._once("load", text, partial(self._command_unread, text))
            return load
        return self._set_number("load", slot, load)

    def set_sine(self) -> None:
        """Make the output a steady sine."""
        self._remember("sine", "", self.set_sine)
        shape = self.dialect.shape
        for text in shape.sine[:-1]:
            self._once(text, text, partial(self.session.command, text))
        for text in shape.sine[-1:]:
            self._once(text, text, partial(self._command_and_compare, text, shape.query, shape.is_sine))

    def set_frequency(self, frequency: float) -> float:
        """Set the frequency in Hz; return the one read back."""
        self._remember("frequency", "", partial(self.set_frequency, frequency))
        return self._set_number("frequency", self.dialect.frequency, frequency)

    def set_amplitude(self, amplitude: float) -> float:
        """Set the amplitude in V, peak, at the load assumed; return the one read back."""
        self._check_ceiling(amplitude, self._offset)
        self._remember("amplitude", "", partial(self.set_amplitude, amplitude))
        factor = _PER_PEAK[self.dialect.amplitude.meaning]
        self._amplitude = max(self._amplitude, abs(amplitude))  # until the new one is confirmed
        found = self._set_number("amplitude", self.dialect.amplitude, amplitude * factor) / factor
        self._amplitude = abs(amplitude)
        return found

    def set_offset(self, offset: float) -> float:
        """Set the offset in V; return the one read back."""
        self._check_ceiling(self._amplitude, offset)
        self._remember("offset", "", partial(self.set_offset, offset))
        self._offset = max(self._offset, abs(offset))
        found = self._set_number("offset", self.dialect.offset, offset)
        self._offset = abs(offset)
        return found

    def output(self, on: bool) -> None:
        """Turn the output on or off and see it confirmed; `restore` does this last."""
        self._driven = self._driven or on
        self._remember("output", "", partial(self.output, on), last=True)
        self._set_toggle("output", self.dialect.output, on)

    def reset(self) -> None:
        """Bring the instrument to its start settings; see `Instrument.reset`."""
        self._amplitude = self._offset = 0.0
        super().reset()

    def restore(self) -> None:
        """Make all settings again with the output off, then the output as it was; see `Instrument.restore`.

        The instrument may still hold older settings: made one by one, they could pass the ceiling on their way.
        """
        output = self._journal.pop(("output", ""), None)
        self.be_safe()
        if output is not None:
            self._journal["output", ""] = output
        super().restore()

    def _telling_query(self) -> str:
        return self.dialect.output.query

    def _command_unread(self, text: str) -> tuple[ErrorEntry, ...]:
        self.session.command(text)
        return self.check_errors()

    def _check_ceiling(self, amplitude: float, offset: float) -> None:
        if not abs(offset) + abs(amplitude) <= self._ceiling:
            rule = (
                f"|offset| + peak amplitude must not exceed {self._ceiling:g} V, got {abs(offset) + abs(amplitude):g} V"
            )
            raise self._beyond("amplitude", rule)
