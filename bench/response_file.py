"""A response measured elsewhere, read from CSV with every mistake named by its line.

The header row is ``frequency_Hz,real,imag`` or ``frequency_Hz,gain_dB,phase_deg``, either with ``standard_uncertainty``
behind: that of the real and of the imaginary part of the complex ratio, alike and uncorrelated, in V/V, under both
headers. Frequencies ascend. ``#`` begins a comment, on a line of its own or behind the numbers; blank lines are
skipped.
"""

import csv
import re
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from math import isfinite, nan
from pathlib import Path

import numpy as np

from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.reading import Mistakes, nearest, read_text

__all__ = ["FEWEST", "FEWEST_WITHOUT_UNCERTAINTY", "Response", "read_response"]

FEWEST = 5  # points; the largest model has seven variables, two data a point, and three are left to judge it by
# The noise is then estimated from what the fit leaves: 3 % too small at 10 points, 8 % at 8, 41 % at 5 (20000 draws).
FEWEST_WITHOUT_UNCERTAINTY = 10
_MOST_TOLD = 20  # mistakes of one file that are listed; arbitrary
_LONGEST = 1000  # characters of a line; arbitrary, ten times what four numbers need
_COLUMNS = (("frequency_Hz", "real", "imag"), ("frequency_Hz", "gain_dB", "phase_deg"))
_UNCERTAINTY = "standard_uncertainty"
_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
_LEAST, _MOST = 1e-20, 1e20  # arbitrary; fourth powers stay finite
_MOST_DECIBELS = 400.0
_ABOVE_ZERO = ("frequency_Hz", _UNCERTAINTY)

Line = tuple[int, str]
Row = tuple[int, tuple[float, ...]]


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """A measured response.

    Attributes
    ----------
    path : str
        Where it was read from.
    frequency : (N,)
        Hz, ascending.
    response : (N,) complex
        Ratio out/in.
    uncertainty : (N,) or None
        Stated standard uncertainty of the real and of the imaginary part, in V/V.
    """

    path: str
    frequency: FloatArray
    response: ComplexArray
    uncertainty: FloatArray | None


def read_response(path: Path) -> Response:
    """Return the response a CSV file holds.

    Raises
    ------
    FileMistakes
        Every mistake with its line: columns, numbers, frequencies out of order or twice, too few points, no peak
        inside.
    """
    mistakes = Mistakes(str(path))
    lines = list(_lines(read_text(path)))
    columns = _header(lines, mistakes)
    rows = list(_rows(lines[1:], columns, mistakes)) if columns else []
    if columns:
        _check_order(rows, mistakes)
        _check_count(lines, rows, columns, mistakes)
    if not mistakes.findings:
        found = _response(str(path), columns, rows)
        _check_peak(found, [number for number, _ in rows], mistakes)
    mistakes.findings.sort(key=_line_number)
    if len(mistakes.findings) > _MOST_TOLD:
        more = len(mistakes.findings) - _MOST_TOLD
        mistakes.findings[_MOST_TOLD:] = [f"and {more} more"]
    mistakes.stop_if_any()
    return found


def _line_number(finding: str) -> int:
    return int(finding.removeprefix("line ").partition(":")[0])


def _lines(text: str) -> Iterator[Line]:
    """Yield the lines that hold something, numbered from 1, without their comments."""
    for number, line in enumerate(re.split("\r\n|\r|\n", text), 1):
        content = line.split("#", 1)[0].strip()
        if content:
            yield number, content


def _cells(line: str) -> tuple[str, ...]:
    """Return the cells of a line, quotes removed."""
    return tuple(cell.strip() for cell in next(csv.reader([line])))


def _header(lines: list[Line], mistakes: Mistakes) -> tuple[str, ...]:
    """Return the columns of the header row, or nothing after noting what is wrong with it."""
    accepted = f"{' or '.join(','.join(columns) for columns in _COLUMNS)}, {_UNCERTAINTY} behind where it is known"
    if not lines:
        mistakes.add("line 1", f"there is no data; expected a header row {accepted}")
        return ()
    number, line = lines[0]
    found = _cells(line[:_LONGEST])
    known = [(*columns, *rest) for columns in _COLUMNS for rest in ((), (_UNCERTAINTY,))]
    if found in known:
        return found
    words = list(dict.fromkeys(name for columns in known for name in columns))
    hints = "".join(nearest(name, words) for name in found[:8] if name not in words)
    mistakes.add(f"line {number}", f"found the header {','.join(found)[:80]!r}; expected {accepted}{hints}")
    return ()


