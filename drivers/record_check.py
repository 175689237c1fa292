"""Whether a record can be what a scope's inputs carry, and which slip of a dialect would explain it if not.

No signal is needed: samples must lie within the range, codes must span it about its middle, and a quiet input must
read the same on a shifted range. A slip is named when the same bytes, read with it mended, pass all of that.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, TypeVar

from bandproof.drivers.record import read_channel, read_scaling
from bandproof.drivers.scope import ChannelSetting
from bandproof.drivers.scpi import sample_size, split_fields
from bandproof.drivers.session import Session
from bandproof.drivers.slots import ScopeDialect

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

__all__ = ["Taken", "checked_record"]

T = TypeVar("T")
_BEYOND = 1.6  # ranges from the middle: samples reach past the screen on some scopes; arbitrary
_SPAN = (0.8, 1.6)  # codes may span so many times the range; below 2 and above 1/2, the usual slips; arbitrary
_MIDDLE = 0.25  # ranges that the middle code, or a quiet input on a shifted range, may be off; arbitrary
_COARSE = 0.03  # ranges: two steps of a converter of six bits; arbitrary
_TINY = 1e-20  # V: no converter has such a step
_RESTLESS = 0.1  # ranges of noise, rms, that are doubted if they look like noise; arbitrary
_CALM = 4.0  # times less noise, for another byte order to be believed; arbitrary
_FACTORS = (-1.0, 2.0, 0.5, 10.0, 0.1, 1e3, 1e-3, 1e6, 1e-6)


class _Kept(Session):
    """A session that keeps what came and, once `again` is set, answers with it instead of asking."""

    def __init__(self, session: Session) -> None:
        self._session, self._replies, self.again = session, dict[str, bytes](), False

    def command(self, text: str, **more: Any) -> None:
        if not self.again:
            self._session.command(text, **more)

    def ask(self, text: str, parse: Callable[[bytes], T], **more: Any) -> T:
        if self.again:
            return parse(self._replies[text])
        return self._session.ask(text, self._keeping(text, parse), **more)

    def ask_block(self, text: str, length: int, **more: Any) -> bytearray:
        if not self.again:
            self._replies[text] = bytes(self._session.ask_block(text, length, **more))
        return bytearray(self._replies[text])

    def ask_text_block(self, text: str, cap: int, parse: Callable[[bytes], T], **more: Any) -> T:
        if self.again:
            return parse(self._replies[text])
        return self._session.ask_text_block(text, cap, self._keeping(text, parse), **more)

    def _keeping(self, text: str, parse: Callable[[bytes], T]) -> Callable[[bytes], T]:
        def keep(line: bytes) -> T:
            self._replies[text] = bytes(line)
            return parse(line)

        return keep


class Taken:
    """The bytes of one channel's record and how the channel was set; read at the first use, kept after it."""

    def __init__(self, session: Session, setting: ChannelSetting) -> None:
        self.session, self.setting = _Kept(session), setting

    def read(self, dialect: ScopeDialect, channel: str, points: int, setting: ChannelSetting) -> _Look:
        """Return the record as a dialect scales it."""
        volts, overload, _ = read_channel(self.session, dialect, channel, points, setting)
        scaling = (1.0, 0.0, 0.0)
        if dialect.transfer.scaling != "volts":
            scaling = read_scaling(self.session, dialect.transfer, channel)
        self.session.again = True
        return _Look(volts, overload, setting, scaling)


@dataclass(frozen=True, slots=True, eq=False)
class _Look:
    """A record as one reading of its bytes has it."""

    volts: NDArray[np.float64]
    overload: bool
    setting: ChannelSetting
    scaling: tuple[float, float, float]

    def noise(self) -> float:
        """Return the rms round the mean in V; infinite where a sample is no number."""
        rms = float(self.volts.std())
        return rms if rms == rms else float("inf")

    def is_restless(self) -> bool:
        """Return whether the record is loud and each sample unlike the one before it."""
        import numpy as np

        steps = float(np.diff(self.volts).std()) if len(self.volts) > 1 else 0.0
        noise = self.noise()
        return noise == float("inf") or (noise > _RESTLESS * self.setting.range and not steps < 0.7 * noise)

    def at(self, code: float, sign: int) -> float:
        """Return the volts of a code."""
        scale, offset, origin = self.scaling
        return (code - origin) * scale + sign * offset


