"""The chain of the runs in one folder: a line for each run file, bound to all lines before it.

A line of ``FOLDER/chain.txt`` is number, UTC of the run's start, path below FOLDER, SHA-256 in the run file, link. The
link is the SHA-256 of the link before (nothing before the first) followed by the line up to its own. Whoever can write
the folder can write a whole new chain, so it proves something only against a link that is kept elsewhere.
"""

import errno
import hashlib
import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from bandproof.bench.errors import BadInput
from bandproof.bench.system import sync_folder, try_lock
from bandproof.drivers.clock import RealClock

__all__ = ["CHAIN", "Chain", "ChainBroken", "Entry", "add_to_chain", "chain_of", "link_of"]

CHAIN = "chain.txt"
_PATIENCE = 10.0  # s that another bench may take to write its line; arbitrary, it takes milliseconds
_LINE = re.compile(rb"(\d{1,9}) (\S+) ([^\s\0]+) ([0-9a-f]{64}) ([0-9a-f]{64})")


class ChainBroken(BadInput):
    """A chain is not as it was written; says which line and why."""

    def __init__(self, path: str, problem: str) -> None:
        super().__init__(path, problem)
        self.path, self.problem = path, problem

    def __str__(self) -> str:
        return f"{self.path} is broken: {self.problem}"


@dataclass(frozen=True, slots=True)
class Entry:
    """A line: its number from 1, the run's start in UTC, its file below the folder, that file's digest, the link."""

    number: int
    utc: str
    path: str
    digest: str
    link: str


@dataclass(frozen=True, slots=True)
class Chain:
    """A chain as far as it is whole: its file, lines, what is wrong behind them ("": nothing), their bytes."""

    path: Path
    entries: tuple[Entry, ...]
    problem: str
    size: int

    def line_of(self, run_path: Path, digest: str) -> Entry | None:
        """Return the last line for a run file that has its digest."""
        return next((entry for entry in reversed(self.of(run_path)) if entry.digest == digest), None)

    def of(self, run_path: Path) -> list[Entry]:
        """Return the lines for a run file, the last for the run that was made there last."""
        below = run_path.resolve().relative_to(self.path.parent).as_posix()
        return [entry for entry in self.entries if entry.path == below]


def chain_of(run_path: Path) -> Chain | None:
    """Return the chain of the folder that has ``SERIAL/ATTEMPT/`` of a run file; None where there is none.

    Raises
    ------
    OSError
        It cannot be read.
    """
    parents = run_path.resolve().parents
    path = parents[min(2, len(parents) - 1)] / CHAIN
    return _read(path, path.read_bytes()) if path.exists() else None


def link_of(run_path: Path, digest: str) -> str:
    """Return the link after a run, "" where no chain has it."""
    try:
        chain = chain_of(run_path)
    except OSError:
        return ""
    entry = chain.line_of(run_path, digest) if chain else None
    return entry.link if entry else ""


def add_to_chain(folder: Path, runs: Sequence[tuple[str, str, str]]) -> str:
    """Add runs (UTC, path below the folder, digest) that are not the last in their place; on disk when it returns.

    Returns what to tell of half a line at the chain's end, which is cut off; "" where there was none.

    Raises
    ------
    ChainBroken
        A line is not as it was written: nothing is added to that.
    OSError
        It cannot be written, or another process holds it.
    """
    path = folder / CHAIN
    with path.open("a+b") as file:
        _lock(file.fileno(), path)
        file.seek(0)
        content = file.read()
        chain = _read(path, content)
        if chain.problem:
            raise ChainBroken(str(path), f"{chain.problem}. Move it away, and the next run begins a new one")
        known = {entry.path: entry.digest for entry in chain.entries}  # the last in each place
        whole, half = content[: chain.size], content[chain.size :]
        text = "\n" if whole and not whole.endswith(b"\n") else ""
        link, number = chain.entries[-1].link if chain.entries else "", len(chain.entries)
        for utc, below, digest in [run for run in runs if known.get(run[1]) != run[2]]:
            number += 1
            line = f"{number} {utc} {below} {digest}"
            link = _link(link, line)
            text += f"{line} {link}\n"
        file.truncate(chain.size)  # half a line of a process that was killed
        file.write(text.encode("ascii"))
        file.flush()
        os.fsync(file.fileno())
    sync_folder(folder)
    told = ascii(half.decode("utf-8", "replace"))
    return f"the last line of {path} was not whole and was cut off: {told}" if half else ""


def _link(before: str, line: str) -> str:
    return hashlib.sha256(f"{before}{line}".encode("ascii")).hexdigest()


def _read(path: Path, content: bytes) -> Chain:
    """Return a chain up to the first line that is wrong; half a line at the end was never finished and is none.

    A last line that lacks nothing but its newline is one.
    """
    entries: list[Entry] = []
    size, link = 0, ""
    lines = content.split(b"\n")
    if not _LINE.fullmatch(lines[-1]):
        lines.pop()
    for number, line in enumerate(lines, 1):
        found = _LINE.fullmatch(line)
        if found is None or not line.isascii():
            return Chain(path, tuple(entries), f"line {number} is no line of a chain", size)
        entry = Entry(int(found[1]), *(part.decode("ascii") for part in found.groups()[1:]))
        link = _link(link, line.decode("ascii").rpartition(" ")[0])
        if (entry.number, entry.link) != (number, link):
            why = f"line {number} does not follow from those before it: one of them was changed, added or taken away"
            return Chain(path, tuple(entries), why, size)
        entries.append(entry)
        size = min(size + len(line) + 1, len(content))
    return Chain(path, tuple(entries), "", size)


def _lock(handle: int, path: Path) -> None:
    """Lock an open file until it is closed; two benches that write into one folder wait for one another."""
    clock = RealClock()
    begin = clock.now()
    while not try_lock(handle):
        if clock.now() - begin > _PATIENCE:
            raise OSError(errno.EAGAIN, f"another process holds it for more than {_PATIENCE:g} s", str(path))
        clock.wait(0.01)
