"""A walk along a scope's dialect: its channels, its time base, then records of what its inputs carry."""

from __future__ import annotations

from dataclasses import replace
from functools import partial

from bandproof.drivers.errors import InstrumentProblem, NoAnswer, ReplyError
from bandproof.drivers.instrument import spelt
from bandproof.drivers.interval_check import checked_interval
from bandproof.drivers.record import preamble_scaling, scaling_number
from bandproof.drivers.record_check import Taken, checked_record
from bandproof.drivers.scope import ChannelSetting, Scope
from bandproof.drivers.scpi import sample_size
from bandproof.drivers.session import as_text
from bandproof.drivers.walk import Walk

__all__ = ["walk_scope"]

RANGES, OFFSETS = (0.5, 5.0), (1.0, 0.0)  # V; the last is what records are taken with
POINTS, DURATIONS = (1000.0, 500.0), (0.05, 0.02)  # 25 000 samples a second: no power of ten, so slips can be told
INTERVALS = (50e-6, 40e-6)
SHIFT = 0.4  # of the range: a quiet input stays well inside
LONGEST = 30.0  # s that a record of this walk may be waited for, whatever its interval is taken for; arbitrary


def walk_scope(steps: Walk, scope: Scope) -> None:
    """Try every slot of a scope; its settings are afterwards what they were."""
    dialect = scope.dialect
    steps.identity(dialect.identity)
    for name in dialect.channels[:2]:
        steps.number("probe_factor", dialect.probe_factor, name, values=(10.0, 1.0))
        steps.choice("coupling", dialect.coupling, name, needed=("DC",))
        steps.toggle("bandwidth_limit", dialect.bandwidth_limit, name)
        steps.number("range", dialect.range, name, values=RANGES, stays=True)
        steps.number("offset", dialect.offset, name, values=OFFSETS, stays=True)
    steps.number("points", dialect.points, values=POINTS, stays=True)
    steps.number("duration", dialect.duration, values=DURATIONS, stays=True)
    if dialect.interval.set:
        known = steps.number("interval", dialect.interval, values=INTERVALS, stays=True)
    else:
        known = steps.attempt("interval.query", dialect.interval.query, lambda: checked_interval(scope))
    _acquisition(steps, scope, known)
    steps.restore()


def _acquisition(steps: Walk, scope: Scope, interval_known: bool) -> None:
    dialect = scope.dialect
    steps.tell("acquisition.abort", dialect.acquisition.abort, needed=False)
    for text in dialect.acquisition.prepare:
        steps.tell("acquisition.prepare", text)
    if not dialect.acquisition.prepare:
        steps.note("acquisition.prepare", "missing")
    if not (dialect.points.query or dialect.points.fixed):
        steps.note("transfer.read", "skipped", dialect.transfer.read, "how many points it takes cannot be asked")
        return
    try:
        points = scope.points()
        duration = points * scope.read_number(dialect.interval) if interval_known else LONGEST
        if dialect.duration.query and not interval_known:
            duration = scope.read_number(dialect.duration)
        settings = {name: _setting(scope, name) for name in dialect.channels[:2]}
    except (InstrumentProblem, ValueError) as problem:
        steps.refuse("transfer.read", dialect.transfer.read, problem)
        return
    _Records(steps, scope, points, min(abs(duration), LONGEST)).take(settings)


def _setting(scope: Scope, name: str) -> ChannelSetting:
    """Return a channel's range, offset and probe factor as they are, in V at the probe's tip."""
    dialect = scope.dialect
    return ChannelSetting(
        range=scope.read_number(dialect.range, name) if dialect.range.query else 1.0,
        offset=scope.read_number(dialect.offset, name) if dialect.offset.query else 0.0,
        coupling="DC",
        bandwidth_limit=False,
        probe_factor=1.0,
    )


