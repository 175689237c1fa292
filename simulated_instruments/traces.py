"""Arbitrary waveforms: SCPI-99 TRACe memory of a generator, and the harmonics of one period of it.

A table of N points is played band-limited, by trigonometric interpolation: its harmonics up to N / 2 are the lines of
its discrete Fourier transform and there are no others, thus no steps; between points it may pass its greatest value.
"""

from collections.abc import Callable

import numpy as np

from bandproof.simulated_instruments.commands import Command
from bandproof.simulated_instruments.dynamics import FloatArray
from bandproof.simulated_instruments.parameters import Choice, Integer, Sample, Word, definite_block, show_number
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["MOST_POINTS", "Traces", "harmonics"]

MOST_POINTS = 4096  # of a table, arbitrary
MOST_TRACES = 16  # arbitrary
FULL = 32767  # INTeger,16 code of 1
FAINT = 1e-9  # lines fainter than this share of the strongest are rounding
_FORMATS = Choice(("REAL", "INTeger", "ASCii"), "ASC")
_KINDS = {("REAL", 32): "f4", ("REAL", 64): "f8", ("INT", 16): "i2"}
_LENGTHS = {"REAL": 32, "INT": 16, "ASC": 0}  # bits a sample, where none are given; 0: as many characters as it takes


class Traces:
    """Tables by name, within +-1; headers and forms of SCPI-99 TRACe and FORMat from memory.

    What they leave open is decided so: data may come without DEFine and set the number of points; *RST forgets all.

    Parameters
    ----------
    setting : float
        s a short command takes.
    wait_for_upload : callable
        Lets the time of the upload pass.
    is_swapped : callable
        Whether blocks have their bytes swapped (FORMat:BORDer).
    in_use : callable
        Returns the name of the trace played, or an empty string.
    changed : callable
        Told that the trace played has other points.
    """

    def __init__(
        self,
        *,
        setting: float,
        wait_for_upload: Callable[[], None],
        is_swapped: Callable[[], bool],
        in_use: Callable[[], str],
        changed: Callable[[], None],
    ) -> None:
        self._tables: dict[str, FloatArray] = {}
        self._format = ("ASC", 0)
        self._setting, self._wait_for_upload, self._is_swapped = setting, wait_for_upload, is_swapped
        self._in_use, self._changed = in_use, changed

    def __contains__(self, name: str) -> bool:
        return name in self._tables

    def table(self, name: str) -> FloatArray:
        """Return the (N,) points of a trace, or raise ScpiError."""
        if name not in self._tables:
            raise ScpiError(-224, f"there is no trace {name}")
        return self._tables[name]

    def forget(self) -> None:
        """*RST: no traces, data as text."""
        self._tables.clear()
        self._format = ("ASC", 0)

    def commands(self) -> list[Command]:
        """Return the commands of TRACe and FORMat:DATA."""
        name, points = (Word(),), Integer(2, MOST_POINTS)
        return [
            Command("TRACe:DEFine", self._define, (Word(), points), 1, self._setting),
            Command("TRACe[:DATA]", self._load, (Word(), Sample()), 2, repeated=True),
            Command("TRACe[:DATA]?", lambda _, word: self._show(self.table(word)), name, 1),
            Command("TRACe:POINts?", lambda _, word: b"%d" % len(self.table(word)), name, 1),
            Command("TRACe:CATalog?", lambda _: self._catalog()),
            Command("TRACe:DELete[:NAME]", self._delete, name, 1, self._setting),
            Command("TRACe:DELete:ALL", self._delete, (), 0, self._setting),
            Command("FORMat[:DATA]", self._set_format, (_FORMATS, Integer(0, 64)), 1, self._setting),
            Command("FORMat[:DATA]?", lambda _: "{},{}".format(*self._format).encode("ascii")),
        ]

    def _define(self, suffixes: tuple[int, ...], name: str, points: int = 1000) -> None:
        self._keep(name, np.zeros(points))

    def _load(self, suffixes: tuple[int, ...], name: str, *data: bytes | float) -> None:
        self._wait_for_upload()
        self._keep(name, self._decoded(data))

    def _keep(self, name: str, table: FloatArray) -> None:
        if len(table) > MOST_POINTS:
            raise ScpiError(-223, f"a trace has at most {MOST_POINTS} points")
        if len(table) < 2:
            raise ScpiError(-220, "a trace has at least 2 points")
        if not np.all(np.abs(table) <= 1):  # not-a-number is not within either
            raise ScpiError(-222, "a trace lies within +-1")
        if name not in self._tables and len(self._tables) == MOST_TRACES:
            raise ScpiError(-225, f"there are {MOST_TRACES} traces")
        self._tables[name] = table
        if self._in_use() == name:
            self._changed()

    def _decoded(self, data: tuple[bytes | float, ...]) -> FloatArray:
        numbers = [value for value in data if not isinstance(value, bytes)]
        if len(numbers) == len(data):
            return np.array(numbers)
        if len(data) > 1 or self._format not in _KINDS:
            raise ScpiError(-104, "one block in the format set, or numbers only")
        kind, block = self._kind(), b"".join(value for value in data if isinstance(value, bytes))
        if len(block) % kind.itemsize:
            raise ScpiError(-161, f"no whole number of {kind.itemsize}-byte points")
        return np.frombuffer(block, kind).astype(np.float64) / (FULL if kind.kind == "i" else 1)

    def _show(self, table: FloatArray) -> bytes:
        if self._format not in _KINDS:
            return b",".join(map(show_number, table.tolist()))
        kind = self._kind()
        return definite_block((np.rint(table * FULL) if kind.kind == "i" else table).astype(kind).tobytes())

    def _kind(self) -> np.dtype[np.generic]:
        return np.dtype(("<" if self._is_swapped() else ">") + _KINDS[self._format])

    def _catalog(self) -> bytes:
        return b",".join(b'"%s"' % name.encode("ascii") for name in self._tables) or b'""'

    def _delete(self, suffixes: tuple[int, ...], name: str | None = None) -> None:
        gone = list(self._tables) if name is None else [name]
        if self._in_use() in gone:
            raise ScpiError(-221, "the trace is being played")
        for word in gone:
            self.table(word)
            del self._tables[word]

    def _set_format(self, suffixes: tuple[int, ...], kind: str, length: int | None = None) -> None:
        wanted = (kind, _LENGTHS[kind] if length is None else length)
        if wanted not in (*_KINDS, ("ASC", 0)):
            raise ScpiError(-224, "REAL has length 32 or 64, INTeger 16, ASCii 0")
        self._format = wanted


def harmonics(table: FloatArray) -> tuple[float, tuple[tuple[int, complex], ...]]:
    """Return mean and harmonics of one period, in the form that `Drive` takes.

    Parameters
    ----------
    table : (N,) float array

    Returns
    -------
    mean : float
    harmonics : tuple of (order, complex)
        The table is mean + Im(sum of harmonic exp(j 2 pi order n / N)); without the faint ones.
    """
    lines = np.fft.rfft(table) / len(table)
    weights = 2j * lines[1:]
    if len(table) % 2 == 0:
        weights[-1] /= 2  # the line at half the sampling rate stands for both sides
    loud = np.flatnonzero(np.abs(weights) > FAINT * np.abs(lines).max())
    return float(lines[0].real), tuple((int(order) + 1, complex(weights[order])) for order in loud)
