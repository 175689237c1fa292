"""Parameters of commands: what a data element must be to be taken, and how a value is shown in a reply.

Source: IEEE 488.2-1992 table 7-2 for suffix multipliers; SCPI-99 volume 1 chapter 7 (from memory).
"""

import math
import re
from dataclasses import dataclass, field
from typing import Any, Protocol

from bandproof.simulated_instruments.syntax import Block, Character, Element, Expression, Numeric, ScpiError, Text

__all__ = [
    "Blob",
    "Boolean",
    "Choice",
    "Decimal",
    "Extreme",
    "Integer",
    "Parameter",
    "Quoted",
    "RouteList",
    "definite_block",
    "forms",
    "show_number",
]

_MULTIPLIERS = {
    "EX": 1e18, "PE": 1e15, "T": 1e12, "G": 1e9, "MA": 1e6, "K": 1e3, "": 1.0,
    "M": 1e-3, "U": 1e-6, "N": 1e-9, "P": 1e-12, "F": 1e-15, "A": 1e-18,
}  # fmt: skip
_MEGA_BY_M = ("HZ", "OHM")  # with these M is mega and there is no milli
_REFUSED = {Numeric: -128, Character: -148, Text: -158, Block: -168, Expression: -178}


class Parameter(Protocol):
    """What a command takes in one place."""

    @property
    def default(self) -> Any:
        """Value after *RST; None for a parameter that is no setting."""

    def read(self, element: Element) -> Any:
        """Return the value of a data element, or raise ScpiError."""

    def show(self, value: Any) -> bytes:
        """Return a value as response data."""


def forms(keyword: str) -> tuple[str, str]:
    """Return the short and the long spelling of a keyword, upper case.

    >>> forms("FREQuency")
    ('FREQ', 'FREQUENCY')
    """
    return re.sub("[a-z]", "", keyword), keyword.upper()


def show_number(value: float) -> bytes:
    """Return a number as NR1, NR2 or NR3 response data, 15 digits."""
    if math.isnan(value):
        return b"9.91E37"
    if math.isinf(value):
        return b"9.9E37" if value > 0 else b"-9.9E37"
    text = f"{value:.15G}"
    if "E" in text and "." not in text:
        text = text.replace("E", ".0E")
    return text.encode("ascii")


def definite_block(data: bytes) -> bytes:
    """Return bytes as a definite length block."""
    length = str(len(data))
    return f"#{len(length)}{length}".encode("ascii") + data


def _suffixes(unit: str) -> dict[str, float]:
    if not unit:
        return {}
    table = {multiplier + unit: factor for multiplier, factor in _MULTIPLIERS.items()}
    if unit in _MEGA_BY_M:
        table["M" + unit] = 1e6
    return table


def _refuse(element: Element) -> ScpiError:
    return ScpiError(_REFUSED[type(element)])


@dataclass(frozen=True, slots=True)
class Decimal:
    """A number with limits, an optional unit, and the words MINimum, MAXimum, DEFault."""

    minimum: float
    maximum: float
    default: float
    unit: str = ""
    suffixes: dict[str, float] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "suffixes", _suffixes(self.unit))

    def read(self, element: Element) -> float:
        """Return the number in the base unit."""
        if isinstance(element, Character):
            return self.named(element.word)
        if not isinstance(element, Numeric):
            raise _refuse(element)
        return self._inside(element.value * self._factor(element.suffix))

    def named(self, word: str) -> float:
        """Return the limit or default a word stands for."""
        for keyword, value in (("MINimum", self.minimum), ("MAXimum", self.maximum), ("DEFault", self.default)):
            if word in forms(keyword):
                return value
        raise ScpiError(-141)

    def show(self, value: float) -> bytes:
        """Return the number as response data."""
        return show_number(value)

    def _factor(self, suffix: str) -> float:
        if not suffix:
            return 1.0
        if not self.suffixes:
            raise ScpiError(-138)
        if suffix not in self.suffixes:
            raise ScpiError(-131)
        return self.suffixes[suffix]

    def _inside(self, value: float) -> float:
        if not self.minimum <= value <= self.maximum:
            raise ScpiError(-222)
        return value


@dataclass(frozen=True, slots=True)
class Integer:
    """A whole number with limits; fractions are rounded, half up."""

    minimum: int
    maximum: int
    default: int = 0

    def read(self, element: Element) -> int:
        """Return the rounded number."""
        if isinstance(element, Numeric) and not math.isfinite(element.value):
            raise ScpiError(-222)
        if isinstance(element, Numeric) and not element.suffix:
            element = Numeric(math.floor(element.value + 0.5))
        return int(Decimal(self.minimum, self.maximum, self.default).read(element))

    def show(self, value: int) -> bytes:
        """Return the number as NR1."""
        return b"%d" % value


