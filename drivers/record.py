"""One channel of a record: read, scaled to volts at the probe tip, judged for overload."""

from __future__ import annotations

from functools import partial
from typing import TYPE_CHECKING, Protocol

from bandproof.drivers.answers import is_like, number_in
from bandproof.drivers.scpi import parse_number, parse_samples, sample_size, split_fields
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.slots import ScopeDialect, Transfer

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

__all__ = ["preamble_scaling", "read_channel", "read_scaling", "scaling_number"]

TEXT_SAMPLE = 40  # bytes of one number as text, at most (arbitrary; 24 hold any float64)


class _Setting(Protocol):
    @property
    def range(self) -> float: ...
    @property
    def offset(self) -> float: ...
    @property
    def probe_factor(self) -> float: ...


def read_channel(
    session: Session, dialect: ScopeDialect, channel: str, points: int, setting: _Setting
) -> tuple[NDArray[np.float64], bool, float]:
    """Read one channel of the record just taken.

    Parameters
    ----------
    session : Session
        The conversation with the scope.
    dialect : ScopeDialect
        How records are read and scaled.
    channel : str
        The instrument's name of the channel.
    points : int
        Samples the record must have.
    setting : ChannelSetting
        As read back; range and offset at the probe tip.

    Returns
    -------
    volts : (N,) float64 array
        At the probe tip.
    overload : bool
        A sample stands at the converter's end, or the instrument says so.
    lsb : float
        V at the probe tip.

    Raises
    ------
    ReplyError
        The samples are not as many as expected, or not understood; the link is dirty.
    LinkClosed, LinkBroken, NoAnswer
        See `Link.transaction`.
    """
    transfer = dialect.transfer
    for text in transfer.before:
        session.command(text.format(channel=channel))
    scale, offset, origin = read_scaling(session, transfer, channel)
    samples = _samples(session, transfer, channel, points)
    software = 1.0 if dialect.probe_factor.set else setting.probe_factor
    low, high, lsb = _ends(dialect, setting, software, scale)
    overload = _is_overloaded(session, dialect, channel, samples, (low, high))
    samples -= origin
    samples *= scale * software
    samples += transfer.offset_sign * offset * software
    return samples, overload, lsb


def _samples(session: Session, transfer: Transfer, channel: str, points: int) -> NDArray[np.float64]:
    text = transfer.read.format(channel=channel)
    size = sample_size(transfer.encoding)
    expected = points * (size or TEXT_SAMPLE) / transfer.rate

    def parse(data: bytes | bytearray) -> NDArray[np.float64]:
        samples = parse_samples(data, transfer.encoding, transfer.byte_order)
        if len(samples) != points:
            raise ValueError(f"{points} samples, {len(samples)} came")
        return samples

    if transfer.framing == "line":
        return session.ask(text, parse, expected=expected, cap=points * TEXT_SAMPLE)
    if size == 0:
        return session.ask_text_block(
            text, points * TEXT_SAMPLE, parse, expected=expected, terminated=transfer.terminated
        )
    return parse(session.ask_block(text, points * size, expected=expected, terminated=transfer.terminated))


def read_scaling(session: Session, transfer: Transfer, channel: str) -> tuple[float, float, float]:
    """Return scale, offset and origin of a record, all at the instrument's input."""
    if transfer.scaling == "volts":
        return 1.0, 0.0, 0.0
    if transfer.scaling == "query":
        queries = {"scale": transfer.scale, "offset": transfer.offset, "origin": transfer.origin}
        scale, offset, origin = (
            session.ask(query.format(channel=channel), partial(scaling_number, transfer, channel, slot))
            if query
            else 0.0
            for slot, query in queries.items()
        )
        return scale, offset, origin
    return session.ask(transfer.preamble.format(channel=channel), partial(preamble_scaling, transfer, channel))


def preamble_scaling(transfer: Transfer, channel: str, line: bytes) -> tuple[float, float, float]:
    """Return scale, offset and origin out of a preamble; what is not as the dialect says is a ValueError."""
    fields = split_fields(line, transfer.separator.encode("ascii"))
    places = {"scale": transfer.scale_field, "offset": transfer.offset_field, "origin": transfer.origin_field}
    if max(places.values()) >= len(fields):
        raise ValueError(f"a preamble of at least {max(places.values()) + 1} fields, {len(fields)} came")
    scale, offset, origin = (
        scaling_number(transfer, channel, slot, line if place < 0 else fields[place])
        if place >= 0 or getattr(transfer, f"{slot}_answer")
        else 0.0
        for slot, place in places.items()
    )
    return scale, offset, origin


def scaling_number(transfer: Transfer, channel: str, slot: str, answer: bytes) -> float:
    """Return scale, offset or origin (``slot``) in V or codes; a ValueError names the template it is not like."""
    template, unit = getattr(transfer, f"{slot}_answer"), {"scale": transfer.scale_unit, "offset": transfer.offset_unit}
    try:
        return parse_number(number_in(template, answer, channel=channel)) * unit.get(slot, 1.0)
    except ValueError as problem:
        raise ValueError(f"for {slot}{'_answer' * bool(template)}: {problem}") from problem


def _ends(dialect: ScopeDialect, setting: _Setting, software: float, scale: float) -> tuple[float, float, float]:
    """Return the lowest and highest sample the converter can give, as transferred, and one code in V at the tip."""
    if dialect.transfer.scaling != "volts":
        low, high, bits = dialect.overload.low, dialect.overload.high, dialect.overload.bits
        codes = (high - low) / (2**bits - 1) if bits and high > low else 1.0  # of the transfer in a converter's step
        return low, high, max(codes, 1.0) * abs(scale) * software
    lsb = setting.range / 2 ** ((dialect.overload.bits or 8) - 1)
    low, high = setting.offset - setting.range, setting.offset + setting.range - lsb
    return (low + lsb / 4) / software, (high - lsb / 4) / software, lsb  # a quarter: samples may be rounded


def _is_overloaded(
    session: Session, dialect: ScopeDialect, channel: str, samples: NDArray[np.float64], ends: tuple[float, float]
) -> bool:
    """Return the verdict; a sample that is no number counts as an overload, its volts are unknown."""
    slot = dialect.overload
    if slot.by == "query":
        return is_like(slot.is_overloaded, session.ask(slot.query.format(channel=channel), as_text), channel=channel)
    low, high = ends
    return not bool(((samples > low) & (samples < high)).all())
