"""A function generator: sine or table, frequency, amplitude, offset, output; every number read back."""

from __future__ import annotations

import math
from functools import partial
from typing import TYPE_CHECKING

from bandproof.drivers.errors import SettingRefused
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.scpi import ErrorEntry, definite_block, encode_samples, parse_number
from bandproof.drivers.session import Session
from bandproof.drivers.slots import GeneratorDialect, Waveform

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

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
        self._remember("shape", "", self.set_sine)
        self._forget("waveform")
        shape = self.dialect.shape
        for text in shape.sine[:-1]:
            self._once(text, text, partial(self.session.command, text))
        for text in shape.sine[-1:]:
            self._once(text, text, partial(self._command_and_compare, text, shape.query, shape.is_sine))

    def play(self, samples: NDArray[np.float64]) -> None:
        """Upload one period of a waveform and make the output that, over and over at the frequency set.

        Parameters
        ----------
        samples : (N,) float64 array
            At equal distances, the first one period after the last; +1 stands for the amplitude set, V peak.

        Raises
        ------
        BeyondLimits
            The dialect has no slot for it, or counts amplitudes in rms, which of a table nobody knows; the samples are
            not within +-1, or too few or too many. Nothing was sent.
        """
        slot = self.dialect.waveform
        self._check_playable(slot, samples)
        kept = samples.copy()
        self._remember("shape", "", partial(self.play, kept))
        self._forget(*self.dialect.shape.sine)
        text = _upload(slot, kept)
        self._once("table", text, partial(self._send_table, slot, text, len(kept)))
        self._once("waveform", slot.upload, partial(self._select, slot))

    def _check_playable(self, slot: Waveform, samples: NDArray[np.float64]) -> None:
        if not slot.upload:
            raise self._beyond("waveform", "its dialect has no waveform.upload slot")
        if self.dialect.amplitude.meaning == "rms":
            raise self._beyond("waveform", "its amplitudes are rms, what +1 of a table becomes is not known")
        if samples.ndim != 1 or not (abs(samples) <= 1.0).all():
            raise self._beyond("waveform", "a waveform is one row of samples from -1 to 1")
        low, high = slot.limits
        if not low <= len(samples) <= high:
            rule = f"a waveform must have {low:g} to {high:g} points by the dialect, got {len(samples)}"
            raise self._beyond("waveform", rule)

    def _send_table(self, slot: Waveform, text: str, points: int) -> None:
        self._forget("waveform")
        for command in slot.prepare:
            self.session.command(command)
        self.session.command(text, expected=slot.latency + len(text) / slot.rate, named=slot.upload)
        self.check_errors()  # what became of a table that was refused is not asked: nothing might come
        found = self.session.ask(slot.points, parse_number) if slot.points else points
        if found != points:
            line = self.session.setting_line
            raise SettingRefused(self.address, slot.upload, f"{points} points", f"{found:g}", f"{points}", line)

    def _select(self, slot: Waveform) -> None:
        for text in slot.select[:-1]:
            self.session.command(text)
        self._command_and_compare(slot.select[-1], slot.query, slot.is_selected)

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


def _upload(slot: Waveform, samples: NDArray[np.float64]) -> str:
    """Return the command that carries a table, its bytes as latin-1."""
    numbers = samples * slot.full
    if slot.encoding == "ascii":
        values = numbers.round() if slot.format == "d" else numbers
        spelt = (format(int(value) if slot.format == "d" else value, slot.format) for value in values.tolist())
        return slot.upload.format(values=slot.separator.join(spelt), points=len(samples))
    block = definite_block(encode_samples(numbers, slot.encoding, slot.byte_order))
    return slot.upload.format(block=block.decode("latin-1"), points=len(samples))
