"""Dialects: everything that differs between instruments, read from a TOML file, all its mistakes at once."""

from __future__ import annotations

import math
import tomllib
from dataclasses import fields
from importlib import resources
from pathlib import Path
from typing import Any

from bandproof.drivers.schema import DialectMistakes, Finding, read_table
from bandproof.drivers.slots import (
    Dialect,
    GeneratorDialect,
    Number,
    ScopeDialect,
    SupplyDialect,
    SwitchDialect,
    Waveform,
)

__all__ = [
    "Dialect",
    "DialectMistakes",
    "GeneratorDialect",
    "ScopeDialect",
    "SupplyDialect",
    "SwitchDialect",
    "blanks",
    "load",
    "parse",
    "shipped",
    "source",
]

_BLANK = "blank-"
_KINDS: dict[str, type[Any]] = {
    "generator": GeneratorDialect,
    "scope": ScopeDialect,
    "switch": SwitchDialect,
    "supply": SupplyDialect,
}


def shipped() -> tuple[str, ...]:
    """Return the names of the dialects that come with the program and can be used as they are."""
    return tuple(name for name in _files() if not name.startswith(_BLANK))


def blanks() -> tuple[str, ...]:
    """Return the names of the blank dialects that come with the program, to be filled in."""
    return tuple(name for name in _files() if name.startswith(_BLANK))


