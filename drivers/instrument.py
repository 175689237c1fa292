"""What every instrument does: identify, set and read back, remember its settings and replay them."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from contextlib import suppress
from typing import Any, TypeVar

from bandproof.drivers.answers import is_like, number_in
from bandproof.drivers.errors import BeyondLimits, InstrumentError, InstrumentProblem, SettingRefused
from bandproof.drivers.scpi import ErrorEntry, parse_number, split_fields
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.slots import Choice, Identity, Number, Toggle

__all__ = ["Instrument", "is_accepted", "spelt", "understood"]

T = TypeVar("T")


class Instrument:
    """Base of generator, scope and switch.

    A setting that was made is remembered; made again alike, it costs no message. After `reopen` nothing counts as
    set, and `restore` makes the remembered settings again.

    Parameters
    ----------
    session : Session
        The conversation.
    identity : Identity
        From the dialect.
    """

    def __init__(self, session: Session, identity: Identity) -> None:
        self.session, self._identity = session, identity
        self._journal: dict[tuple[str, object], Callable[[], object]] = {}
        self._made: dict[str, Any] = {}

    @property
    def address(self) -> str:
        """Where the instrument is, as PyVISA spells it."""
        return self.session.address

    def identify(self) -> str:
        """Return what the instrument says it is, after comparing it with the dialect's pattern; "" if it cannot say.

        Raises
        ------
        ReplyError
            It is not the kind of instrument the dialect is for; the link has to be reopened.
        LinkClosed, LinkBroken, NoAnswer
            See `Link.transaction`.
        """
        if not self._identity.query:
            return ""
        return self.session.ask(self._identity.query, self._checked_identity)

    def is_understood(self) -> InstrumentProblem | None:
        """Ask one query that only this kind of instrument answers; return what went wrong, or None.

        A wrong instrument refuses it; the link may be dirty afterwards. Nothing is set.
        """
        query = self._telling_query()
        if not query:
            return None
        try:
            with suppress(InstrumentError):  # what was in its queue before we came tells nothing of its kind
                self.check_errors()
            self.session.ask(query, as_text)
            self.check_errors()
        except InstrumentProblem as problem:
            return problem
        return None

    def _telling_query(self) -> str:
        """Return a query whose answer tells the kind of instrument, or nothing."""
        return ""

    def reset(self) -> None:
        """Bring the instrument to its start settings and forget old errors and all remembered settings.

        Raises
        ------
        InstrumentProblem
            See `Session.command`; the settings are then unknown.
        """
        self._journal.clear()
        self._made.clear()
        for text in (self._identity.clear, self._identity.reset):
            if text:
                self.session.command(text)

    def check_errors(self) -> tuple[ErrorEntry, ...]:
        """Empty the error queue; see `Session.check_errors`."""
        return self.session.check_errors()

    def reopen(self) -> None:
        """Close and open the link and end what was pending; settings count as unknown until `restore`.

        Errors still in the instrument's queue belong to what failed before; they are cleared.

        Raises
        ------
        LinkBroken, NoAnswer, ReplyError
            It could not be opened, or did not answer: reopen again.
        """
        self._made.clear()
        self.session.link.reopen()
        for text in self._recovery():
            self.session.command(text)

    def restore(self) -> None:
        """Make all remembered settings again, in their order.

        Raises
        ------
        InstrumentProblem
            Of the first setting that fails; reopen and restore again.
        """
        self._made.clear()
        for again in list(self._journal.values()):
            again()

    def disconnect(self) -> None:
        """Close the link; nothing is sent."""
        self.session.link.close()

    def _recovery(self) -> tuple[str, ...]:
        """Return what ends the instrument's pending work and forgets its old errors."""
        return (self._identity.clear,) if self._identity.clear else ()

    def _remember(self, slot: str, key: object, again: Callable[[], object], *, last: bool = False) -> None:
        if last:
            self._journal.pop((slot, key), None)
        self._journal[slot, key] = again

    def _once(self, slot: str, text: str, make: Callable[[], T]) -> T:
        """Return what `make` returned when `slot` was last made with the same text, or make it now."""
        made = self._made.get(slot)
        if made is None or made[0] != text:
            self._made.pop(slot, None)
            self._made[slot] = made = (text, make())
        result: T = made[1]
        return result

    def _forget(self, *slots: str) -> None:
        for slot in slots:
            self._made.pop(slot, None)

    def _set_number(self, slot: str, number: Number, value: float, channel: str = "") -> float:
        """Set a number in SI and return the value read back; the instrument's own errors come first."""
        low, high = number.limits
        if not low <= value <= high:
            raise self._beyond(slot, f"{slot} must be from {low:g} to {high:g} by the dialect, got {value!r}")
        text = number.set.format(value=spelt(number, value), channel=channel)
        return self._once(slot + channel, text, lambda: self._set_and_read(slot, number, value, text, channel))

    def _set_and_read(self, slot: str, number: Number, value: float, text: str, channel: str) -> float:
        self.session.command(text)
        if not number.query:
            self.check_errors()
            return value
        found = self.read_number(number, channel)
        self.check_errors()
        if not is_accepted(number, value, found):
            low, high = number.readback
            accepted = f"{low:.9g} to {high:.9g} times that, or within {number.absolute:g}"
            accepted += f"; `readback` and `absolute` of [{slot}]"
            raise SettingRefused(
                self.address, text, f"{value:.9g}", f"{found:.9g}", accepted, self.session.setting_line
            )
        return found

    def read_number(self, number: Number, channel: str = "") -> float:
        """Ask for a number and return it in SI."""
        return self.session.ask(number.query.format(channel=channel), lambda line: understood(number, line, channel))

    def _set_choice(self, slot: str, choice: Choice, word: str, channel: str = "") -> None:
        if word not in choice.words:
            raise self._beyond(slot, f"{slot} must be one of {', '.join(choice.words) or 'nothing'}, got {word!r}")
        names = {"value": choice.words[word], "channel": channel}
        text, query = choice.set.format(**names), choice.query.format(channel=channel)
        expected = choice.answer or "{value}"
        self._once(slot + channel, text, lambda: self._command_and_compare(text, query, expected, **names))

    def _set_toggle(self, slot: str, toggle: Toggle, on: bool, channel: str = "") -> None:
        text = (toggle.on if on else toggle.off).format(channel=channel)
        query, expected = toggle.query.format(channel=channel), toggle.is_on if on else toggle.is_off
        self._once(slot + channel, text, lambda: self._command_and_compare(text, query, expected, channel=channel))

    def _command_and_compare(self, text: str, query: str, expected: str, **names: str) -> None:
        self._command_and_see(text, query, expected, **names)
        self.check_errors()

    def _command_and_see(self, text: str, query: str, expected: str, **names: str) -> None:
        """Make a setting and compare the answer to its query with a template, in which `names` are known."""
        self.session.command(text)
        if query and not is_like(expected, found := self.session.ask(query, as_text), **names):
            wanted = expected.format(any="...", **names)
            raise SettingRefused(self.address, text, wanted, found, wanted, self.session.setting_line)

    def _beyond(self, slot: str, rule: str) -> BeyondLimits:
        return BeyondLimits(self.address, slot, rule)

    def _checked_identity(self, line: bytes) -> str:
        text = as_text(line)
        if not re.search(self._identity.pattern, text):
            raise ValueError(f"an identity that fits {self._identity.pattern!r}")
        return text


def spelt(number: Number, value: float) -> str:
    """Return a value in SI as the instrument wants it written."""
    theirs = (1 / value if number.reciprocal else value) / number.unit
    return format(round(theirs) if number.format == "d" else theirs, number.format)


def understood(number: Number, line: bytes, channel: str = "") -> float:
    """Return the value in SI of an instrument's answer."""
    fields = split_fields(number_in(number.answer, line, channel=channel))
    if number.place >= len(fields):
        raise ValueError(f"at least {number.place + 1} fields between commas")
    theirs = parse_number(fields[number.place]) * number.unit
    if not math.isfinite(theirs) or (number.reciprocal and theirs == 0):
        raise ValueError("a finite number")
    return 1 / theirs if number.reciprocal else theirs


def is_accepted(number: Number, asked: float, found: float) -> bool:
    """Return whether a value read back is within what the dialect accepts for the value asked, both SI."""
    low, high = sorted(asked * limit for limit in number.readback)
    return low <= found <= high or abs(found - asked) <= number.absolute
