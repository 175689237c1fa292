"""A walk along a dialect: every slot is tried on the connected instrument, and what was sent and came back is noted.

Order: what drives a board goes off, then queries, then settings, each changed and set back to what it was, then one
record of a scope. What could drive a board is sent only where the caller says that none is connected.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from typing import Literal

from bandproof.drivers.errors import InstrumentError, InstrumentProblem, LinkBroken, NoAnswer, ReplyError
from bandproof.drivers.instrument import Instrument, is_accepted, spelt, understood
from bandproof.drivers.session import as_text
from bandproof.drivers.slots import Choice, Identity, Number, Toggle

__all__ = ["NO_BOARD", "Line", "Verdict", "Walk", "nearby"]

Verdict = Literal["accepted", "refused", "missing", "skipped"]
NO_BOARD = "nobody said that no board is connected"
_SILENT = 3  # slots without an answer, from the first on, after which nobody is there; arbitrary
_SHOWN = 100  # characters of an answer that are kept; arbitrary


@dataclass(frozen=True, slots=True)
class Line:
    """What came of one slot: what was sent, what came back, whether a sweep needs it."""

    slot: str
    verdict: Verdict
    sent: str = ""
    came: str = ""
    needed: bool = True

    @property
    def works(self) -> bool:
        """Whether nothing stands against a sweep here."""
        return self.verdict != "refused" or not self.needed


class Walk:
    """Tries slots of one instrument one by one; `lines` is what came of them.

    Parameters
    ----------
    instrument : Instrument
        Opened at the first message; after a slot that failed its link is reopened.

    Notes
    -----
    Every step may raise `LinkBroken` or `NoAnswer` where nobody is there at all.
    """

    def __init__(self, instrument: Instrument) -> None:
        self.instrument, self.lines = instrument, list[Line]()

    def note(self, slot: str, verdict: Verdict, sent: str = "", came: object = "", *, needed: bool = True) -> None:
        """Add a line."""
        self.lines.append(Line(slot, verdict, sent, str(came)[:_SHOWN], needed))

    def attempt(self, slot: str, sent: str, act: Callable[[], object], *, needed: bool = True) -> bool:
        """Do something and note what came of it: accepted with what it returns, or refused with what went wrong."""
        if not sent:
            self.note(slot, "missing", needed=needed)
            return False
        try:
            came = act()
            self.instrument.check_errors()
        except (InstrumentProblem, ValueError) as problem:
            self._give_up_if_hopeless(problem)
            self.note(slot, "refused", sent, self._reason(problem), needed=needed)
            return False
        self.note(slot, "accepted", sent, "" if came is None else came, needed=needed)
        return True

    def _give_up_if_hopeless(self, problem: Exception) -> None:
        """Raise what says that nobody is there: a broken connection, or nothing but silence from the first slot on."""
        heard = any(line.verdict == "accepted" for line in self.lines)
        silent = sum(line.verdict == "refused" for line in self.lines) >= _SILENT and not heard
        if isinstance(problem, LinkBroken) and (silent or not isinstance(problem, NoAnswer)):
            raise problem

    def ask(self, slot: str, text: str, *, needed: bool = True) -> bool:
        """Try a query."""
        return self.attempt(slot, text, lambda: self.instrument.session.ask(text, as_text), needed=needed)

    def tell(self, slot: str, text: str, *, needed: bool = True) -> bool:
        """Try a command whose effect cannot be asked for."""
        return self.attempt(slot, text, lambda: self.instrument.session.command(text), needed=needed)

    def identity(self, identity: Identity) -> None:
        """Try what every instrument has: its identity, its errors, its confirmation."""
        habits = self.instrument.session.habits
        self.attempt("identity.query", identity.query, self.instrument.identify)
        self.tell("identity.clear", identity.clear)
        if identity.reset:
            self.note("identity.reset", "skipped", identity.reset, "it would lose the settings")
        else:
            self.note("identity.reset", "missing")
        self.ask("habits.errors", habits.errors)
        self.ask("habits.confirm", habits.confirm)

    def number(self, slot: str, number: Number, channel: str = "", *, other: Callable[[float], float]) -> None:
        """Try a number: ask it, set it to another value, set it back; `other` gives the value to try, SI."""
        where = f" {channel}" if channel else ""
        query = number.query.format(channel=channel)
        asked = self.ask(f"{slot}.query{where}", query)
        if not number.set:
            self.note(f"{slot}.set{where}", "missing")
        elif not asked:
            self.note(f"{slot}.set{where}", "skipped", number.set, "what it was cannot be asked, so not set back")
        else:
            self._change(f"{slot}.set{where}", number, channel, other)

    def _change(self, slot: str, number: Number, channel: str, other: Callable[[float], float]) -> None:
        try:
            _, before = self._read(number, channel)
        except (InstrumentProblem, ValueError) as problem:
            self.note(slot, "refused", number.query.format(channel=channel), f"its answer is no value: {problem}")
            return
        low, high = number.limits
        value = min(max(other(before), low), high)
        text = self._text(number, value, channel)
        self.attempt(slot, text, lambda: self._set(number, value, channel))
        back = self._text(number, before, channel)
        self.attempt(f"{slot} back", back, lambda: self._set(number, before, channel))

    def _read(self, number: Number, channel: str) -> tuple[str, float]:
        """Return the answer to a number's query, and its value in SI."""
        answer = self.instrument.session.ask(number.query.format(channel=channel), as_text)
        return answer, understood(number, answer.encode("ascii"))

    def _set(self, number: Number, value: float, channel: str) -> str:
        """Set a number and return the answer to its query; a value that is not accepted is a ValueError."""
        self.instrument.session.command(self._text(number, value, channel))
        answer, found = self._read(number, channel)
        if not is_accepted(number, value, found):
            raise ValueError(f"answers {answer}, which `readback` does not accept")
        return answer

    def _text(self, number: Number, value: float, channel: str) -> str:
        return number.set.format(value=spelt(number, value), channel=channel)

    def choice(self, slot: str, choice: Choice, channel: str, *, needed: tuple[str, ...]) -> None:
        """Try each word of a choice and set it back; `needed` are those of ours a sweep uses."""
        query = choice.query.format(channel=channel)
        asked = self.ask(f"{slot}.query {channel}", query)
        if not choice.set:
            self.note(f"{slot}.set {channel}", "missing")
            return
        before = self.instrument.session.ask(query, as_text) if asked else ""
        for ours, word in sorted(choice.words.items()):
            self._word(f"{slot} {ours} {channel}", choice, word, channel, ours in needed)
        for word in choice.words.values():
            if before.upper() == word.upper():
                self._word(f"{slot} back {channel}", choice, word, channel, True)

    def _word(self, slot: str, choice: Choice, word: str, channel: str, needed: bool) -> None:
        text = choice.set.format(value=word, channel=channel)
        query = choice.query.format(channel=channel)
        self.attempt(slot, text, lambda: self._tell_and_compare(text, query, word), needed=needed)

    def toggle(self, slot: str, toggle: Toggle, channel: str) -> None:
        """Try on and off and leave it as it was."""
        texts = [text.format(channel=channel) for text in (toggle.on, toggle.off)]
        query = toggle.query.format(channel=channel)
        asked = self.ask(f"{slot}.query {channel}", query)
        was_on = asked and self.instrument.session.ask(query, as_text).upper() == toggle.is_on.upper()
        ways = [("on", texts[0], toggle.is_on), ("off", texts[1], toggle.is_off)]
        for name, text, answer in ways[:: -1 if was_on else 1]:  # what it was comes last
            self.answered(f"{slot}.{name} {channel}", text, query, answer)

    def answered(self, slot: str, text: str, query: str, answer: str) -> bool:
        """Try a command and compare what its query answers then."""
        return self.attempt(slot, text, lambda: self._tell_and_compare(text, query, answer))

    def _tell_and_compare(self, text: str, query: str, answer: str) -> str | None:
        session = self.instrument.session
        session.command(text)
        if not query:
            return None
        found = session.ask(query, as_text)
        if found.strip("\"'").upper() != answer.upper():
            raise ValueError(f"then answers {found}, not {answer}")
        return found

    def _reason(self, problem: Exception) -> str:
        """Return in a few words what went wrong; reopen the link where it has to be."""
        words = str(problem)
        if isinstance(problem, InstrumentError):
            words = f"error {problem.number} {problem.words}"
        elif isinstance(problem, NoAnswer):
            words = "no answer"
        elif isinstance(problem, ReplyError):
            words = f"answers {problem.excerpt.decode('ascii', 'backslashreplace')}, not {problem.expected}"
        later = ""
        with suppress(InstrumentProblem):
            if not self.instrument.session.link.is_dirty:
                later = self._waiting_error()
            else:
                self.instrument.session.link.reopen()
                later = self._waiting_error()
                self.instrument.reopen()
        return words + (f", then {later}" if later else "")

    def _waiting_error(self) -> str:
        try:
            self.instrument.check_errors()
        except InstrumentError as error:
            return f"error {error.number} {error.words}"
        return ""


def nearby(value: float) -> float:
    """Return another value near a number, 1 for none."""
    return value * 1.25 if value and math.isfinite(value) else 1.0
