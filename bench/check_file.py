"""The history of a bench's check standard: NAME.check.jsonl beside its bench file, a line a check or sweep begun.

It is never rewritten. Each line has a checksum of its content, each check its number, so that a line that was changed
or cut, and a check that was taken out, is told.
"""

import json
import os
import zlib
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import asdict, dataclass, fields
from datetime import datetime
from math import isfinite
from pathlib import Path
from typing import Any

from bandproof.bench.errors import FileMistakes
from bandproof.bench.plain import fits, to_json
from bandproof.bench.system import sync_folder
from bandproof.bench.types import QUANTITIES, Check, Quantity, Verdict

__all__ = ["SCHEMA", "Entry", "History", "add_sweep", "append", "check_path", "read_history"]

SCHEMA = "bandproof-check/1"
_LARGEST = 64_000_000  # bytes; arbitrary, some hundred thousand checks
_VERDICTS = ("pass", "fail", "undecided")


@dataclass(frozen=True, slots=True)
class Entry:
    """One check as kept: its ``number`` from 1, standard, verdict; ``accepted`` is why it counts although out of order.

    ``figures`` are value and standard uncertainty of its noise by stage and quantity, null where one could not be had.
    """

    number: int
    started: str
    standard: str
    figures: Mapping[str, Mapping[Quantity, list[float] | None]]
    verdict: Verdict
    accepted: str
    operator: str
    ambient: float | None
    note: str
    identities: Mapping[str, str]
    run: str
    digest: str
    version: str

    @property
    def stands(self) -> bool:
        """Whether the bench was in order, or somebody said why it is to go on."""
        return self.verdict == "pass" or bool(self.accepted)

    def check(self) -> Check:
        """Return the check's figures (they are all there in one that stands)."""
        figures = {
            stage: {quantity: (found[0], found[1]) for quantity in QUANTITIES if (found := of_stage[quantity])}
            for stage, of_stage in self.figures.items()
        }
        return Check(self.started, figures)


@dataclass(frozen=True, slots=True)
class History:
    """Every whole check, oldest first, and in words what is wrong with other lines; whether such stand after the last.

    ``sweeps`` has for each sweep begun the number of the check before it, 0 for none.
    """

    path: Path
    entries: tuple[Entry, ...]
    damages: tuple[str, ...]
    ends_damaged: bool = False
    sweeps: tuple[int, ...] = ()

    @property
    def next_number(self) -> int:
        """The number of the next entry."""
        return max((entry.number for entry in self.entries), default=0) + 1


def check_path(bench_path: Path) -> Path:
    """Return where the history of a bench is kept: NAME.check.jsonl beside NAME.bench.toml."""
    name = bench_path.name.removesuffix(".toml").removesuffix(".bench")
    return bench_path.with_name(f"{name}.check.jsonl")


def append(path: Path, entry: Entry) -> None:
    """Add a check, on disk before this returns.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    _add(path, "check", asdict(entry))


def add_sweep(path: Path, serial: str, attempt: int, utc: str) -> None:
    """Add that a sweep began, on disk before this returns (OSError: the file cannot be written)."""
    _add(path, "sweep", {"serial": serial, "attempt": attempt, "started": utc})


def _add(path: Path, kind: str, plain: Mapping[str, Any]) -> None:
    content = to_json(plain)
    line = to_json({"schema": SCHEMA, "crc32": _sum(content), kind: json.loads(content)})
    is_new = not path.exists()
    with path.open("a+b") as file:
        if file.tell():  # at the end: what a power cut tore there stays a line of its own
            file.seek(-1, os.SEEK_END)
            if file.read(1) != b"\n":
                file.write(b"\n")
        file.write(line.encode("utf-8") + b"\n")
        file.flush()
        os.fsync(file.fileno())
    if is_new:
        sync_folder(path.parent)


def _sum(content: str) -> str:
    return f"{zlib.crc32(content.encode('utf-8')):08x}"


def read_history(path: Path) -> History:
    """Return what a file keeps; nothing where there is no file.

    Raises
    ------
    FileMistakes
        The file cannot be read, or is none of this program.
    """
    try:
        if path.exists() and path.stat().st_size > _LARGEST:
            raise FileMistakes(str(path), (f"is larger than {_LARGEST // 1_000_000} MB: no history of checks is",))
        lines = path.read_bytes().split(b"\n") if path.exists() else []
    except OSError as problem:
        raise FileMistakes(str(path), (f"cannot be read: {problem.strerror or problem}",)) from problem
    entries, sweeps, damages = list[Entry](), list[int](), list[str]()
    lost = 0  # damaged lines since the last whole check
    for number, line in enumerate(lines, 1):
        if not line.strip():
            continue
        before = entries[-1].number if entries else 0
        if _content(line, "sweep") is not None:
            sweeps.append(before)
            continue
        if (entry := _entry(line)) is None:
            damages.append(f"line {number} is damaged and left out")
            lost += 1
            continue
        if not before < entry.number <= before + 1 + lost:
            damages.append(
                f"line {number} has check {entry.number} behind check {before}: lines are missing or doubled"
            )
        entries.append(entry)
        lost = 0
    if damages and not entries and not sweeps:
        raise FileMistakes(
            str(path), ("has no line that is a check of this program; move it away and check the bench anew",)
        )
    return History(path, tuple(entries), tuple(damages), ends_damaged=lost > 0, sweeps=tuple(sweeps))


def _entry(line: bytes) -> Entry | None:
    """Return the check of a line, None where it is not as it was written."""
    with suppress(ValueError, KeyError, TypeError):
        plain = _content(line, "check")
        entry = Entry(**{field.name: plain[field.name] for field in fields(Entry)})
        if _is_one(entry):
            return entry
    return None


def _content(line: bytes, kind: str) -> Any:
    """Return what a line of a kind says, None where it is another one or not as it was written."""
    with suppress(ValueError, KeyError, TypeError, RecursionError):
        whole = json.loads(line)
        if whole["schema"] == SCHEMA and _sum(to_json(whole[kind])) == whole["crc32"]:
            return whole[kind]
    return None


_KINDS: dict[str, Any] = {
    "number": int,
    "started": str,
    "standard": str,
    "accepted": str,
    "operator": str,
    "note": str,
    "identities": dict[str, str],
    "run": str,
    "digest": str,
    "version": str,
}


def _is_one(entry: Entry) -> bool:
    whole = all(fits(getattr(entry, name), kind) for name, kind in _KINDS.items())
    figures = [of_stage[quantity] for of_stage in entry.figures.values() for quantity in QUANTITIES]
    known = [found for found in figures if found is not None]
    return (
        whole
        and entry.verdict in _VERDICTS
        and (entry.ambient is None or fits(entry.ambient, float))
        and all(fits(found, list[float]) and len(found) == 2 and all(map(isfinite, found)) for found in known)
        and all(found[0] > 0.0 for found in known)
        and (not entry.stands or (bool(figures) and len(known) == len(figures)))
        and datetime.fromisoformat(entry.started).tzinfo is not None
    )
