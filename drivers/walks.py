"""Which slots of a generator, switch and supply are walked, in which order; `scope_walk` has the scope."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial

from bandproof.drivers.answers import is_like
from bandproof.drivers.generator import Generator
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.scope import Scope
from bandproof.drivers.scope_walk import walk_scope
from bandproof.drivers.session import as_text
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch
from bandproof.drivers.trials import AWKWARD
from bandproof.drivers.walk import NO_BOARD, Line, Walk

__all__ = ["walk"]


def walk(instrument: Instrument, *, no_board: bool = False, routes: Sequence[str] = ()) -> tuple[Line, ...]:
    """Try every slot of an instrument's dialect; return what came of each, in the order tried.

    Parameters
    ----------
    instrument : Generator, Scope, Switch or Supply
    no_board : bool
        The operator says that no board is connected, so that outputs may be switched on.
    routes : sequence of str
        The switch's routes; each is closed once.

    Returns
    -------
    tuple of Line
        Settings are as they were, but for a generator's or supply's output (off), a generator's sine and a scope's
        record format. Nothing is raised for what an instrument refuses.
    """
    steps = Walk(instrument)
    if isinstance(instrument, Generator):
        steps.begin(instrument.dialect.output.off)
        _generator(steps, instrument, no_board)
    elif isinstance(instrument, Scope):
        steps.begin()
        walk_scope(steps, instrument)
    elif isinstance(instrument, Switch):
        steps.begin()
        _switch(steps, instrument, routes)
    elif isinstance(instrument, Supply):
        steps.begin(*(instrument.dialect.output.off.format(channel=name) for name in instrument.switches()))
        _supply(steps, instrument, no_board)
    else:
        raise TypeError(f"nothing is known to walk for a {type(instrument).__name__}")
    steps.end()
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
    steps.number("frequency", dialect.frequency, values=(1000.0, AWKWARD, 2500.0))
    _load(steps, instrument)
    steps.number("amplitude", dialect.amplitude, values=(0.5, 0.34567, 0.2))
    steps.number("offset", dialect.offset, values=(0.1, 0.05))
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


def _switch(steps: Walk, instrument: Switch, routes: Sequence[str]) -> None:
    dialect = instrument.dialect
    steps.identity(dialect.identity)
    closed = [route for route in routes if _is_closed(steps, instrument, route)]
    steps.tell("open_all", dialect.open_all)
    if not routes:
        steps.note("close", "skipped", dialect.close, "the bench file names no route")
    for route in routes:
        text, query = dialect.close.format(route=route), dialect.query.format(route=route)
        steps.answered(f"close {route}", text, query, dialect.is_closed, route=route)
        steps.attempt("open_all", dialect.open_all, partial(_open_all, instrument, route))
    for route in closed:
        text, query = dialect.close.format(route=route), dialect.query.format(route=route)
        steps.answered(f"close {route} back", text, query, dialect.is_closed, route=route)


def _open_all(instrument: Switch, route: str) -> str:
    """Open every route; return what the one closed before answers then, which must be another answer."""
    dialect = instrument.dialect
    instrument.session.command(dialect.open_all)
    if not dialect.query:
        return ""
    answer = instrument.session.ask(dialect.query.format(route=route), as_text)
    if is_like(dialect.is_closed, answer, route=route):
        raise ValueError(f"then {route} answers {answer}, as when it was closed: is `open_all` or `query` wrong?")
    return answer


def _is_closed(steps: Walk, instrument: Switch, route: str) -> bool:
    query = instrument.dialect.query.format(route=route)
    return steps.ask(f"query {route}", query) and instrument.is_closed(route)


def _supply(steps: Walk, instrument: Supply, no_board: bool) -> None:
    dialect, output = instrument.dialect, instrument.dialect.output
    for name in instrument.switches():
        off, query = output.off.format(channel=name), output.query.format(channel=name)
        steps.answered(f"output.off {name}", off, query, output.is_off, channel=name)
    steps.identity(dialect.identity)
    for name in dialect.channels:
        steps.number("voltage", dialect.voltage, name, values=(5.0, 2.0))
        steps.number("current_limit", dialect.current_limit, name, values=(0.05, 0.02))
        steps.read(f"current.query {name}", dialect.current, name)
    for name in instrument.switches():
        on, off = output.on.format(channel=name), output.off.format(channel=name)
        query = output.query.format(channel=name)
        if no_board:
            steps.answered(f"output.on {name}", on, query, output.is_on, channel=name)
            steps.answered(f"output.off {name}", off, query, output.is_off, channel=name)
        else:
            steps.note(f"output.on {name}", "skipped", on, NO_BOARD)
