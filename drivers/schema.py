"""Strict reading of a TOML table into a dataclass: every mistake is found, none is guessed away."""

from __future__ import annotations

import difflib
import re
import string
import sys
from dataclasses import MISSING, Field, dataclass, fields, is_dataclass
from typing import Any, Literal, TypeVar, get_args, get_origin, get_type_hints

__all__ = ["DialectMistakes", "Finding", "read_table"]

T = TypeVar("T")
_BAD = object()
_SHOWN = 200  # characters of a file that a message repeats; arbitrary


@dataclass(frozen=True, slots=True)
class Finding:
    """One mistake: where, what was found, what is accepted, the words a slip may have meant."""

    path: str
    found: str
    accepted: str
    choices: tuple[str, ...] = ()

    def __str__(self) -> str:
        found = _shown(self.found)
        near = difflib.get_close_matches(found.strip("'\""), self.choices, n=1)
        return f"{_shown(self.path)}: found {found}, accepted: {self.accepted}" + (
            f" (nearest: {near[0]})" if near else ""
        )


class DialectMistakes(ValueError):
    """All mistakes of one dialect file; nothing was sent to any instrument."""

    def __init__(self, name: str, findings: tuple[Finding, ...]) -> None:
        super().__init__(name, findings)
        self.name, self.findings = name, findings

    def __str__(self) -> str:
        lines = "".join(f"\n  {finding}" for finding in self.findings)
        return f"dialect {self.name} has {len(self.findings)} mistake(s), correct the file:{lines}"


def read_table(kind: type[T], table: dict[str, Any], path: str, findings: list[Finding]) -> T | None:
    """Return `table` as a dataclass, or None after adding its mistakes to `findings`.

    Parameters
    ----------
    kind : type
        A dataclass; its fields are the slots, their metadata the rules.
    table : dict
        As TOML gives it.
    path : str
        Where the table stands, for messages; empty at the top.
    findings : list of Finding
        Mistakes are added here.
    """
    before = len(findings)
    slots = {slot.name: slot for slot in fields(kind)}  # type: ignore[arg-type]
    for key in table.keys() - slots.keys():
        findings.append(Finding(_join(path, key), repr(key), f"one of {', '.join(slots)}", tuple(slots)))
    hints = get_type_hints(kind)
    values: dict[str, Any] = {}
    for name, slot in slots.items():
        if name in table:
            values[name] = _value(hints[name], slot, table[name], _join(path, name), findings)
        elif slot.default is MISSING and slot.default_factory is MISSING:
            findings.append(Finding(_join(path, name), "nothing", "this slot has to be there"))
    return kind(**values) if len(findings) == before else None


def _value(hint: Any, slot: Field[Any], found: Any, path: str, findings: list[Finding]) -> Any:
    if is_dataclass(hint) and isinstance(hint, type):
        if isinstance(found, dict):
            return read_table(hint, found, path, findings)
        findings.append(Finding(path, _printed(found), "a table"))
        return None
    value, accepted, choices = _plain(hint, found)
    if value is _BAD:
        findings.append(Finding(path, _printed(found), accepted, choices))
        return None
    texts = [value] if isinstance(value, str) else list(value) if isinstance(value, tuple) else []
    for text in texts:
        if isinstance(text, str):
            findings += _rule_mistakes(slot, text, path)
    return value


def _plain(hint: Any, found: Any) -> tuple[Any, str, tuple[str, ...]]:
    """Return the value, what would be accepted, and words to look for the nearest in."""
    if get_origin(hint) is Literal:
        choices = get_args(hint)
        is_good = any(found == choice and type(found) is type(choice) for choice in choices)
        return found if is_good else _BAD, " or ".join(map(repr, choices)), tuple(map(str, choices))
    if get_origin(hint) is tuple:
        return _sequence(get_args(hint), found), _PLURAL.get(get_args(hint)[0], "") + _pair(hint), ()
    if get_origin(hint) is dict:
        is_good = isinstance(found, dict) and all(isinstance(word, str) for word in found.values())
        return dict(found) if is_good else _BAD, "a table of texts", ()
    return _single(hint, found), _SINGULAR[hint], ()


_SINGULAR: dict[Any, str] = {str: "a text", float: "a number", int: "a whole number", bool: "true or false"}
_PLURAL: dict[Any, str] = {str: "a list of texts", float: "a list of numbers", int: "a list of whole numbers"}


def _pair(hint: Any) -> str:
    return "" if get_args(hint)[-1] is Ellipsis else ", two of them, the lower first"


def _sequence(kinds: tuple[Any, ...], found: Any) -> Any:
    if not isinstance(found, list):
        return _BAD
    values = tuple(_single(kinds[0], entry) for entry in found)
    if any(value is _BAD for value in values):
        return _BAD
    if kinds[-1] is not Ellipsis and (len(values) != len(kinds) or values[0] > values[-1]):
        return _BAD
    return values


def _single(hint: Any, found: Any) -> Any:
    if hint is float and isinstance(found, (int, float)) and not isinstance(found, bool) and found == found:
        return float(found) if abs(found) <= sys.float_info.max or isinstance(found, float) else _BAD
    if hint is int and isinstance(found, int) and not isinstance(found, bool):
        return found
    return found if hint in (str, bool) and isinstance(found, hint) else _BAD


def _rule_mistakes(slot: Field[Any], text: str, path: str) -> list[Finding]:
    """Return what is wrong with a text: placeholders, number format, pattern, bytes that cannot be sent."""
    if slot.metadata.get("format"):
        return [] if _formats(text) else [Finding(path, repr(text), "a number format such as .9g, .3f, .6e or d")]
    if slot.metadata.get("pattern"):
        return [] if _compiles(text) else [Finding(path, repr(text), "a regular expression")]
    if not text.isascii():
        return [Finding(path, repr(text), "ASCII only, nothing else can be sent")]
    return _placeholder_mistakes(slot, text, path)


def _placeholder_mistakes(slot: Field[Any], text: str, path: str) -> list[Finding]:
    names: tuple[str, ...] | None = slot.metadata.get("names")
    if names is None:
        return []
    accepted = " and ".join(f"{{{name}}}" for name in names) + " as placeholders (other braces doubled)"
    try:
        used = {name for _, name, _, _ in string.Formatter().parse(text) if name is not None}
    except ValueError:
        return [Finding(path, repr(text), accepted)]
    wrong = [Finding(path, f"{{{name}}}", accepted, tuple(f"{{{n}}}" for n in names)) for name in used - set(names)]
    missing = set(slot.metadata.get("needs", ())) - used if text else set()
    return wrong + [Finding(path, repr(text), f"{{{name}}} somewhere in it") for name in sorted(missing)]


def _formats(spec: str) -> bool:
    return re.fullmatch(r"\+?(\d*\.\d+)?[efgEFG]|d", spec) is not None


def _compiles(pattern: str) -> bool:
    try:
        re.compile(pattern)
    except re.error:
        return False
    return True


def _join(path: str, name: str) -> str:
    return f"{path}.{name}" if path else name


def _shown(text: str) -> str:
    """Return a text as a message may repeat it: cut short, and nothing in it that a terminal obeys."""
    short = text if len(text) <= _SHOWN else text[:_SHOWN] + "..."
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in short)


def _printed(found: object) -> str:
    try:
        return repr(found)
    except ValueError:  # a whole number of more digits than Python prints
        return "a number of thousands of digits"
