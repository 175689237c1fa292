"""A check standard's history as text: the last checks as a table, and a chart of each figure, in 80 columns."""

from collections.abc import Iterator, Mapping, Sequence
from datetime import datetime
from math import nan

from bandproof.bench.check_chart import FEWEST, Key, Line
from bandproof.bench.check_file import Entry
from bandproof.bench.types import Quantity

__all__ = ["chart_lines", "origin", "table_lines"]

_SHOWN = 8  # last checks in the table
_COLUMNS = 60  # last checks in a chart
_HALF = 3  # rows from the centre line to a limit
_HEADS: Mapping[Quantity, str] = {"centre": "f0 / Hz", "q": "Q", "gain": "gain / V/V"}


def table_lines(entries: Sequence[Entry]) -> Iterator[str]:
    """Yield a table of the last checks, a line a stage."""
    yield f"{'check, UTC':<23}{'stage':<13}{''.join(f'{head:>12}' for head in _HEADS.values())}  state"
    for entry in entries[-_SHOWN:]:
        head = f"{entry.number:>4}  {entry.started[:16].replace('T', ' ')}"
        for stage, figures in entry.figures.items():
            cells = "".join(f"{_number(figures[quantity]):>12}" for quantity in _HEADS)
            yield f"{head:<23}{stage[:12]:<13}{cells}  {_state(entry)}"
            head = ""


def _number(found: list[float] | None) -> str:
    return "-" if found is None else f"{found[0]:.6g}"


def _state(entry: Entry) -> str:
    if entry.verdict == "pass":
        return "in"
    return "accepted" if entry.accepted else "OUT"


def origin(lines: Mapping[Key, Line], entries: Sequence[Entry]) -> str:
    """Return where the limits come from; ``entries`` are the checks that count."""
    made_of = max((line.made_of for line in lines.values()), default=0)
    if not made_of:
        return (
            f"limits are provisional, those the standard's board file declares: {len(entries)} of the {FEWEST} checks "
            "that a chart is made of"
        )
    first, last = (datetime.fromisoformat(entries[i].started).date() for i in (0, made_of - 1))
    return (
        f"limits: about one check of a healthy bench in 100 leaves them; made of the first {made_of} checks ("
        f"{first} to {last}), no closer than a check's own noise allows"
    )


def chart_lines(key: Key, line: Line, entries: Sequence[Entry], *, most: int = _COLUMNS) -> Iterator[str]:
    """Yield the chart of one figure over the last checks: ``o`` in order, ``x`` out, ``·`` centre line and limits."""
    stage, quantity = key
    shown = [entry for entry in entries if entry.figures[stage][quantity] is not None][-min(most, _COLUMNS) :]
    rows = {row: [" ·"[row in (-_HALF, 0, _HALF)]] * len(shown) for row in range(_HALF + 1, -_HALF - 2, -1)}
    for column, entry in enumerate(shown):
        row = _row((entry.figures[stage][quantity] or [nan])[0], line)
        doubted = entry.verdict == "undecided" and not entry.accepted
        rows[row][column] = "x" if abs(row) > _HALF or doubted else "o"
    names = {_HALF: line.limits.upper, 0: line.limits.centre, -_HALF: line.limits.lower}
    yield f"{stage}, {_HEADS[quantity]}"
    for row, marks in rows.items():
        label = f"{names[row]:.6g}" if row in names else ""
        yield f"{label:>12} |{''.join(marks)}".rstrip()


def _row(value: float, line: Line) -> int:
    """Return the row of a value: beyond a limit is always outside it, within never."""
    limits = line.limits
    if value > limits.upper:
        return _HALF + 1
    if value < limits.lower:
        return -_HALF - 1
    half = limits.upper - limits.centre if value > limits.centre else limits.centre - limits.lower
    return round(_HALF * (value - limits.centre) / half) if half else 0
