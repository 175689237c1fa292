"""The journal: what has happened in a run so far, on disk before the next step begins.

One line an entry, ``crc32 JSON``. A line that was cut by a power failure does not match its checksum; it and all
behind it are taken off when the journal is opened again, and nothing before it is lost. Raw records lie in
``raw.bin`` beside it and are synced before the line that names them.
"""

import json
import os
import zlib
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any, BinaryIO

from bandproof.analysis.types import FloatArray
from bandproof.bench.errors import BadInput
from bandproof.bench.plain import point_from, point_plain, step_from, to_json
from bandproof.bench.types import Point, Step

__all__ = ["JOURNAL", "RAW", "Journal"]

JOURNAL, RAW = "journal.txt", "raw.bin"
_LONGEST_LINE = 64_000_000  # bytes; arbitrary, far above a board file's text


class Journal:
    """The growing record of one run.

    ``head`` is what was fixed when it began; ``steps`` planned, ``points`` measured, ``alarms``, ``history`` (the
    run's story) and ``end`` (None while it runs) follow from its entries.
    """

    def __init__(self, folder: Path | None = None) -> None:
        self.folder = folder
        self.head: dict[str, Any] = {}
        self.steps: list[Step] = []
        self.points: list[Point] = []
        self.began: list[float] = []  # clock at which each point's step began
        self.finished: list[float] = []  # clock after each point
        self.raw: list[tuple[int, int] | None] = []
        self.alarms: list[str] = []
        self.history: list[dict[str, Any]] = []
        self.end: dict[str, Any] | None = None
        self._file: BinaryIO | None = None
        self._whole = 0

    @classmethod
    def begin(cls, folder: Path, head: dict[str, Any]) -> "Journal":
        """Start a journal in an attempt's folder.

        Raises
        ------
        FileExistsError
            The folder has one: an attempt is never run over another.
        OSError
            The folder cannot be written.
        """
        journal = cls(folder)
        journal._file = (folder / JOURNAL).open("xb")
        journal._enter({"kind": "head", **head}, sync=True)
        return journal

    @classmethod
    def opened(cls, folder: Path) -> "Journal":
        """Open a folder's journal to go on; a torn tail is taken off first.

        Raises
        ------
        BadInput
            There is no journal, or not even its first line is whole.
        """
        journal = cls.peeked(folder)
        journal._file = (folder / JOURNAL).open("r+b")
        journal._file.truncate(journal._whole)
        journal._file.seek(journal._whole)
        return journal

    @classmethod
    def peeked(cls, folder: Path) -> "Journal":
        """Return a journal as far as it is whole, to be read only (BadInput as for ``opened``)."""
        journal = cls(folder)
        try:
            journal._read((folder / JOURNAL).read_bytes())
        except OSError as problem:
            raise BadInput(f"{folder / JOURNAL} cannot be read: {problem.strerror or problem}") from problem
        if not journal.head:
            raise BadInput(f"{folder / JOURNAL} has no whole first line: nothing was measured, nothing can be resumed")
        return journal

    def close(self) -> None:
        """Close the file."""
        if self._file is not None:
            self._file.close()
            self._file = None

    # --- entries ---

    def planned(self, steps: Sequence[Step]) -> None:
        """Keep a batch of steps before its first is run."""
        self._enter({"kind": "steps", "steps": [asdict(step) for step in steps]}, sync=True)

    def measured(self, point: Point, *, began: float, finished: float, volts: FloatArray | None = None) -> None:
        """Keep a finished point, and its record if it is wanted, before the next step begins."""
        raw = None if volts is None else self._keep_raw(volts)
        entry = {"kind": "point", "point": point_plain(point), "began": began, "finished": finished, "raw": raw}
        self._enter(entry, sync=True)

    def alarm(self, text: str) -> None:
        """Keep something a reader of the result must know, once."""
        if text not in self.alarms:
            self._enter({"kind": "alarm", "text": text})

    def told(self, time: float, event: str, **details: Any) -> None:
        """Add a line to the run's story at a bench time in s."""
        self._enter({"kind": "story", "time": round(time, 6), "event": event, **details})

    def resumed(self, utc: str) -> None:
        """Note that the run goes on."""
        self._enter({"kind": "resumed", "utc": utc}, sync=True)

    def ended(self, ended: str, run_file: str, digest: str) -> None:
        """Close the account: how the run ended and which run file holds it."""
        self._enter({"kind": "end", "ended": ended, "run": run_file, "digest": digest}, sync=True)

    def volts(self, index: int) -> FloatArray | None:
        """Return the record (2, N) V kept for a point, or None."""
        import numpy as np

        place = self.raw[index]
        if place is None or self.folder is None:
            return None
        with (self.folder / RAW).open("rb") as file:
            file.seek(place[0])
            return np.frombuffer(file.read(place[1]), dtype="<f4").reshape(2, -1).astype(np.float64)

    def _keep_raw(self, volts: FloatArray) -> tuple[int, int] | None:
        if self.folder is None:
            return None
        data = volts.astype("<f4").tobytes()
        place = max((offset + length for offset, length in filter(None, self.raw)), default=0)
        path = self.folder / RAW
        with path.open("r+b" if path.exists() else "xb") as file:
            file.seek(place)
            file.write(data)
            file.truncate()
            file.flush()
            os.fsync(file.fileno())
        return place, len(data)

    def _enter(self, entry: dict[str, Any], *, sync: bool = False) -> None:
        self._apply(json.loads(to_json(entry)))
        if self._file is None:
            return
        self._file.write(_line(entry))
        self._file.flush()
        if sync:
            os.fsync(self._file.fileno())

    def _read(self, content: bytes) -> None:
        """Apply every whole line and count their bytes."""
        for entry, length in _lines(content):
            try:
                self._apply(entry)
            except (KeyError, TypeError, ValueError):
                break  # a line of another make: nothing behind it can be trusted
            self._whole += length

    def _apply(self, entry: dict[str, Any]) -> None:
        kind = entry.pop("kind")
        if kind == "head":
            self.head = entry
        elif kind == "steps":
            self.steps += [step_from(step) for step in entry["steps"]]
        elif kind == "point":
            self.points.append(point_from(entry["point"]))
            self.began.append(entry["began"])
            self.finished.append(entry["finished"])
            self.raw.append(tuple(entry["raw"]) if entry["raw"] else None)
        elif kind == "alarm":
            self.alarms.append(entry["text"])
        elif kind == "story":
            self.history.append(entry)
        elif kind == "resumed":
            self.end = None
            self.history.append({"time": self.finished[-1] if self.finished else 0.0, "event": "resumed", **entry})
        elif kind == "end":
            self.end = entry
        else:
            raise ValueError(f"unknown entry {kind!r}")


def _line(entry: dict[str, Any]) -> bytes:
    text = to_json(entry).encode("utf-8")
    return b"%08x %s\n" % (zlib.crc32(text), text)


def _lines(content: bytes) -> Iterator[tuple[dict[str, Any], int]]:
    """Yield entries and their lengths until the first line that is not whole."""
    place = 0
    while (end := content.find(b"\n", place, place + _LONGEST_LINE)) >= 0:
        line = content[place:end]
        text = line[9:]
        if line[:9] != b"%08x " % zlib.crc32(text):
            return
        try:
            entry = json.loads(text)
        except (ValueError, RecursionError):
            return
        if not isinstance(entry, dict):
            return
        yield entry, end + 1 - place
        place = end + 1