class _Records:
    """Takes a record of both channels as they stand, and another with the ranges shifted."""

    def __init__(self, steps: Walk, scope: Scope, points: int, duration: float) -> None:
        self.steps, self.scope, self.points, self.duration = steps, scope, points, duration
        self.taken: dict[str, tuple[Taken, ...]] = {}

    def take(self, settings: dict[str, ChannelSetting]) -> None:
        acquisition = self.scope.dialect.acquisition
        sent = f"{acquisition.start}, {acquisition.complete}"
        if not self.steps.attempt("acquisition.start", sent, lambda: self.scope.start_and_wait(self.duration)):
            return
        for name, setting in settings.items():
            self._announced(name)
            self._read(f"transfer.read {name}", name, setting)
        if self.scope.dialect.offset.set and self.scope.dialect.offset.query and len(self.taken) == len(settings):
            self._shifted(settings)

    def _announced(self, name: str) -> None:
        dialect = self.scope.dialect
        for text in dialect.transfer.before:
            self.steps.tell(f"transfer.before {name}", text.format(channel=name))
        for slot in ("scale", "offset", "origin", "preamble"):
            if text := getattr(dialect.transfer, slot).format(channel=name):
                self.steps.attempt(f"transfer.{slot} {name}", text, partial(self._scaling, slot, text, name))
        if dialect.overload.query:
            self.steps.ask(f"overload.query {name}", dialect.overload.query.format(channel=name))

    def _scaling(self, slot: str, text: str, name: str) -> str:
        """Ask for what scales a record; return the answer, which must be one."""
        answer, transfer = self.scope.session.ask(text, as_text), self.scope.dialect.transfer
        try:
            if slot == "preamble":
                preamble_scaling(transfer, name, answer.encode("ascii"))
            else:
                scaling_number(transfer, name, slot, answer.encode("ascii"))
        except ValueError as problem:
            raise ValueError(f"answers {answer}, not as it should be {problem}") from problem
        return answer

    def _read(self, slot: str, name: str, setting: ChannelSetting) -> None:
        def record() -> str:
            taken = (*self.taken.get(name, ()), Taken(self.scope.session, setting))
            words = checked_record(self.scope.dialect, name, self.points, taken)
            self.taken[name] = taken
            return words

        text = self.scope.dialect.transfer.read.format(channel=name)
        self.steps.attempt(slot, text, record, hint=self._hint)

    def _shifted(self, settings: dict[str, ChannelSetting]) -> None:
        """Take a record with both ranges shifted: a quiet input must read the same."""
        dialect = self.scope.dialect
        low, high = dialect.offset.limits
        shifted: dict[str, ChannelSetting] = {}

        def shift() -> str:
            for name, setting in settings.items():
                wanted = min(max(setting.offset + SHIFT * setting.range, low), high)
                text = dialect.offset.set.format(value=spelt(dialect.offset, wanted), channel=name)
                self.scope.session.command(text)
                shifted[name] = replace(setting, offset=self.scope.read_number(dialect.offset, name))
            self.scope.start_and_wait(self.duration)
            return ", ".join(f"{setting.offset:g} V" for setting in shifted.values())

        if self.steps.attempt("record, range shifted", dialect.acquisition.start, shift):
            for name, setting in shifted.items():
                self._read(f"transfer.read shifted {name}", name, setting)

    def _hint(self, problem: InstrumentProblem) -> str:
        """Return what is likely wrong with the transfer when a record did not come as it should."""
        transfer = self.scope.dialect.transfer
        if transfer.framing == "line":
            return ""
        size = sample_size(transfer.encoding)
        if isinstance(problem, NoAnswer) and transfer.terminated and problem.received >= max(self.points * size, 2):
            return "does the block end without a newline? then terminated = false"
        if not isinstance(problem, ReplyError):
            return ""
        if problem.excerpt.strip() == b"" and not transfer.terminated:
            return "a newline came after the block: terminated = true"
        stated = problem.excerpt[2:]
        if size and problem.excerpt.startswith(b"#") and stated.isdigit():
            return self._length_hint(int(stated), size)
        return ""

    def _length_hint(self, stated: int, size: int) -> str:
        """Return what a block of another length than expected speaks for."""
        each, rest = divmod(stated, self.points)
        if rest == 0 and each in (1, 2, 4, 8):
            words = f"that is {each} byte(s) for each of {self.points} points, not {size}"
        else:
            words = f"that is {stated / size:g} samples, {self.points} were said"
        return f"{words}: `encoding`, or the query or unit of [points]?"
