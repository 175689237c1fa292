"""Whether a scope's sample interval goes with its points and duration, and which slip of a dialect would explain it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

from bandproof.drivers.instrument import understood
from bandproof.drivers.scope import Scope
from bandproof.drivers.scpi import split_fields
from bandproof.drivers.session import as_text
from bandproof.drivers.slots import Number

__all__ = ["checked_interval"]

_FITS = (
    1.7  # times what was set, either way: below 2, a usual slip; above what scopes record beyond the screen; arbitrary
)
_CLOSE = 1.25  # times, for a slip to be named; arbitrary
_FACTORS = (1e3, 1e-3, 1e6, 1e-6, 1e9, 1e-9, 2.0, 0.5, 10.0, 0.1)


def checked_interval(scope: Scope) -> str:
    """Ask a scope for its sample interval; return the answer.

    Raises
    ------
    ValueError
        It is no number, or points times interval are not the duration that is set; says what is likely wrong.
    InstrumentProblem
        See `Session.ask`.
    """
    dialect = scope.dialect
    answer = scope.session.ask(dialect.interval.query, as_text)
    if not (dialect.points.query and dialect.duration.query):
        try:
            understood(dialect.interval, answer.encode("ascii"))
        except ValueError as problem:
            raise ValueError(f"answers {answer}, not {problem}") from problem
        return answer
    points, duration = round(scope.read_number(dialect.points)), scope.read_number(dialect.duration)
    if points > 0 and duration > 0:
        _judge(dialect.interval, answer, points, duration)
    return answer


def _judge(number: Number, answer: str, points: int, duration: float) -> None:
    line, expected = answer.encode("ascii"), duration / points
    likely = _likely(number, line, expected)
    try:
        found = understood(number, line)
    except ValueError as problem:
        raise ValueError(f"answers {answer}, expected {problem}: likely {likely}") from problem
    if not _is_near(found, expected, _FITS):
        raise ValueError(
            f"answers {answer}, read as {found:.4g} s a sample: {points} points would last {found * points:.4g} s, "
            f"but {duration:.4g} s are set: likely {likely}"
        )


def _is_near(found: float, expected: float, times: float) -> bool:
    return expected / times <= found <= expected * times


def _likely(number: Number, line: bytes, expected: float) -> str:
    """Return the smallest change of the dialect with which an answer would be as expected."""
    for words, other in _slips(number, len(split_fields(line))):
        try:
            found = understood(other, line)
        except ValueError:
            continue
        if _is_near(found, expected, _CLOSE):
            return words
    return "the unit of [interval], [duration] or [points]"


def _slips(number: Number, fields: int) -> Iterator[tuple[str, Number]]:
    """Yield changes of the interval's slots, the smallest first."""
    turned = replace(number, reciprocal=not number.reciprocal)
    rate = f"reciprocal = {str(turned.reciprocal).lower()} (it answers {'a sample rate' if turned.reciprocal else 's'})"
    places = [place for place in range(fields) if place != number.place]
    for place in places:
        yield f"[interval] place = {place}", replace(number, place=place)
    yield f"[interval] {rate}", turned
    for factor in _FACTORS:
        other = replace(number, unit=number.unit * factor)
        yield f"[interval] unit = {other.unit:g}, or that of [duration] or [points] is wrong by {_times(factor)}", other
    for factor in _FACTORS:
        other = replace(turned, unit=number.unit * factor)
        yield f"[interval] {rate} and unit = {other.unit:g}", other
    for place in places:
        for factor in _FACTORS:
            other = replace(number, place=place, unit=number.unit * factor)
            yield f"[interval] place = {place} and unit = {other.unit:g}", other


def _times(factor: float) -> str:
    return f"{max(factor, 1 / factor):g}"
