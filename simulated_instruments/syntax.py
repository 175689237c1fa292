"""Grammar of IEEE 488.2 program messages: bytes in, headers and data elements out.

A message is a run of units separated by `;`, a unit a header and data elements separated by `,`. Units are parsed one
after the other, so that those before a mistake have been executed when it is found. Everything here is pure.

Source: IEEE 488.2-1992 clause 7 (from memory); error numbers of SCPI-99.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass

from bandproof.simulated_instruments.error_texts import TEXTS

__all__ = ["Block", "Character", "Element", "Expression", "Numeric", "ScpiError", "Text", "Unit", "units"]

WORD_LIMIT = 12  # characters in a mnemonic or character datum, IEEE 488.2 7.6.1.4 and 7.7.1.4 (from memory)
DIGIT_LIMIT = 255  # digits in a mantissa, IEEE 488.2 7.7.2.4 (from memory)
EXPONENT_LIMIT = 32000  # IEEE 488.2 7.7.2.4 (from memory)


class ScpiError(Exception):
    """A mistake in a message or in what it asks; goes into the error queue."""

    def __init__(self, number: int, detail: str = "") -> None:
        super().__init__(number, detail)
        self.number, self.detail = number, detail

    def __str__(self) -> str:
        return f"{self.number}, {TEXTS.get(self.number, 'Device error')}" + (f"; {self.detail}" if self.detail else "")


@dataclass(frozen=True, slots=True)
class Numeric:
    """A number with the suffix as sent (upper case, may be empty)."""

    value: float
    suffix: str = ""


@dataclass(frozen=True, slots=True)
class Character:
    """A bare word, upper case."""

    word: str


@dataclass(frozen=True, slots=True)
class Text:
    """A quoted string, quotes taken off."""

    value: str


@dataclass(frozen=True, slots=True)
class Block:
    """Arbitrary bytes of a definite or indefinite block."""

    data: bytes


@dataclass(frozen=True, slots=True)
class Expression:
    """What stood between parentheses, for instance a channel list."""

    body: str


Element = Numeric | Character | Text | Block | Expression


@dataclass(frozen=True, slots=True)
class Unit:
    """One program message unit.

    `absolute` says that the header began with a colon, `common` with an asterisk; `mnemonics` are upper case.
    """

    mnemonics: tuple[str, ...]
    query: bool
    common: bool
    absolute: bool
    elements: tuple[Element, ...]


_SPACE = re.compile(rb"[\x00-\x09\x0b-\x20]*")
_HEADER = re.compile(rb"(\*|:)?([A-Za-z]\w*(?::[A-Za-z]\w*)*)(\?)?")
_NUMBER = re.compile(rb"[+-]?(\d+(?:\.\d*)?|\.\d+)(?:[\x00-\x20]*[eE][\x00-\x20]*([+-]?\d+))?")
_SUFFIX = re.compile(rb"[\x00-\x20]*([A-Za-z/][A-Za-z0-9/.]*)")
_WORD = re.compile(rb"[A-Za-z]\w*")
_STRING = re.compile(rb"\"((?:[^\"]|\"\")*)\"|'((?:[^']|'')*)'")
_RADIX = re.compile(rb"#(?:[hH]([0-9A-Fa-f]+)|[qQ]([0-7]+)|[bB]([01]+))")
_EXPRESSION = re.compile(rb"\(([^()\"';#]*)\)")


def units(message: bytes) -> Iterator[Unit]:
    """Split a program message, without its terminator, into units.

    Parameters
    ----------
    message : bytes
        Anything at all.

    Yields
    ------
    Unit
        In the order sent.

    Raises
    ------
    ScpiError
        At the first unit that breaks the grammar; what follows it is lost.
    """
    position = 0
    while True:
        position = _skip(message, position)
        if position >= len(message):
            return
        if message[position : position + 1] == b";":
            position += 1
            continue
        unit, position = _unit(message, position)
        yield unit


def _unit(message: bytes, position: int) -> tuple[Unit, int]:
    header = _HEADER.match(message, position)
    if header is None:
        raise _illegal(message, position)
    lead, path, mark = header.groups()
    mnemonics = tuple(path.decode("ascii").upper().split(":"))
    if any(len(word) > WORD_LIMIT for word in mnemonics):
        raise ScpiError(-112, f"at byte {position}")
    position = header.end()
    end = _skip(message, position)
    elements: tuple[Element, ...] = ()
    if end < len(message) and message[end : end + 1] != b";":
        if end == position:
            raise ScpiError(-111, f"at byte {position}") if _printable(message[end]) else _illegal(message, end)
        elements, end = _elements(message, end)
    return Unit(mnemonics, mark is not None, lead == b"*", lead == b":", elements), end + 1


def _elements(message: bytes, position: int) -> tuple[tuple[Element, ...], int]:
    found: list[Element] = []
    while True:
        element, position = _element(message, position)
        found.append(element)
        position = _skip(message, position)
        separator = message[position : position + 1]
        if separator in (b"", b";"):
            return tuple(found), position
        if separator != b",":
            raise ScpiError(-103, f"at byte {position}") if _printable(separator[0]) else _illegal(message, position)
        position = _skip(message, position + 1)


def _element(message: bytes, position: int) -> tuple[Element, int]:
    first = message[position : position + 1]
    if first in (b'"', b"'"):
        return _string(message, position)
    if first == b"#":
        return _hash(message, position)
    if first == b"(":
        if (expression := _EXPRESSION.match(message, position)) is None:
            raise ScpiError(-171)
        return Expression(expression[1].decode("latin-1")), expression.end()
    if (number := _NUMBER.match(message, position)) is not None:
        return _numeric(message, number)
    if (word := _WORD.match(message, position)) is not None:
        if word.end() - word.start() > WORD_LIMIT:
            raise ScpiError(-144)
        return Character(word[0].decode("ascii").upper()), word.end()
    raise _illegal(message, position)


def _string(message: bytes, position: int) -> tuple[Text, int]:
    if (found := _STRING.match(message, position)) is None:
        raise ScpiError(-151, "no closing quote")
    if found[1] is not None:
        return Text(found[1].replace(b'""', b'"').decode("latin-1")), found.end()
    return Text(found[2].replace(b"''", b"'").decode("latin-1")), found.end()


def _hash(message: bytes, position: int) -> tuple[Numeric | Block, int]:
    if (radix := _RADIX.match(message, position)) is not None:
        for digits, base in zip(radix.groups(), (16, 8, 2), strict=True):
            if digits is not None:
                if len(digits) > DIGIT_LIMIT:
                    raise ScpiError(-124)
                return Numeric(float(int(digits, base))), radix.end()
    count = message[position + 1 : position + 2]
    if not count.isdigit():
        raise ScpiError(-161, "no digit after #")
    start = position + 2 + int(count)
    if count == b"0":
        return Block(message[start:]), len(message)
    length = message[position + 2 : start]
    if len(length) < int(count) or not length.isdigit() or start + int(length) > len(message):
        raise ScpiError(-161, "length and data do not agree")
    end = start + int(length)
    return Block(message[start:end]), end


def _numeric(message: bytes, number: re.Match[bytes]) -> tuple[Numeric, int]:
    mantissa, exponent = number.groups()
    if len(mantissa) > DIGIT_LIMIT:
        raise ScpiError(-124)
    if exponent is not None and (len(exponent) > 20 or abs(int(exponent)) > EXPONENT_LIMIT):
        raise ScpiError(-123)
    end = number.end()
    if message[end : end + 1] in (b".", b"+", b"-"):
        raise ScpiError(-121, f"at byte {end}")
    value = float(re.sub(rb"[\x00-\x20]", b"", number[0]))
    if (suffix := _SUFFIX.match(message, end)) is None:
        return Numeric(value), end
    if len(suffix[1]) > WORD_LIMIT:
        raise ScpiError(-134)
    return Numeric(value, suffix[1].decode("ascii").upper()), suffix.end()


def _skip(message: bytes, position: int) -> int:
    found = _SPACE.match(message, position)
    return position if found is None else found.end()


def _printable(byte: int) -> bool:
    return 32 < byte < 127


def _illegal(message: bytes, position: int) -> ScpiError:
    if position < len(message) and not _printable(message[position]):
        return ScpiError(-101, f"at byte {position}")
    return ScpiError(-102, f"at byte {position}")
