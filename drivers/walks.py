"""Which slots of a generator, scope, switch and supply are walked, in which order."""

from __future__ import annotations

import math
from collections.abc import Sequence

from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.generator import Generator
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.record import read_channel
from bandproof.drivers.scope import ChannelSetting, Scope
from bandproof.drivers.session import as_text
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch
from bandproof.drivers.walk import NO_BOARD, Line, Walk, nearby

__all__ = ["walk"]


def walk(instrument: Instrument, *, no_board: bool = False, routes: Sequence[str] = ()) -> tuple[Line, ...]:
    """Try every slot of an instrument's dialect; return what came of each, in the order tried.

    Parameters
    ----------
    instrument : Generator, Scope, Switch or Supply
    no_board : bool
        The operator says that no board is connected, so that outputs may be switched on.
    routes : sequence of str
        The switch's routes; the first is closed once.

    Returns
    -------
    tuple of Line
        Settings are as they were, but for a generator's or supply's output (off), a generator's sine and a scope's
        record format. Nothing is raised for what an instrument refuses.
    """
    steps = Walk(instrument)
    if isinstance(instrument, Generator):
        _generator(steps, instrument, no_board)
    elif isinstance(instrument, Scope):
        _scope(steps, instrument)
    elif isinstance(instrument, Switch):
        _switch(steps, instrument, routes)
    elif isinstance(instrument, Supply):
        _supply(steps, instrument, no_board)
    else:
        raise TypeError(f"nothing is known to walk for a {type(instrument).__name__}")
    return tuple(steps.lines)


def _generator(steps: Walk, instrument: Generator, no_board: bool) -> None:
    dialect = instrument.dialect
    output = dialect.output
    steps.answered("output.off", output.off, output.query, output.is_off)
    steps.ask("output.query", output.query)
    steps.identity(dialect.identity)
    steps.ask("shape.query", dialect.shape.query)
    for text in dialect.shape.sine:
        steps.tell("shape.sine", text)
    if not dialect.shape.sine:
        steps.note("shape.sine", "missing")
    steps.number("frequency", dialect.frequency, other=nearby)
    _load(steps, instrument)
    steps.number("amplitude", dialect.amplitude, other=lambda before: before / 2 if before else 0.1)
    steps.number("offset", dialect.offset, other=lambda before: before / 2 if before else 0.1)
    if no_board:
        steps.answered("output.on", output.on, output.query, output.is_on)
        steps.answered("output.off", output.off, output.query, output.is_off)
    else:
        steps.note("output.on", "skipped", output.on, NO_BOARD)


def _load(steps: Walk, instrument: Generator) -> None:
    """Set the load to 50 ohm and to the open circuit, and to what it was where that can be asked."""
    load, before = instrument.dialect.load, ""
    if not load.set:
        steps.note("load.set", "missing")
        return
    if steps.ask("load.query", load.query):
        before = instrument.session.ask(load.query, as_text)
    words = ["50"] + ([load.high] if load.high else [])
    if before and before not in words[-1:]:
        words.append(before)
    for word in words:
        steps.tell("load.set", load.set.format(value=word))


def _scope(steps: Walk, instrument: Scope) -> None:
    dialect = instrument.dialect
    steps.identity(dialect.identity)
    for name in dialect.channels[:2]:
        steps.number("probe_factor", dialect.probe_factor, name, other=lambda before: 1.0 if before == 10.0 else 10.0)
        steps.choice("coupling", dialect.coupling, name, needed=("DC",))
        steps.toggle("bandwidth_limit", dialect.bandwidth_limit, name)
        steps.number("range", dialect.range, name, other=lambda before: before / 2)
        steps.number("offset", dialect.offset, name, other=lambda before: before / 2 if before else 0.1)
    steps.number("points", dialect.points, other=lambda before: math.ceil(before / 2))
    steps.number("duration", dialect.duration, other=lambda before: before / 2)
    steps.ask("interval.query", dialect.interval.query)
    _acquisition(steps, instrument)