def checked_record(dialect: ScopeDialect, channel: str, points: int, taken: Sequence[Taken]) -> str:
    """Read the last of a channel's records and judge it with those before; return what it holds.

    Parameters
    ----------
    dialect : ScopeDialect
        How records are read and scaled.
    channel : str
        The instrument's name of the channel.
    points : int
        Samples the record must have.
    taken : sequence of Taken
        The record, and one taken before on a range that stood elsewhere.

    Raises
    ------
    ValueError
        It cannot be what the input carries; says why, and what is likely wrong.
    InstrumentProblem
        See `read_channel`.
    """
    import numpy as np

    with np.errstate(all="ignore"):  # bytes read wrongly can be any number, or none
        looks = [one.read(dialect, channel, points, one.setting) for one in taken]
        volts = looks[-1].volts
        found = f"{len(volts)} samples, {volts.min():.4g} to {volts.max():.4g} V"
        wrong = _wrong(dialect, looks) if dialect.range.query else ""
        doubted = dialect.range.query and (wrong or looks[-1].is_restless())
        likely = _likely(dialect, channel, points, taken, looks) if doubted else ""
    if wrong or likely:
        wrong = wrong or f"noise of {looks[-1].noise():.3g} V on a range of {looks[-1].setting.range:g} V"
        usual = (
            "`encoding`, `byte_order`, scale, offset, origin or their units in [transfer], or the unit of [range] or "
            "[offset]"
        )
        raise ValueError(f"{found}: {wrong}: likely {likely or usual}")
    return found + (", overload" if looks[-1].overload else "")


def _wrong(dialect: ScopeDialect, looks: Sequence[_Look]) -> str:
    """Return what cannot be, nothing if all can."""
    for look in looks:
        if words := _beyond(look) or _codes(dialect, look):
            return words
    return _shift(dialect, looks) if len(looks) > 1 else ""


def _beyond(look: _Look) -> str:
    import numpy as np

    middle, peak = look.setting.offset, look.setting.range
    sizes = np.abs(look.volts)
    if bool((np.abs(look.volts - middle) > _BEYOND * peak).any()):
        return f"some lie beyond it, {_range(look)}"
    if bool(((sizes > 0) & (sizes < _TINY)).any()):
        return f"no scope tells samples of {sizes[sizes > 0].min():.2g} V"
    return ""


def _codes(dialect: ScopeDialect, look: _Look) -> str:
    """Return what speaks against the scaling of codes: they span the range about its middle."""
    low, high = _ends(dialect)
    if dialect.transfer.scaling == "volts" or high <= low:
        return ""
    middle, peak = look.setting.offset, look.setting.range
    ends = sorted(look.at(code, dialect.transfer.offset_sign) for code in (low, high))
    words = f"codes {low:g} to {high:g} would be {ends[0]:.4g} to {ends[1]:.4g} V, "
    spans = _SPAN[0] <= (ends[1] - ends[0]) / 2 / peak <= _SPAN[1]
    return "" if spans and abs(sum(ends) / 2 - middle) <= _MIDDLE * peak else words + _range(look)


def _range(look: _Look) -> str:
    return f"the range is {look.setting.range:g} V round {look.setting.offset:g} V"


def _ends(dialect: ScopeDialect) -> tuple[float, float]:
    """Return the least and greatest code, equal if they are not known."""
    if dialect.overload.high > dialect.overload.low:
        return dialect.overload.low, dialect.overload.high
    return {"int8": (-128.0, 127.0), "uint8": (0.0, 255.0)}.get(dialect.transfer.encoding, (0.0, 0.0))


