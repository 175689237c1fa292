"""The journal: what has happened in a run so far, on disk before the next step begins.

One line an entry, ``crc32 JSON``. A line that was cut by a power failure does not match its checksum; it and all
behind it are taken off when the journal is opened again, and nothing before it is lost. Raw records lie in
``raw.bin`` beside it and are synced before the line that names them.
"""

import json
import os
import zlib
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import asdict
from pathlib import Path
from typing import Any, BinaryIO

from bandproof.analysis.types import FloatArray
from bandproof.bench.errors import BadInput
from bandproof.bench.head import checked_head, whole
from bandproof.bench.plain import fits, point_from, point_plain, step_from, to_json
from bandproof.bench.system import sync_folder, try_lock
from bandproof.bench.types import Point, Step

__all__ = ["JOURNAL", "RAW", "Journal"]

JOURNAL, RAW = "journal.txt", "raw.bin"
_LONGEST = 256_000_000  # bytes of a journal; arbitrary, some 200,000 records


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
        journal._lock()
        journal._enter({"kind": "head", **head}, sync=True)
        sync_folder(folder)
        return journal

    @classmethod
    def opened(cls, folder: Path) -> "Journal":
        """Open a folder's journal to go on; a torn tail is taken off first.

        Raises
        ------
        BadInput
            There is no journal, not even its first line is whole, or another process is writing it.
        OSError
            It cannot be written.
        """
        cls.peeked(folder)  # before anything is locked or cut: is it a journal at all?
        journal = cls(folder)
        journal._file = (folder / JOURNAL).open("r+b")
        try:
            journal._lock()
            journal._read(journal._file.read())
        except BadInput:
            journal.close()
            raise
        journal._file.truncate(journal._whole)
        journal._file.seek(journal._whole)
        return journal

    @classmethod
    def peeked(cls, folder: Path) -> "Journal":
        """Return a journal as far as it is whole, to be read only (BadInput as for ``opened``)."""
        journal = cls(folder)
        path = folder / JOURNAL
        try:
            if path.stat().st_size > _LONGEST:
                raise BadInput(f"{path} is longer than {_LONGEST // 1_000_000} MB: no run writes that")
            journal._read(path.read_bytes())
        except OSError as problem:
            raise BadInput(f"{path} cannot be read: {problem.strerror or problem}") from problem
        if not journal.head:
            raise BadInput(f"{path} has no whole first line: nothing was measured, nothing can be resumed")
        return journal

    def close(self) -> None:
        """Close the file; what a full disk did not take stays untaken, and was told when it happened."""
        if self._file is not None:
            with suppress(OSError):
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
        """Return the record (2, N) V kept for a point, or None: also when its file was deleted meanwhile."""
        import numpy as np

        place = self.raw[index]
        if place is None or self.folder is None or self._raw_size() < sum(place):
            return None
        with (self.folder / RAW).open("rb") as file:
            file.seek(place[0])
            return np.frombuffer(file.read(place[1]), dtype="<f4").reshape(2, -1).astype(np.float64)

    def _keep_raw(self, volts: FloatArray) -> tuple[int, int] | None:
        if self.folder is None or not self.folder.exists():
            return None  # deleted by somebody: the points are in memory still
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

    def _raw_size(self) -> int:
        path = self.folder / RAW if self.folder is not None else None
        return path.stat().st_size if path is not None and path.is_file() else 0

    def _lock(self) -> None:
        """Keep a second process from going on with a run that this one writes; on a file system that has locks.

        Raises
        ------
        BadInput
            Another process writes it.
        """
        assert self._file is not None
        with suppress(OSError):
            if not try_lock(self._file.fileno()):
                raise BadInput(f"{self.folder}: this run is going on in another process; wait for it, or stop it there")

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
        raw_size = self._raw_size()
        for entry, length in _lines(content):
            try:
                if (entry["kind"] == "head") != (self._whole == 0):
                    break  # the head comes first, and once
                if entry["kind"] == "point" and entry["raw"] and sum(entry["raw"]) > raw_size:
                    break  # its record is not there
                self._apply(entry)
            except (KeyError, TypeError, ValueError):
                break  # a line of another make: nothing behind it can be trusted
            self._whole += length

    def _apply(self, entry: dict[str, Any]) -> None:
        """Take an entry in whole or not at all (KeyError, TypeError, ValueError)."""
        kind = entry.pop("kind")
        if kind == "head":
            self.head = checked_head(entry)
        elif kind == "steps":
            self._apply_steps([step_from(step) for step in entry["steps"]])
        elif kind == "point":
            self._apply_point(entry)
        elif kind == "alarm":
            self.alarms.append(whole(entry, text=str)["text"])
        elif kind == "story":
            self.history.append(whole(entry, time=float, event=str))
        elif kind == "resumed":
            self.end = None
            self.history.append({"time": self.finished[-1] if self.finished else 0.0, "event": "resumed", **entry})
        elif kind == "end":
            self.end = whole(entry, ended=str, run=str, digest=str)
        else:
            raise ValueError(f"unknown entry {kind!r}")

    def _apply_steps(self, steps: list[Step]) -> None:
        if [step.index for step in steps] != list(range(len(self.steps), len(self.steps) + len(steps))):
            raise ValueError("a batch of steps that does not follow the one before: a line was lost or doubled")
        self.steps += steps

    def _apply_point(self, entry: dict[str, Any]) -> None:
        point = point_from(entry["point"])
        whole(entry, began=float, finished=float)
        raw = tuple(entry["raw"]) if entry["raw"] else None
        if raw is not None and not (fits(raw, tuple[int, int]) and min(raw) >= 0):
            raise ValueError(f"no place of a record: {raw!r}")
        waiting = self.steps[len(self.points) :]
        if not waiting or (point.step, point.stage) != (waiting[0].index, waiting[0].stage):
            raise ValueError(f"point {point.step} of {point.stage} is not what was planned next")
        self.points.append(point)
        self.began.append(entry["began"])
        self.finished.append(entry["finished"])
        self.raw.append(raw)


def _line(entry: dict[str, Any]) -> bytes:
    text = to_json(entry).encode("utf-8")
    return b"%08x %s\n" % (zlib.crc32(text), text)


def _lines(content: bytes) -> Iterator[tuple[dict[str, Any], int]]:
    """Yield entries and their lengths until the first line that is not whole."""
    place = 0
    while (end := content.find(b"\n", place)) >= 0:
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
