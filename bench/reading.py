"""TOML tables read with every mistake collected: where, what was found, what is accepted, the nearest word."""

import difflib
import tomllib
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import Any, TypeVar

from bandproof.bench.errors import FileMistakes
from bandproof.bench.quantities import Kind, QuantityError, read_quantity, read_tolerance, shown

__all__ = ["Mistakes", "Table", "nearest", "parse_toml", "read_text"]

T = TypeVar("T")
_LARGEST_FILE = 4_000_000  # bytes; arbitrary, a hundred times any board file seen


class Mistakes:
    """The findings of one file, gathered while it is read."""

    def __init__(self, path: str) -> None:
        self.path = path
        self.findings: list[str] = []

    def add(self, where: str, text: str) -> None:
        """Note one finding at a key path."""
        self.findings.append(f"{where}: {text}")

    def stop_if_any(self) -> None:
        """Raise FileMistakes with all findings, if there are any."""
        if self.findings:
            raise FileMistakes(self.path, tuple(self.findings))


def read_text(path: Path) -> str:
    """Return a user's text file.

    Raises
    ------
    FileMistakes
        The file is missing, unreadable, too large or not UTF-8; says which.
    """
    try:
        with path.open("rb") as file:
            content = file.read(_LARGEST_FILE + 1)  # bounded, whatever stands behind the name
        if len(content) > _LARGEST_FILE:
            raise FileMistakes(str(path), (f"the file is larger than {_LARGEST_FILE // 1_000_000} MB",))
        return content.decode("utf-8-sig")  # some editors put a byte order mark before the text
    except OSError as problem:
        raise FileMistakes(str(path), (f"cannot be read: {problem.strerror or problem}",)) from problem
    except UnicodeDecodeError as problem:
        raise FileMistakes(str(path), (f"is not UTF-8 text (byte {problem.start})",)) from problem


def parse_toml(text: str, path: str) -> dict[str, Any]:
    """Return the content of a TOML text; FileMistakes names the line where it is not TOML."""
    try:
        return tomllib.loads(text.replace("\r\n", "\n"))
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as problem:
        raise FileMistakes(path, (f"is not TOML: {problem}",)) from problem


class Table:
    """One table of a file; hands out checked values and knows which keys were asked for."""

    def __init__(self, content: dict[str, Any], where: str, mistakes: Mistakes, *, absent: bool = False) -> None:
        self._content, self._where, self._mistakes = content, where, mistakes
        self._absent = absent  # the table itself was missed already: its keys need no word of their own
        self._known: list[str] = []

    @property
    def where(self) -> str:
        """The key path of this table."""
        return self._where

    def path(self, key: str) -> str:
        """Return the key path of one of this table's keys."""
        return f"{self._where}.{key}" if self._where else key

    def mistake(self, key: str, text: str) -> None:
        """Note a mistake at one of this table's keys."""
        self._mistakes.add(self.path(key), text)

    def _take(self, key: str, accepted: str, default: T | None) -> Any:
        self._known.append(key)
        if key not in self._content:
            if default is None and not self._absent:
                self.mistake(key, f"missing; expected {accepted}")
            return None
        return self._content[key]

    def text(self, key: str, default: str | None = None) -> str:
        """Return a text; a missing one is a mistake unless there is a default."""
        found = self._take(key, "a text", default)
        if found is None:
            return default or ""
        if not isinstance(found, str) or (default is None and not found.strip()):
            self.mistake(key, f"found {shown(found)}; expected a text")
            return default or ""
        return found

    def whole(self, key: str, low: int, high: int, default: int | None = None) -> int:
        """Return a whole number between two bounds."""
        found = self._take(key, f"a whole number from {low} to {high}", default)
        if found is None:
            return low if default is None else default
        if isinstance(found, bool) or not isinstance(found, int) or not low <= found <= high:
            self.mistake(key, f"found {shown(found)}; expected a whole number from {low} to {high}")
            return low
        return found

    def quantity(self, key: str, kind: Kind, default: float | None = None, *, positive: bool = True) -> float:
        """Return a quantity in SI units, above zero; not ``positive``: 0 or more; a temperature in °C has any sign."""
        return self._read(
            key, kind, default, lambda found: _positive(read_quantity(found, kind), found, kind, positive), 1.0
        )

    def tolerance(self, key: str, default: tuple[float, float] | None = None) -> tuple[float, float]:
        """Return the lower and upper factor a tolerance allows."""
        return self._read(key, "tolerance", default, read_tolerance, (1.0, 1.0))

    def _read(self, key: str, kind: Kind, default: T | None, read: Callable[[Any], T], instead: T) -> T:
        found = self._take(key, f"a {kind}", default)
        if found is None:
            return instead if default is None else default
        try:
            return read(found)
        except QuantityError as problem:
            self.mistake(key, str(problem))
            return instead

    def choice(self, key: str, words: Iterable[str], default: str | None = None) -> str:
        """Return one of the words accepted; names the nearest one otherwise."""
        accepted = list(words)
        found = self._take(key, " | ".join(accepted), default)
        if found is None:
            return default or accepted[0]
        if found not in accepted:
            self.mistake(key, f"found {shown(found)}; expected {' | '.join(accepted)}{nearest(shown(found), accepted)}")
            return default or accepted[0]
        return str(found)

    def table(self, key: str, *, optional: bool = False) -> "Table":
        """Return a sub-table; an empty one when it is missing and optional."""
        found = self._take(key, "a table", {} if optional else None)
        if found is not None and not isinstance(found, dict):
            self.mistake(key, f"found {shown(found)}; expected a table")
        content, absent = (found, False) if isinstance(found, dict) else ({}, not optional)
        return Table(content, self.path(key), self._mistakes, absent=absent)

    def peek(self, key: str) -> Any:
        """Return a value as it stands, or None, without counting as asked for."""
        return self._content.get(key)

    def anything(self, key: str) -> Any:
        """Return a value as it stands, or None; it counts as asked for."""
        self._known.append(key)
        return self._content.get(key)

    def names(self) -> Iterator[str]:
        """Yield every key of a table whose keys are names of the user's choosing."""
        for name in self._content:
            self._known.append(name)
            yield name

    def __contains__(self, key: str) -> bool:
        return key in self._content

    def close(self) -> None:
        """Note every key nobody asked for."""
        for key in self._content:
            if key not in self._known:
                self.mistake(key, f"unknown key; known here: {', '.join(self._known)}{nearest(key, self._known)}")


def nearest(word: str, accepted: Iterable[str]) -> str:
    """Return ``" (nearest: X)"``, or nothing when no word is near."""
    close = difflib.get_close_matches(word, list(accepted), n=1)
    return f" (nearest: {close[0]})" if close else ""


def _positive(value: float, found: object, kind: Kind, positive: bool) -> float:
    if kind != "temperature" and (value < 0.0 or (positive and value == 0.0)):
        raise QuantityError(shown(found), kind, f"{shown(found)} is {'not above' if positive else 'below'} zero")
    return value