def _shift(dialect: ScopeDialect, looks: Sequence[_Look]) -> str:
    """Return what speaks against the offset: the middle moves with it, and what a quiet input reads does not."""
    first, last = looks[0], looks[-1]
    moved = last.setting.offset - first.setting.offset
    tolerance = _MIDDLE * abs(moved)
    if dialect.transfer.scaling != "volts":
        sign = dialect.transfer.offset_sign
        told = last.at(0.0, sign) - first.at(0.0, sign)
        if abs(told - moved) > tolerance:
            return f"its range was shifted by {moved:g} V, its record's scaling by {told:.4g} V"
    read = float(last.volts.mean() - first.volts.mean())
    tolerance = max(tolerance, _COARSE * last.setting.range)
    quiet = max(first.noise(), last.noise()) < tolerance and not (first.overload or last.overload)
    if quiet and abs(read) > tolerance:
        return f"the input reads {read:+.3g} V more on a range shifted by {moved:g} V"
    return ""


def _likely(dialect: ScopeDialect, channel: str, points: int, taken: Sequence[Taken], looks: Sequence[_Look]) -> str:
    """Return a change of the dialect with which the same bytes could be what the inputs carry, best near 0 V."""
    far, fields, noise = "", 0, looks[-1].noise()
    loudest = noise / _CALM if looks[-1].is_restless() else max(noise, _RESTLESS * looks[-1].setting.range)
    if dialect.transfer.scaling == "preamble":
        separator = dialect.transfer.separator.encode("ascii")
        preamble = dialect.transfer.preamble.format(channel=channel)
        fields = taken[-1].session.ask(preamble, lambda line: len(split_fields(line, separator)))
    for words, other, factors in _slips(dialect, fields):
        settings = [
            replace(one.setting, range=one.setting.range * factors[0], offset=one.setting.offset * factors[1])
            for one in taken
        ]
        try:
            others = [one.read(other, channel, points, s) for one, s in zip(taken, settings, strict=True)]
        except (ValueError, KeyError):
            continue
        if others[-1].noise() < loudest and not _wrong(other, others):
            if abs(float(others[0].volts.mean())) <= _MIDDLE * others[0].setting.range:
                return words
            far = far or words
    return far


def _slips(dialect: ScopeDialect, fields: int) -> Iterator[tuple[str, ScopeDialect, tuple[float, float]]]:
    """Yield changes of the dialect, with the factors by which range and offset would be others."""
    transfer, same = dialect.transfer, (1.0, 1.0)

    def changed(**slots: Any) -> ScopeDialect:
        return replace(dialect, transfer=replace(transfer, **slots))

    if sample_size(transfer.encoding) > 1:
        other = "little" if transfer.byte_order == "big" else "big"
        yield f'byte_order = "{other}"', changed(byte_order=other), same
    if "int" in transfer.encoding:
        other = transfer.encoding.removeprefix("u") if transfer.encoding[0] == "u" else f"u{transfer.encoding}"
        yield f'encoding = "{other}"', changed(encoding=other), same
    if transfer.scaling != "volts":
        yield f"offset_sign = {-transfer.offset_sign}", changed(offset_sign=-transfer.offset_sign), same
    for slot in ("scale_field", "offset_field", "origin_field"):
        for place in range(fields):
            yield f"{slot} = {place}", changed(**{slot: place}), same
    for slot, factors in (("range", _FACTORS[1:]), ("offset", _FACTORS)):
        for factor in factors:
            words = f"[{slot}] unit = {getattr(dialect, slot).unit * factor:g}"
            if transfer.scaling != "volts":  # a record read so many times too large looks alike
                scaling = "scale" if slot == "range" else "offset"
                words = f"{scaling}_unit = {getattr(transfer, f'{scaling}_unit') / factor:g}, or {words}"
            yield words, dialect, (factor, 1.0) if slot == "range" else (1.0, factor)
    if transfer.scaling != "volts":
        for factor in _FACTORS[1:]:
            unit = transfer.offset_unit / factor
            yield f"offset_unit = {unit:g}", changed(offset_unit=unit), same
