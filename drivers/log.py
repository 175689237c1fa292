"""The exchange log: one line of text for every message, bounded in size."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Literal, TextIO

from bandproof.drivers.errors import EXCERPT

__all__ = ["ExchangeLog"]

LIMIT = 64_000_000  # bytes: some 500,000 messages, more than a long night (arbitrary)


class ExchangeLog:
    """Time, address, direction, length and first 40 bytes of every message of a bench.

    Parameters
    ----------
    path : path or None
        File that is written, appended to if it exists; None keeps no log.
    limit : int
        Bytes after which the log stops with a last line that says so.

    Notes
    -----
    A log that cannot be written (disk full, folder gone) stops and says why in `stopped`: measuring goes on.
    """

    def __init__(self, path: str | Path | None, *, limit: int = LIMIT) -> None:
        self.stopped: str | None = None
        self._limit, self._size, self._line = limit, 0, 0
        self._file: TextIO | None = None if path is None else self._open(Path(path))

    def add(self, when: datetime, address: str, direction: Literal["<", ">"], head: bytes, length: int) -> int:
        """Write one message and return its line number; 0 if no line was written.

        Parameters
        ----------
        when : datetime
            UTC of the message.
        address : str
            Instrument spoken with.
        direction : {"<", ">"}
            To the instrument (>) or from it (<).
        head : bytes
            The message or its beginning.
        length : int
            Bytes of the whole message.
        """
        if self._file is None:
            return 0
        stamp = when.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
        return self._write(f"{stamp} {address} {direction} {length} {_readable(head)}\n")

    def close(self) -> None:
        """Close the file; later messages are not logged."""
        if self._file is not None:
            file, self._file = self._file, None
            file.close()

    def _open(self, path: Path) -> TextIO:
        file = path.open("a+", encoding="ascii", buffering=1)  # a line at a time: a killed run keeps its last message
        file.seek(0)
        self._line = sum(1 for _ in file)
        self._size = path.stat().st_size
        return file

    def _write(self, text: str) -> int:
        assert self._file is not None
        if self._size + len(text) > self._limit:
            return self._stop(f"the log reached its limit of {self._limit} bytes", last_line=True)
        try:
            self._file.write(text)
        except OSError as problem:
            return self._stop(f"the log could not be written: {problem}", last_line=False)
        self._size, self._line = self._size + len(text), self._line + 1
        return self._line

    def _stop(self, reason: str, *, last_line: bool) -> int:
        self.stopped, file, self._file = reason, self._file, None
        assert file is not None
        try:
            if last_line:
                file.write(f"stopped: {reason}\n")
            file.close()
        except OSError:
            pass  # the reason is kept in `stopped`; there is nobody else to tell
        return 0


def _readable(head: bytes) -> str:
    return bytes(head[:EXCERPT]).decode("latin-1").encode("unicode_escape").decode("ascii")
