"""Tree of command headers: declared once per instrument, found again for every unit of a message.

A header is declared as SCPI prints it: `[SOURce<1:2>]:VOLTage[:LEVel]:OFFSet`, capitals the short form, brackets what
may be left out, `<1:2>` a numeric suffix with its range, a trailing `?` a query. Path rules (SCPI-99 volume 1, 6.2.4,
from memory): a unit begins where the last colon of the unit before it stood, a leading colon at the root, a common
command leaves the path alone.
"""

import re
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from typing import Any

from bandproof.simulated_instruments.parameters import Parameter, forms
from bandproof.simulated_instruments.syntax import Element, ScpiError, Unit

__all__ = ["Command", "CommandTree", "Path"]


@dataclass(frozen=True, slots=True)
class Command:
    """One command or query.

    Attributes
    ----------
    header : str
        As SCPI prints it; a query ends in `?`.
    action : callable
        Called with the numeric suffixes (a tuple) and the values of the parameters; returns response data or None.
    parameters : tuple of Parameter
    required : int
        How many parameters must be there; the rest may be left out from the end.
    duration : float
        s the instrument is busy before the action takes effect.
    indefinite : bool
        The response has no marked end, so that no query may follow in the message.
    repeated : bool
        The last parameter may come any number of times.
    """

    header: str
    action: Callable[..., bytes | None]
    parameters: tuple[Parameter, ...] = ()
    required: int = 0
    duration: float = 0.0
    indefinite: bool = False
    repeated: bool = False

    def values(self, elements: tuple[Element, ...]) -> list[Any]:
        """Return the values of the data elements, or raise ScpiError."""
        if len(elements) > len(self.parameters) and not self.repeated:
            raise ScpiError(-108)
        if len(elements) < self.required:
            raise ScpiError(-109)
        more = self.parameters[-1:] * (len(elements) - len(self.parameters))
        return [
            parameter.read(element) for parameter, element in zip((*self.parameters, *more), elements, strict=False)
        ]


@dataclass(frozen=True, slots=True)
class _Keyword:
    name: str
    optional: bool
    limits: tuple[int, int] | None


@dataclass(frozen=True, slots=True)
class _Leaf:
    command: Command
    slots: tuple[tuple[int | None, tuple[int, int]], ...]  # per numeric suffix: place in the header as sent, range

    def suffixes(self, numbers: tuple[int | None, ...]) -> tuple[int, ...]:
        places = [place for place, _ in self.slots]
        if any(number is not None and place not in places for place, number in enumerate(numbers)):
            raise ScpiError(-113)
        found = []
        for place, (low, high) in self.slots:
            number = 1 if place is None else numbers[place]
            number = 1 if number is None else number
            if not low <= number <= high:
                raise ScpiError(-114)
            found.append(number)
        return tuple(found)


@dataclass(slots=True)
class _Node:
    children: dict[str, "_Node"] = field(default_factory=dict)
    command: _Leaf | None = None
    query: _Leaf | None = None


@dataclass(frozen=True, slots=True)
class Path:
    """Where the next relative header begins: the nodes passed and their suffixes as sent."""

    node: _Node
    numbers: tuple[int | None, ...] = ()


_PART = re.compile(r"(\[?):?([A-Za-z]+)(?:<(\d+):(\d+)>)?(\]?)")
_MNEMONIC = re.compile(r"([A-Z_0-9]*?[A-Z_])(\d{0,6})")


class CommandTree:
    """Headers of one instrument.

    Parameters
    ----------
    commands : iterable of Command

    Raises
    ------
    ValueError
        Two commands have a header in common, or a header is not written as SCPI prints it.
    """

    def __init__(self, commands: Iterable[Command]) -> None:
        self._common: dict[tuple[str, bool], Command] = {}
        self._root = _Node()
        for command in commands:
            self._add(command)

    @property
    def root(self) -> Path:
        """Where every message begins."""
        return Path(self._root)

    def find(self, unit: Unit, path: Path) -> tuple[Command, tuple[int, ...], Path]:
        """Return the command of a unit, its numeric suffixes, and the path it leaves.

        Raises
        ------
        ScpiError
            -113 there is no such header; -114 a numeric suffix is outside its range.
        """
        if unit.common:
            command = self._common.get((unit.mnemonics[0], unit.query)) if len(unit.mnemonics) == 1 else None
            if command is None:
                raise ScpiError(-113)
            return command, (), path
        if unit.absolute:
            path = self.root
        node, numbers = path.node, path.numbers
        for mnemonic in unit.mnemonics:
            path = Path(node, numbers)
            node, number = _descend(node, mnemonic)
            numbers = (*numbers, number)
        leaf = node.query if unit.query else node.command
        if leaf is None:
            raise ScpiError(-113)
        return leaf.command, leaf.suffixes(numbers), path

    def _add(self, command: Command) -> None:
        header = command.header.removesuffix("?")
        query = header != command.header
        if header.startswith("*"):
            self._common[header[1:].upper(), query] = command
            return
        for variant in _variants(_keywords(header)):
            self._plant(command, variant, query)

    def _plant(self, command: Command, variant: tuple[tuple[_Keyword, bool], ...], query: bool) -> None:
        node, place = self._root, 0
        slots: list[tuple[int | None, tuple[int, int]]] = []
        for keyword, sent in variant:
            if keyword.limits is not None:
                slots.append((place if sent else None, keyword.limits))
            if sent:
                node = _child(node, keyword.name)
                place += 1
        there = node.query if query else node.command
        if there is not None:
            raise ValueError(f"{command.header} and {there.command.header} share a header")
        leaf = _Leaf(command, tuple(slots))
        if query:
            node.query = leaf
        else:
            node.command = leaf


def _child(node: _Node, keyword: str) -> _Node:
    short, long = forms(keyword)
    child = node.children.get(long) or _Node()
    node.children[short] = node.children[long] = child
    return child


def _descend(node: _Node, mnemonic: str) -> tuple[_Node, int | None]:
    if mnemonic in node.children:
        return node.children[mnemonic], None
    parts = _MNEMONIC.fullmatch(mnemonic)
    if parts is None or not parts[2] or parts[1] not in node.children:
        raise ScpiError(-113)
    return node.children[parts[1]], int(parts[2])


def _keywords(header: str) -> tuple[_Keyword, ...]:
    if re.fullmatch(f"(?:{_PART.pattern})+", header) is None:
        raise ValueError(f"{header!r} is not a header as SCPI prints it")
    return tuple(
        _Keyword(part[2], bool(part[1]), (int(part[3]), int(part[4])) if part[3] is not None else None)
        for part in _PART.finditer(header)
    )


def _variants(keywords: tuple[_Keyword, ...]) -> Iterator[tuple[tuple[_Keyword, bool], ...]]:
    if not keywords:
        yield ()
        return
    for rest in _variants(keywords[1:]):
        yield ((keywords[0], True), *rest)
        if keywords[0].optional:
            yield ((keywords[0], False), *rest)
