"""A response measured elsewhere, read from CSV with every mistake named by its line.

A header row of ``frequency_Hz,real,imag`` or ``frequency_Hz,gain_dB,phase_deg``, either with ``standard_uncertainty``
(of each component of the complex ratio, in V/V) behind; ``#`` begins a comment; blank lines are skipped.
"""

import csv
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from math import isfinite
from pathlib import Path

import numpy as np

from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.reading import Mistakes, nearest, read_text

__all__ = ["Response", "read_response"]

FEWEST = 5  # points: five unknowns of the band model, two data a point
_MOST_TOLD = 20  # mistakes of one file that are listed
_COLUMNS = (("frequency_Hz", "real", "imag"), ("frequency_Hz", "gain_dB", "phase_deg"))
_UNCERTAINTY = "standard_uncertainty"


@dataclass(frozen=True, slots=True)
class Response:
    """A measured response: Hz (N,), complex ratio (N,), standard uncertainty of each component (N,) or None."""

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
    lines = [
        (number, line)
        for number, line in enumerate(read_text(path).splitlines(), 1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    columns = _header(lines, mistakes)
    rows = list(_rows(lines[1:], columns, mistakes)) if columns else []
    if columns:
        _check_order(rows, mistakes)
    if len(mistakes.findings) > _MOST_TOLD:
        more = len(mistakes.findings) - _MOST_TOLD
        mistakes.findings[_MOST_TOLD:] = [f"and {more} more"]
    mistakes.stop_if_any()
    found = _response(columns, rows)
    _check_peak(found, [number for number, _ in rows], mistakes)
    mistakes.stop_if_any()
    return found


def _header(lines: list[tuple[int, str]], mistakes: Mistakes) -> tuple[str, ...]:
    """Return the columns of the header row, or nothing after noting what is wrong with it."""
    accepted = " or ".join(",".join(columns) for columns in _COLUMNS)
    if not lines:
        mistakes.add("line 1", f"there is no data; expected a header row {accepted}")
        return ()
    number, line = lines[0]
    found = tuple(cell.strip() for cell in next(csv.reader([line])))
    known = [(*columns, *rest) for columns in _COLUMNS for rest in ((), (_UNCERTAINTY,))]
    if found in known:
        return found
    words = {name for columns in known for name in columns}
    hints = "".join(nearest(name, words) for name in found if name not in words)
    mistakes.add(f"line {number}", f"found the header {','.join(found)[:80]!r}; expected {accepted}{hints}")
    return ()


def _rows(
    lines: list[tuple[int, str]], columns: tuple[str, ...], mistakes: Mistakes
) -> Iterator[tuple[int, tuple[float, ...]]]:
    for number, line in lines:
        cells = [cell.strip() for cell in next(csv.reader([line]))]
        if len(cells) != len(columns):
            mistakes.add(f"line {number}", f"has {len(cells)} columns, the header has {len(columns)}")
            continue
        values = [_number(cell, name, number, mistakes) for cell, name in zip(cells, columns, strict=True)]
        if all(map(isfinite, values)):
            yield number, tuple(values)


def _number(cell: str, name: str, number: int, mistakes: Mistakes) -> float:
    try:
        value = float(cell)
    except ValueError:
        value = float("nan")
    positive = name in ("frequency_Hz", _UNCERTAINTY)
    if not isfinite(value) or (positive and value <= 0.0) or (name == "gain_dB" and abs(value) > 1e4):
        kind = "a number above zero" if positive else "a number"
        mistakes.add(f"line {number}", f"{name} is {cell[:40]!r}; expected {kind} (with a decimal point)")
        return float("nan")
    return value


def _check_order(rows: list[tuple[int, tuple[float, ...]]], mistakes: Mistakes) -> None:
    for (_, before), (number, row) in pairwise(rows):
        if row[0] == before[0]:
            mistakes.add(f"line {number}", f"frequency {row[0]:g} Hz stands twice")
        elif row[0] < before[0]:
            mistakes.add(f"line {number}", f"frequency {row[0]:g} Hz comes after {before[0]:g} Hz; expected ascending")
    if len(rows) < FEWEST:
        last = rows[-1][0] if rows else 1
        mistakes.add(f"line {last}", f"{len(rows)} usable points; a band needs at least {FEWEST}")


def _response(columns: tuple[str, ...], rows: list[tuple[int, tuple[float, ...]]]) -> Response:
    table = np.array([row for _, row in rows])
    if columns[1] == "real":
        response = table[:, 1] + 1j * table[:, 2]
    else:
        response = 10.0 ** (table[:, 1] / 20.0) * np.exp(1j * np.radians(table[:, 2]))
    return Response(table[:, 0], response, table[:, 3] if len(columns) > 3 else None)


def _check_peak(found: Response, lines: list[int], mistakes: Mistakes) -> None:
    """Note a curve whose greatest point is at an end: there is no band to fit inside."""
    top = int(np.abs(found.response).argmax())
    if top in (0, len(lines) - 1) or not np.abs(found.response).max() > 0.0:
        mistakes.add(
            f"line {lines[top]}",
            f"the greatest gain is at the {'first' if top == 0 else 'last'} frequency; a band has its peak inside",
        )