@dataclass(frozen=True, slots=True)
class Boolean:
    """ON, OFF, or a number of which the rounded value decides."""

    default: bool = False

    def read(self, element: Element) -> bool:
        """Return the state."""
        if isinstance(element, Character):
            if element.word not in ("ON", "OFF"):
                raise ScpiError(-141)
            return element.word == "ON"
        if not isinstance(element, Numeric):
            raise _refuse(element)
        if element.suffix:
            raise ScpiError(-138)
        return not math.isfinite(element.value) or math.floor(element.value + 0.5) != 0

    def show(self, value: bool) -> bytes:
        """Return 0 or 1."""
        return b"%d" % value


@dataclass(frozen=True, slots=True)
class Choice:
    """One of some keywords; its value is the short form."""

    keywords: tuple[str, ...]
    default: str

    def read(self, element: Element) -> str:
        """Return the short form."""
        if not isinstance(element, Character):
            raise _refuse(element)
        for keyword in self.keywords:
            if element.word in forms(keyword):
                return forms(keyword)[0]
        raise ScpiError(-141)

    def show(self, value: str) -> bytes:
        """Return the short form."""
        return value.encode("ascii")


@dataclass(frozen=True, slots=True)
class Quoted:
    """A string."""

    default: str = ""

    def read(self, element: Element) -> str:
        """Return the string without quotes."""
        if not isinstance(element, Text):
            raise _refuse(element)
        return element.value

    def show(self, value: str) -> bytes:
        """Return the string in double quotes, those inside doubled."""
        return b'"' + value.encode("latin-1").replace(b'"', b'""') + b'"'


@dataclass(frozen=True, slots=True)
class Blob:
    """A block of bytes."""

    default: bytes = b""

    def read(self, element: Element) -> bytes:
        """Return the bytes."""
        if not isinstance(element, Block):
            raise _refuse(element)
        return element.data

    def show(self, value: bytes) -> bytes:
        """Return a definite length block."""
        return definite_block(value)


@dataclass(frozen=True, slots=True)
class Word:
    """A name the user gives, as a bare word."""

    default: str = ""

    def read(self, element: Element) -> str:
        """Return the word, upper case."""
        if not isinstance(element, Character):
            raise _refuse(element)
        return element.word

    def show(self, value: str) -> bytes:
        """Return the word."""
        return value.encode("ascii")


@dataclass(frozen=True, slots=True)
class Sample:
    """A plain number, or a block of bytes that holds many."""

    default: float = 0.0

    def read(self, element: Element) -> float | bytes:
        """Return the number or the bytes."""
        if isinstance(element, Block):
            return element.data
        if not isinstance(element, Numeric):
            raise _refuse(element)
        if element.suffix:
            raise ScpiError(-138)
        return element.value

    def show(self, value: float) -> bytes:
        """Return the number as response data."""
        return show_number(value)


@dataclass(frozen=True, slots=True)
class RouteList:
    """A channel list such as (@101) or (@101,103:105)."""

    default: None = None

    def read(self, element: Element) -> tuple[str, ...]:
        """Return the channels, ranges written out."""
        if not isinstance(element, Expression):
            raise _refuse(element)
        if not element.body.startswith("@"):
            raise ScpiError(-171, "a channel list begins with @")
        return tuple(name for part in element.body[1:].split(",") for name in self._span(part.strip()))

    def show(self, value: tuple[str, ...]) -> bytes:
        """Return the channels as a list."""
        return f"(@{','.join(value)})".encode("ascii")

    def _span(self, part: str) -> list[str]:
        if re.fullmatch(r"[0-9]{1,6}(:[0-9]{1,6})?", part) is None:
            raise ScpiError(-171, "channels are whole numbers")
        first, _, last = part.partition(":")
        if abs(int(last or first) - int(first)) > 1000:  # arbitrary
            raise ScpiError(-223)
        return [str(number) for number in range(int(first), int(last or first) + 1)]


@dataclass(frozen=True, slots=True)
class Extreme:
    """The words MINimum, MAXimum, DEFault in a query; its value is the limit asked for."""

    of: Decimal | Integer
    default: None = None

    def read(self, element: Element) -> float:
        """Return the limit."""
        if not isinstance(element, Character):
            raise _refuse(element)
        return Decimal(self.of.minimum, self.of.maximum, self.of.default).named(element.word)

    def show(self, value: float) -> bytes:
        """Return the limit as response data."""
        return show_number(value)