def _rows(lines: list[Line], columns: tuple[str, ...], mistakes: Mistakes) -> Iterator[Row]:
    """Yield the rows whose every number can be used."""
    for number, line in lines:
        if len(line) > _LONGEST:
            mistakes.add(f"line {number}", f"has {len(line)} characters; expected {len(columns)} numbers")
            continue
        cells = _cells(line)
        if len(cells) != len(columns):
            hint = "; separate them by commas" if ";" in line or "\t" in line else ""
            hint = "; a decimal comma is not read, write a point" if len(cells) > len(columns) else hint
            mistakes.add(f"line {number}", f"has {len(cells)} columns, the header has {len(columns)}{hint}")
            continue
        values = [_number(cell, name, number, mistakes) for cell, name in zip(cells, columns, strict=True)]
        if all(map(isfinite, values)):
            yield number, tuple(values)


def _number(cell: str, name: str, number: int, mistakes: Mistakes) -> float:
    """Return a number, or NaN after noting what is wrong with it."""
    value = float(cell) if _NUMBER.fullmatch(cell) else nan
    size = abs(value)
    if name in _ABOVE_ZERO:
        kind, usable = f"a number above zero, {_LEAST:g} to {_MOST:g}", _LEAST <= value <= _MOST
    elif name == "gain_dB":
        kind, usable = f"decibels, -{_MOST_DECIBELS:g} to {_MOST_DECIBELS:g}", size <= _MOST_DECIBELS
    else:
        kind, usable = "a number", size <= _MOST
    if usable:
        return value
    comma = " (a decimal comma is not read, write a point)" if "," in cell else ""
    mistakes.add(f"line {number}", f"{name} is {cell[:40]!r}; expected {kind}{comma}")
    return nan


def _check_order(rows: list[Row], mistakes: Mistakes) -> None:
    for (earlier, before), (number, row) in pairwise(rows):
        if row[0] == before[0]:
            mistakes.add(f"line {number}", f"frequency {row[0]:.12g} Hz stands twice, first in line {earlier}")
        elif row[0] < before[0]:
            mistakes.add(
                f"line {number}", f"frequency {row[0]:.12g} Hz comes after {before[0]:.12g} Hz; expected ascending"
            )


def _check_count(lines: list[Line], rows: list[Row], columns: tuple[str, ...], mistakes: Mistakes) -> None:
    stated = _UNCERTAINTY in columns
    fewest = FEWEST if stated else FEWEST_WITHOUT_UNCERTAINTY
    if len(rows) < fewest:
        why = "" if stated else f" where no {_UNCERTAINTY} is stated and the noise must be seen in the points"
        mistakes.add(f"line {lines[-1][0]}", f"{len(rows)} usable points; a band needs at least {fewest}{why}")


def _response(path: str, columns: tuple[str, ...], rows: list[Row]) -> Response:
    table = np.array([row for _, row in rows])
    if columns[1] == "real":
        response = table[:, 1] + 1j * table[:, 2]
    else:
        response = 10.0 ** (table[:, 1] / 20.0) * np.exp(1j * np.radians(table[:, 2]))
    return Response(path, table[:, 0], response, table[:, 3] if _UNCERTAINTY in columns else None)


def _check_peak(found: Response, lines: list[int], mistakes: Mistakes) -> None:
    """Note a curve whose greatest point is at an end: there is no band to fit inside."""
    gain = np.abs(found.response)
    top = int(gain.argmax())
    if gain[top] < _LEAST:
        mistakes.add(f"line {lines[top]}", "the response is nothing everywhere; a band has a peak")
    elif top in (0, len(lines) - 1):
        end = "first" if top == 0 else "last"
        mistakes.add(
            f"line {lines[top]}", f"the greatest gain is at the {end} frequency; a band has its peak inside the data"
        )