def _acquisition(steps: Walk, instrument: Scope) -> None:
    slot = instrument.dialect.acquisition
    steps.tell("acquisition.abort", slot.abort, needed=False)
    for text in slot.prepare:
        steps.tell("acquisition.prepare", text)
    if not slot.prepare:
        steps.note("acquisition.prepare", "missing")
    try:
        points = round(instrument.read_number(instrument.dialect.points))
        duration = points * instrument.read_number(instrument.dialect.interval)
        settings = [_setting(instrument, name) for name in instrument.dialect.channels[:2]]
    except (InstrumentProblem, ValueError) as problem:
        steps.note("transfer.read", "refused", instrument.dialect.transfer.read, problem)
        return
    sent = f"{slot.start}, {slot.complete}"
    if steps.attempt("acquisition.start", sent, lambda: instrument.start_and_wait(duration)):
        for name, setting in zip(instrument.dialect.channels[:2], settings, strict=True):
            _transfer(steps, instrument, name, points, setting)


def _setting(instrument: Scope, name: str) -> ChannelSetting:
    """Return a channel's range, offset and probe factor as they are, in V at the probe's tip."""
    dialect = instrument.dialect
    return ChannelSetting(
        range=instrument.read_number(dialect.range, name) if dialect.range.query else 1.0,
        offset=instrument.read_number(dialect.offset, name) if dialect.offset.query else 0.0,
        coupling="DC",
        bandwidth_limit=False,
        probe_factor=1.0,
    )


def _transfer(steps: Walk, instrument: Scope, name: str, points: int, setting: ChannelSetting) -> None:
    transfer = instrument.dialect.transfer
    for text in transfer.before:
        steps.tell(f"transfer.before {name}", text.format(channel=name))
    for slot in ("scale", "offset", "origin", "preamble"):
        if text := getattr(transfer, slot):
            steps.ask(f"transfer.{slot} {name}", text.format(channel=name))
    if instrument.dialect.overload.query:
        steps.ask(f"overload.query {name}", instrument.dialect.overload.query.format(channel=name))

    def record() -> str:
        volts, overload, _ = read_channel(instrument.session, instrument.dialect, name, points, setting)
        words = f"{len(volts)} samples, {volts.min():.4g} to {volts.max():.4g} V"
        return words + (", overload" if overload else "")

    steps.attempt(f"transfer.read {name}", transfer.read.format(channel=name), record)


def _switch(steps: Walk, instrument: Switch, routes: Sequence[str]) -> None:
    dialect = instrument.dialect
    steps.identity(dialect.identity)
    closed = [route for route in routes if _is_closed(steps, instrument, route)]
    steps.tell("open_all", dialect.open_all)
    if not routes:
        steps.note("close", "skipped", dialect.close, "the bench file names no route")
    for route in routes[:1]:
        text, query = dialect.close.format(route=route), dialect.query.format(route=route)
        steps.answered(f"close {route}", text, query, dialect.is_closed)
        steps.tell("open_all", dialect.open_all)
    for route in closed:
        text, query = dialect.close.format(route=route), dialect.query.format(route=route)
        steps.answered(f"close {route} back", text, query, dialect.is_closed)


def _is_closed(steps: Walk, instrument: Switch, route: str) -> bool:
    dialect = instrument.dialect
    query = dialect.query.format(route=route)
    if not steps.ask(f"query {route}", query):
        return False
    return instrument.session.ask(query, as_text).upper() == dialect.is_closed.upper()


def _supply(steps: Walk, instrument: Supply, no_board: bool) -> None:
    dialect, output = instrument.dialect, instrument.dialect.output
    for name in instrument.switches():
        off, query = output.off.format(channel=name), output.query.format(channel=name)
        steps.answered(f"output.off {name}", off, query, output.is_off)
    steps.identity(dialect.identity)
    for name in dialect.channels:
        steps.number("voltage", dialect.voltage, name, other=lambda before: before / 2 if before else 1.0)
        steps.number("current_limit", dialect.current_limit, name, other=lambda before: before / 2 if before else 0.01)
        steps.ask(f"current.query {name}", dialect.current.query.format(channel=name))
    for name in instrument.switches():
        on, off = output.on.format(channel=name), output.off.format(channel=name)
        query = output.query.format(channel=name)
        if no_board:
            steps.answered(f"output.on {name}", on, query, output.is_on)
            steps.answered(f"output.off {name}", off, query, output.is_off)
        else:
            steps.note(f"output.on {name}", "skipped", on, NO_BOARD)
