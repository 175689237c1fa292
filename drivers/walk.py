"""A walk along a dialect: every slot is tried on the connected instrument, and what was sent and came back is noted.

Order: what drives a board goes off, then queries, then settings, each changed and set back to what it was, then one
record of a scope. What could drive a board is sent only where the caller says that none is connected.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, replace
from functools import partial
from typing import Literal

from bandproof.drivers.answers import is_like, is_spelt_otherwise
from bandproof.drivers.errors import InstrumentError, InstrumentProblem, LinkBroken, NoAnswer, ReplyError
from bandproof.drivers.instrument import Instrument, is_accepted, spelt, understood
from bandproof.drivers.session import as_text
from bandproof.drivers.slots import Choice, Identity, Number, Toggle
from bandproof.drivers.trials import limits_of, trials

__all__ = ["NO_BOARD", "Line", "Verdict", "Walk"]

Verdict = Literal["accepted", "refused", "missing", "skipped"]
NO_BOARD = "nobody said that no board is connected"
_SILENT = 3  # slots without an answer, from the first on, after which nobody is there; arbitrary
_SHOWN = 100  # characters of an answer that are kept; arbitrary
_ROUNDED = 0.01  # of a value that is set: what reads back so near is rounded, not counted otherwise; arbitrary
_TOLD = 400  # characters of what went wrong that are kept; arbitrary
Hint = Callable[[InstrumentProblem], str]


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
        self._later: list[Callable[[], object]] = []
        self._habits = instrument.session.habits

    def begin(self, *off: str) -> None:
        """Send what makes an instrument harmless, then read away the errors from before: no slot is to blame for them.

        Where the answers to the error query are not understood, that is told once and it is not asked any more.
        """
        for text in off:
            with suppress(InstrumentProblem):  # it is tried again as a slot
                self._reopen_if_dirty()
                self.instrument.session.command(text)
        try:
            self._reopen_if_dirty()
            self.instrument.check_errors()
        except InstrumentError as error:
            self.note("habits.errors before", "accepted", self._habits.errors, f"error {error.number} {error.words}")
        except InstrumentProblem as problem:
            if not self._is_about_errors(problem):
                raise

    def end(self) -> None:
        """Give the instrument its habits back."""
        self.instrument.session.habits = self._habits

    def _is_about_errors(self, problem: Exception) -> bool:
        """Return whether only the error query failed; if so, note it as its own slot and ask it no more."""
        session = self.instrument.session
        if not isinstance(problem, (NoAnswer, ReplyError)) or problem.command != session.habits.errors:
            return False
        session.habits = replace(session.habits, errors="")
        self.refuse("habits.errors", self._habits.errors, problem)
        return True

    def _reopen_if_dirty(self) -> None:
        if self.instrument.session.link.is_dirty:
            self.instrument.session.link.reopen()

    def note(self, slot: str, verdict: Verdict, sent: str = "", came: object = "", *, needed: bool = True) -> None:
        """Add a line."""
        shown = _TOLD if verdict == "refused" else _SHOWN
        self.lines.append(Line(slot, verdict, sent, str(came)[:shown], needed))

    def attempt(
        self, slot: str, sent: str, act: Callable[[], object], *, needed: bool = True, hint: Hint | None = None
    ) -> bool:
        """Do something and note what came of it: accepted with what it returns, or refused with what went wrong.

        `hint` may add to a problem of the instrument what is likely wrong in the dialect.
        """
        if not sent:
            self.note(slot, "missing", needed=needed)
            return False
        try:
            self._reopen_if_dirty()
            came = act()
            self.instrument.check_errors()
        except (InstrumentProblem, ValueError) as problem:
            if slot != "habits.errors" and self._is_about_errors(problem):
                return self.attempt(slot, sent, act, needed=needed, hint=hint)
            more = hint(problem) if hint and isinstance(problem, InstrumentProblem) else ""
            self.refuse(slot, sent, problem, more, needed=needed)
            return False
        self.note(slot, "accepted", sent, "" if came is None else came, needed=needed)
        return True

    def refuse(self, slot: str, sent: str, problem: Exception, more: str = "", *, needed: bool = True) -> None:
        """Note what went wrong, reopen the link where it has to be; raise where nobody is there at all."""
        self._give_up_if_hopeless(problem)
        self.note(slot, "refused", sent, self._reason(problem) + (f": {more}" if more else ""), needed=needed)

    def _give_up_if_hopeless(self, problem: Exception) -> None:
        """Raise what says that nobody is there: a broken connection, or nothing but silence from the first slot on."""
        heard = any(line.verdict == "accepted" for line in self.lines)
        silent = sum(line.verdict == "refused" for line in self.lines) >= _SILENT and not heard
        if isinstance(problem, LinkBroken) and (silent or not isinstance(problem, NoAnswer)):
            raise problem

    def ask(self, slot: str, text: str, *, needed: bool = True) -> bool:
        """Try a query."""
        return self.attempt(slot, text, lambda: self.instrument.session.ask(text, as_text), needed=needed)

    def read(self, slot: str, number: Number, channel: str = "", *, needed: bool = True) -> bool:
        """Try the query of a number."""
        text = number.query.format(channel=channel)
        return self.attempt(slot, text, lambda: self._read(number, channel)[0], needed=needed)

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
        if habits == self._habits:  # else it was told
            self.ask("habits.errors", habits.errors)
        self.ask("habits.confirm", habits.confirm)

    def number(
        self, slot: str, number: Number, channel: str = "", *, values: tuple[float, ...], stays: bool = False
    ) -> bool:
        """Try a number: ask it, set it to some values, set it back; return whether it can be asked.

        Parameters
        ----------
        slot, number, channel
            Which.
        values : tuple of float, two or more
            SI; moved into the limits of the dialect.
        stays : bool
            It stays at the last of them until `restore`.
        """
        where = f" {channel}" if channel else ""
        asked = self.read(f"{slot}.query{where}", number, channel)
        if not number.set:
            self.note(f"{slot}.set{where}", "missing")
        elif not asked:
            why = f"what it was cannot be asked, so not set back{limits_of(number)}"
            self.note(f"{slot}.set{where}", "skipped", number.set, why)
        else:
            self._change(f"{slot}.set{where}", number, channel, trials(number, values), stays)
        return asked

    def restore(self) -> None:
        """Set back what was to stay until now, in the order it was set."""
        later, self._later = self._later, []
        for back in later:
            back()

    def _change(self, slot: str, number: Number, channel: str, values: tuple[float, ...], stays: bool) -> None:
        before = self.instrument.read_number(number, channel)
        texts = [self._text(number, values[0], channel), *(spelt(number, value) for value in values[1:])]
        self.attempt(slot, ", then ".join(texts), lambda: self._follow(number, values, channel))
        text = self._text(number, before, channel)
        back = partial(self.attempt, f"{slot} back", text, partial(self._set, number, before, channel))
        if stays:
            self._later.append(back)
        else:
            back()

    def _follow(self, number: Number, values: tuple[float, ...], channel: str) -> str:
        """Set a number to one value after the other; return the answers, which must differ."""
        answers = [self._set(number, value, channel) for value in values]
        if again := [answer for answer in answers if answers.count(answer) > 1]:
            raise ValueError(f"answers {again[0]} to more than one: it does not follow, or `query` or `place` is wrong")
        return ", ".join(answers) + limits_of(number)

    def _read(self, number: Number, channel: str) -> tuple[str, float]:
        """Return the answer to a number's query, and its value in SI."""
        answer = self.instrument.session.ask(number.query.format(channel=channel), as_text)
        try:
            return answer, understood(number, answer.encode("ascii"), channel)
        except ValueError as problem:
            which = "" if number.answer else ": has it to have a template, `answer`, or another `place`?"
            raise ValueError(f"answers {answer}, not {problem}{which}") from problem

    def _set(self, number: Number, value: float, channel: str) -> str:
        """Set a number and return the answer to its query; a value that is not accepted is a ValueError."""
        self.instrument.session.command(self._text(number, value, channel))
        answer, found = self._read(number, channel)
        if not is_accepted(number, value, found):
            told = f"told {spelt(number, value)} it answers {answer}, "
            if value and abs(found / value - 1) < _ROUNDED:
                away = f"{abs(found - value):.2g} away, which neither `readback` nor `absolute` accepts"
                raise ValueError(f"{told}{away}: does it round, and how much?")
            ratio = f"{found / value:.4g} times what was set, " if value else ""
            raise ValueError(f"{told}{ratio}which `readback` does not accept: do set and query count the same?")
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
            if before and is_like(choice.answer or "{value}", before, value=word, channel=channel):
                self._word(f"{slot} back {channel}", choice, word, channel, True)

    def _word(self, slot: str, choice: Choice, word: str, channel: str, needed: bool) -> None:
        names = {"value": word, "channel": channel}
        text, query, answer = choice.set.format(**names), choice.query.format(channel=channel), choice.answer
        act = partial(self._tell_and_compare, text, query, answer or "{value}", **names)
        self.attempt(slot, text, act, needed=needed)

    def toggle(self, slot: str, toggle: Toggle, channel: str) -> None:
        """Try on and off and leave it as it was."""
        texts = [text.format(channel=channel) for text in (toggle.on, toggle.off)]
        query = toggle.query.format(channel=channel)
        asked = self.ask(f"{slot}.query {channel}", query)
        was_on = asked and is_like(toggle.is_on, self.instrument.session.ask(query, as_text), channel=channel)
        ways = [("on", texts[0], toggle.is_on), ("off", texts[1], toggle.is_off)]
        for name, text, answer in ways[:: -1 if was_on else 1]:  # what it was comes last
            self.answered(f"{slot}.{name} {channel}", text, query, answer, channel=channel)

    def answered(self, slot: str, text: str, query: str, answer: str, **names: str) -> bool:
        """Try a command and compare what its query answers then with a template, in which `names` are known."""
        return self.attempt(slot, text, lambda: self._tell_and_compare(text, query, answer, **names))

    def _tell_and_compare(self, text: str, query: str, answer: str, **names: str) -> str | None:
        session = self.instrument.session
        session.command(text)
        if not query:
            return None
        found = session.ask(query, as_text)
        if not is_like(answer, found, **names):
            wanted = answer.format(any="...", **names)
            alike = "route" in names and is_spelt_otherwise(found, wanted)
            how = ": name the route in [wiring] as it stands there, or change `is_closed`" if alike else ""
            raise ValueError(f"then answers {found}, not {wanted}{how}")
        return found

    def _reason(self, problem: Exception) -> str:
        """Return in a few words what went wrong; reopen the link where it has to be."""
        words = str(problem)
        if isinstance(problem, InstrumentError):
            words = f"error {problem.number} {problem.words}"
        elif isinstance(problem, NoAnswer):
            words = f"{problem.received} bytes came, then nothing" if problem.received else "no answer"
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
