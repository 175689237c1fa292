"""Text to and from one instrument: settings that are awaited, queries, blocks, the error queue."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass
from typing import NoReturn, TypeVar

from bandproof.drivers.answers import is_like, number_in
from bandproof.drivers.errors import InstrumentError, NoAnswer
from bandproof.drivers.link import LINE_CAP, Link, Transaction
from bandproof.drivers.quantities import numbered, worded
from bandproof.drivers.scpi import ErrorEntry, parse_error_entry, parse_integer

__all__ = ["Habits", "Session", "as_text"]

QUEUE_CAP = 100  # entries read at most: longer than any queue in the trade (common practice: 10 to 32)

T = TypeVar("T")
_LOGGER = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class Habits:
    """How one instrument confirms and complains.

    Parameters
    ----------
    confirm : str
        Query whose answer says that the settings before it are done; empty: the error query does it.
    confirmed : str
        The answer that says so.
    errors : str
        Query of the error queue, one entry an answer; empty: it has none.
    errors_answer : str
        Template of its answer where that is no number with words after a comma: ``FAULT {value} {any}``.
    harmless : tuple of int
        Error numbers that are noted, not raised.
    terminator : str
        Ends every message sent.
    """

    confirm: str = "*OPC?"
    confirmed: str = worded("1")
    errors: str = "SYSTem:ERRor?"
    errors_answer: str = numbered()
    harmless: tuple[int, ...] = ()
    terminator: str = "\n"


class Session:
    """A conversation over one link: one message in flight, and every message is answered.

    Parameters
    ----------
    link : Link
        Carries the bytes; opened at the first message.
    habits : Habits
        From the instrument's dialect.
    """

    def __init__(self, link: Link, habits: Habits | None = None) -> None:
        self.link, self.habits = link, habits or Habits()
        self._last_setting = ""
        self.sent = 0  # messages so far
        self.setting_line = 0  # of the exchange log, where the last setting stands

    @property
    def address(self) -> str:
        """Where the instrument is, as PyVISA spells it."""
        return self.link.address

    def command(
        self,
        text: str,
        *,
        confirm: str | None = None,
        confirmed: str | None = None,
        expected: float = 0.0,
        named: str = "",
    ) -> None:
        """Send a setting and await the answer that it is done (a message of its own).

        Parameters
        ----------
        text : str
            The setting.
        confirm : str or None
            Another query than the habitual one.
        confirmed : str or None
            Another answer than the habitual one.
        expected : float
            Seconds the setting should take.
        named : str
            What errors call it instead of repeating it whole.

        Raises
        ------
        LinkClosed, LinkBroken, NoAnswer, ReplyError
            See `Link.transaction`; whether the setting was made is then unknown.
        InstrumentError
            Only where the error query does the confirming.
        """
        self._last_setting = named or text
        query = self.habits.confirm if confirm is None else confirm
        with self.link.transaction(self._last_setting, expected=expected) as exchange:
            self._send(exchange, text)
            self.setting_line = exchange.line
            if query:
                self._send(exchange, query)
                answer = self.habits.confirmed if confirmed is None else confirmed
                self._parsed(exchange, exchange.read_line(), lambda line: _check_confirmation(line, answer))
        if not query:
            self.check_errors()

    def ask(self, text: str, parse: Callable[[bytes], T], *, expected: float = 0.0, cap: int = LINE_CAP) -> T:
        """Send a query and return its one-line answer, parsed.

        Parameters
        ----------
        text : str
            The query.
        parse : callable
            Takes the line; a ValueError from it says what was expected and becomes a ReplyError.
        expected : float
            Seconds the answer should take.
        cap : int
            Bytes the answer may have.

        Raises
        ------
        LinkClosed, LinkBroken, NoAnswer, ReplyError
            See `Link.transaction`.
        """
        with self.link.transaction(text, expected=expected) as exchange:
            self._send(exchange, text)
            return self._parsed(exchange, exchange.read_line(cap=cap), parse)

    def ask_block(self, text: str, length: int, *, expected: float = 0.0, terminated: bool = True) -> bytearray:
        """Send a query and return the contents of the block it answers with.

        The length the instrument states is compared with `length` before the contents are read. IEEE 488.2
        section 8.7.9 (definite) and 8.7.10 (indefinite, ``#0``, read as long as the expected length and a newline).

        Parameters
        ----------
        text : str
            The query.
        length : int
            Bytes the contents must have.
        expected : float
            Seconds the answer should take.
        terminated : bool
            Whether a newline follows the block.

        Raises
        ------
        LinkClosed, LinkBroken, NoAnswer, ReplyError
            See `Link.transaction`.
        """
        with self.link.transaction(text, expected=expected) as exchange:
            self._send(exchange, text)
            stated, header = self._block_header(exchange)
            if stated not in (length, None):
                raise exchange.not_understood(f"a block of {length} bytes", header)
            data = exchange.read_exactly(length)
            self._end_block(exchange, terminated or stated is None)
            return data

    def ask_text_block(
        self,
        text: str,
        cap: int,
        parse: Callable[[bytes], T],
        *,
        expected: float = 0.0,
        terminated: bool = True,
    ) -> T:
        """Send a query and return the parsed text inside the block it answers with; at most `cap` bytes.

        Like `ask_block`, but the length is only bounded: numbers as text have no fixed one.
        """
        with self.link.transaction(text, expected=expected) as exchange:
            self._send(exchange, text)
            stated, header = self._block_header(exchange)
            if stated is None:  # ends with the line
                return self._parsed(exchange, exchange.read_line(cap=cap), parse)
            if stated > cap:
                raise exchange.not_understood(f"a block of at most {cap} bytes", header)
            data = bytes(exchange.read_exactly(stated))
            self._end_block(exchange, terminated)
            return self._parsed(exchange, data, parse)

    def give_up(self, text: str, waited: float) -> NoReturn:
        """Raise NoAnswer for something that was asked again and again in vain; the link is dirty afterwards."""
        self.link.is_dirty = True
        raise NoAnswer(self.address, text, waited, 0)

    def check_errors(self) -> tuple[ErrorEntry, ...]:
        """Empty the error queue; return the entries that are harmless.

        Raises
        ------
        InstrumentError
            The first entry that is not harmless; the queue has been read to its end.
        LinkClosed, LinkBroken, NoAnswer, ReplyError
            See `Link.transaction`.
        """
        entries = self._queue() if self.habits.errors else []
        for entry in entries:
            if entry.number not in self.habits.harmless:
                raise InstrumentError(self.address, self._last_setting, entry.number, entry.words, self.setting_line)
            _LOGGER.info("%s: harmless error %d %s", self.address, entry.number, entry.words)
        return tuple(entries)

    def error_entry(self, line: bytes) -> ErrorEntry:
        """Return what an answer to the error query says."""
        template = self.habits.errors_answer
        if template:
            return ErrorEntry(parse_integer(number_in(template, line)), as_text(line))
        try:
            return parse_error_entry(line)
        except ValueError as problem:
            raise ValueError(f"{problem}: has it to have a template, `errors_answer`?") from problem

    def _queue(self) -> list[ErrorEntry]:
        entries: list[ErrorEntry] = []
        while (entry := self.ask(self.habits.errors, self.error_entry)).number != 0:
            entries.append(entry)
            if len(entries) >= QUEUE_CAP:
                break
        return entries

    def _send(self, exchange: Transaction, text: str) -> None:
        self.sent += 1
        exchange.send((text + self.habits.terminator).encode("latin-1"))

    def _parsed(self, exchange: Transaction, line: bytes, parse: Callable[[bytes], T]) -> T:
        try:
            return parse(line)
        except ValueError as problem:
            raise exchange.not_understood(str(problem), line) from problem

    def _block_header(self, exchange: Transaction) -> tuple[int | None, bytes]:
        """Return the length a block states (None: an indefinite one) and its header as it came."""
        mark = bytes(exchange.read_exactly(2))
        if mark[:1] != b"#" or not mark[1:].isdigit():
            raise exchange.not_understood("a block beginning with '#' and a digit", mark)
        digits = bytes(exchange.read_exactly(int(mark[1:])))
        if digits and not digits.isdigit():
            raise exchange.not_understood("a block's length in digits", mark + digits)
        return int(digits) if digits else None, mark + digits

    def _end_block(self, exchange: Transaction, terminated: bool) -> None:
        if terminated and (rest := exchange.read_line()):
            raise exchange.not_understood("a newline after the block", rest)


def as_text(line: bytes) -> str:
    """Return a line as text without spaces around it; refuse what no instrument prints.

    Raises
    ------
    ValueError
        A byte is no printable ASCII.
    """
    text = line.decode("latin-1").strip()
    if not text.isascii() or not text.isprintable():
        raise ValueError("printable text")
    return text


def _check_confirmation(line: bytes, answer: str) -> None:
    if not is_like(answer, as_text(line).lstrip("+")):
        raise ValueError(f"{answer!r} as confirmation")