def _files() -> list[str]:
    folder = resources.files("bandproof.drivers.dialects")
    return sorted(entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml"))


def source(name_or_path: str | Path) -> str:
    """Return the text of a dialect: a shipped or blank one by its name, else a file.

    Raises
    ------
    DialectMistakes
        There is no such dialect; names the nearest.
    """
    if str(name_or_path) in _files():
        return (resources.files("bandproof.drivers.dialects") / f"{name_or_path}.toml").read_text(encoding="utf-8")
    try:
        return Path(name_or_path).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as problem:
        finding = Finding("dialect", str(name_or_path), f"a readable file, or one of {', '.join(shipped())}")
        raise DialectMistakes(str(name_or_path), (finding,)) from problem


def load(name_or_path: str | Path) -> Dialect:
    """Return a dialect, shipped or from a file.

    Raises
    ------
    DialectMistakes
        All mistakes of the file at once.
    """
    return parse(source(name_or_path), str(name_or_path))


def parse(text: str, name: str) -> Dialect:
    """Return the dialect written in `text`; `name` is for messages.

    Raises
    ------
    DialectMistakes
        All mistakes at once.
    """
    try:
        table = tomllib.loads(text)
    except (ValueError, RecursionError) as problem:  # not TOML, a number of thousands of digits, endless brackets
        raise DialectMistakes(name, (Finding("file", str(problem), "TOML"),)) from problem
    kind = table.get("kind")
    if not isinstance(kind, str) or kind not in _KINDS:
        raise DialectMistakes(name, (Finding("kind", repr(kind)[:200], " or ".join(_KINDS), choices=tuple(_KINDS)),))
    interval = table.get("interval")
    if kind == "scope" and isinstance(interval, dict) and interval.get("set"):
        table.setdefault("duration", {})  # nothing is told of it
    findings: list[Finding] = []
    dialect: Dialect | None = read_table(_KINDS[kind], table, "", findings)
    if dialect is not None and not findings:
        findings += _contradictions(dialect)
    if findings or dialect is None:
        raise DialectMistakes(name, tuple(findings))
    return dialect


def _contradictions(dialect: Dialect) -> list[Finding]:
    """Return what no slot shows alone."""
    rules = _scope_rules(dialect) if isinstance(dialect, ScopeDialect) else _other_rules(dialect)
    for name, number in ((slot.name, getattr(dialect, slot.name)) for slot in fields(dialect)):
        if isinstance(number, Number):
            rules[f"{name}.place"] = (bool(number.answer and number.place), "0: with an answer there are no fields")
    return [Finding(path, "empty or contrary", accepted) for path, (is_wrong, accepted) in rules.items() if is_wrong]


def _other_rules(dialect: GeneratorDialect | SwitchDialect | SupplyDialect) -> dict[str, tuple[bool, str]]:
    """Return where slots stand that nothing goes without, whether they are empty, what belongs there."""
    needed: dict[str, str]
    if isinstance(dialect, SwitchDialect):
        needed = {"close": dialect.close, "open_all": dialect.open_all}
    else:
        numbers = ("frequency", "amplitude") if isinstance(dialect, GeneratorDialect) else ("voltage", "current_limit")
        needed = {f"{name}.set": getattr(dialect, name).set for name in numbers}
        needed |= {"output.on": dialect.output.on, "output.off": dialect.output.off}
    rules = {path: (text == "", f"a command, every {dialect.kind} needs one") for path, text in needed.items()}
    if isinstance(dialect, SwitchDialect):
        tells = "{route}" in dialect.query + dialect.is_closed
        rules["query"] = (dialect.query != "" and not tells, "{route} in it or in is_closed, to tell which is closed")
    if isinstance(dialect, GeneratorDialect):
        rules |= _waveform_rules(dialect.waveform)
    if isinstance(dialect, SupplyDialect):
        rules["current.query"] = (dialect.current.query == "", "a query of the measured current")
        rules["channels"] = (not dialect.channels, "the names of its outputs")
    return rules


def _waveform_rules(waveform: Waveform) -> dict[str, tuple[bool, str]]:
    """Return the rules of a slot that may also be left empty."""
    if not waveform.upload:
        return {}
    is_block, is_text = "{block}" in waveform.upload, "{values}" in waveform.upload
    most = 32767.0 if waveform.encoding == "int16" else math.inf
    return {
        "waveform.upload": (is_block == is_text, "either {block} or {values} somewhere in it"),
        "waveform.encoding": (is_text != (waveform.encoding == "ascii"), "ascii with {values}, another with {block}"),
        "waveform.full": (not 0 < waveform.full <= most, f"more than 0, at most {most:g}"),
        "waveform.select": (not waveform.select, "commands, or nothing would be played"),
    }


def _scope_rules(dialect: ScopeDialect) -> dict[str, tuple[bool, str]]:
    transfer, overload = dialect.transfer, dialect.overload
    whole = transfer.encoding not in ("ascii", "real32", "real64")
    return {
        "transfer.read": (transfer.read == "", "a query, every scope needs one"),
        "transfer.scale": (transfer.scaling == "query" and not transfer.scale, 'a query, scaling is "query"'),
        "transfer.preamble": (transfer.scaling == "preamble" and not transfer.preamble, "a query"),
        "transfer.scale_field": (
            transfer.scaling == "preamble" and transfer.scale_field < 0 and not transfer.scale_answer,
            "a place, 0 the first, or transfer.scale_answer"),
        **{f"transfer.{slot}_field": (True, f"-1: {slot}_answer is for the whole preamble")
           for slot in ("scale", "offset", "origin")
           if getattr(transfer, f"{slot}_field") >= 0 and getattr(transfer, f"{slot}_answer")},
        "transfer.scaling": (transfer.scaling == "volts" and whole, "query or preamble, samples are codes"),
        "transfer.framing": (transfer.framing == "line" and transfer.encoding != "ascii", "block, samples are bytes"),
        "overload.low": (overload.by == "end codes" and transfer.scaling != "volts" and overload.low >= overload.high,
                         "less than overload.high"),
        "overload.query": (overload.by == "query" and not overload.query, "a query"),
        "acquisition.start": (dialect.acquisition.start == "", "a command, every scope needs one"),
        "interval.query": (dialect.interval.query == "",
                           "a query, the interval really used is needed: one rounded unseen shifts every frequency"),
        "interval.set": (bool(dialect.interval.set and dialect.duration.set), "nothing, duration.set tells the same"),
        "points.query": (not (dialect.points.set or dialect.points.query or dialect.points.fixed),
                         "a query, or points.fixed if it always takes so many"),
        "range.set": (dialect.range.set == "", "a command, every scope needs one"),
    }  # fmt: skip
