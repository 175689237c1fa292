"""The clauses of a contract that only a scope keeps; see `contract`."""

from __future__ import annotations

from typing import Any

from bandproof.drivers.clause import NotTried, demand
from bandproof.drivers.errors import InstrumentError, SettingRefused
from bandproof.drivers.scope import Scope

__all__ = ["SCOPE_CLAUSES"]

RANGE, DURATION, POINTS = 1.0, 0.01, 1000
_BESIDE = 1.9  # ranges from 0 V: outside also where samples reach past the screen, within one full range; arbitrary


def takes_the_record_it_says(scope: Scope) -> None:
    """A record has the points and the interval that were read back."""
    setting = _prepared(scope)
    record = scope.acquire()
    found = (record.volts.shape, record.sample_interval)
    demand(found == ((2, setting.points), setting.sample_interval), f"{found} for {setting}")


def takes_the_duration_asked(scope: Scope) -> None:
    """A record asked for is as long as asked within the dialect's limits, and a longer one is longer."""
    short = _prepared(scope).duration
    longer = scope.set_record(4 * DURATION, POINTS).duration
    demand(2.5 < longer / short < 6.0, f"{short:g} s asked {DURATION:g}, {longer:g} s asked {4 * DURATION:g}")


def reads_back_a_range_no_smaller(scope: Scope) -> None:
    """A range read back holds what was asked."""
    for peak in (0.2, 1.0, 3.0):
        found = scope.set_channel(1, range=peak).range
        demand(found >= 0.999 * peak, f"{found:g} V for {peak:g} V")


def sees_no_overload_inside_its_range(scope: Scope) -> None:
    """An input inside the range is not told as overloaded."""
    _prepared(scope, peak=5.0)
    demand(not scope.acquire().overload.any(), "an overload is told on a range of 5 V")


def tells_an_overload(scope: Scope) -> None:
    """An input outside the range is told as overloaded: here a range that is shifted away from 0 V."""
    if not scope.dialect.offset.set:
        raise NotTried("its range cannot be shifted, and without a signal nothing else overloads it")
    peak = max(scope.set_channel(channel, range=0.1).range for channel in (1, 2))
    for offset in (_BESIDE * peak, -_BESIDE * peak):  # both ends of the converter
        _shifted(scope, 0.1, offset)
        record = scope.acquire()
        seen = f"{record.volts.min():g} to {record.volts.max():g} V on a range of {peak:g} V round {offset:g} V"
        demand(bool(record.overload.all()), f"{seen}, and no overload told: look at [overload]")


def shifts_its_range_without_shifting_the_input(scope: Scope) -> None:
    """A quiet input reads the same on a range that is shifted: the offset has the right sign and unit."""
    if not scope.dialect.offset.set:
        raise NotTried("its range cannot be shifted")
    _prepared(scope, peak=2.0)
    still = scope.acquire().volts.mean(axis=1)
    shift = min(1.0, scope.dialect.offset.limits[1])
    _shifted(scope, 2.0, shift)
    moved = scope.acquire().volts.mean(axis=1) - still
    demand(
        bool((abs(moved) < 0.2 * shift).all()),
        f"it reads {moved[0]:+.3g} V more on a range shifted by {shift:g} V: look at [offset]",
    )


def repeats_no_channel_setting(scope: Scope) -> None:
    """A channel and a record set again alike cost no message."""
    _prepared(scope)
    before = scope.session.sent
    _prepared(scope)
    demand(scope.session.sent == before, f"{scope.session.sent - before} messages were sent")


def records_as_before_after_reopening(scope: Scope) -> None:
    """Closed, opened and restored, it takes the same record."""
    setting = _prepared(scope)
    scope.acquire()
    scope.reopen()
    scope.restore()
    record = scope.acquire()
    found = (record.volts.shape, record.sample_interval)
    demand(found == ((2, setting.points), setting.sample_interval), f"{found} for {setting}")


def _shifted(scope: Scope, peak: float, offset: float) -> None:
    """Prepare a record on a shifted range; one that the instrument does not take is not tried."""
    try:
        _prepared(scope, peak=peak, offset=offset)
    except (InstrumentError, SettingRefused) as problem:
        raise NotTried(f"its range of {peak:g} V is not to be shifted by {offset:g} V: {problem}") from problem


def _prepared(scope: Scope, *, peak: float = RANGE, offset: float = 0.0) -> Any:
    for channel in (1, 2):
        scope.set_channel(channel, range=peak, offset=offset)
    return scope.set_record(DURATION, POINTS)


SCOPE_CLAUSES = (
    reads_back_a_range_no_smaller,
    takes_the_record_it_says,
    takes_the_duration_asked,
    sees_no_overload_inside_its_range,
    tells_an_overload,
    shifts_its_range_without_shifting_the_input,
    repeats_no_channel_setting,
    records_as_before_after_reopening,
)
