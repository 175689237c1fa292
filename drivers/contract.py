"""What any generator, scope, switch or supply must do, whatever it speaks: clauses, each a small function.

A clause takes a driver and raises `Broken` with what it found, or `NotTried` where the dialect or the bench does not
let it be tried; its first line of documentation is what it demands. Clauses leave their settings behind.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

from bandproof.drivers.answers import is_like
from bandproof.drivers.clause import Broken, NotTried, demand
from bandproof.drivers.errors import BeyondLimits, InstrumentError, InstrumentProblem
from bandproof.drivers.generator import Generator
from bandproof.drivers.instrument import Instrument
from bandproof.drivers.scope import Scope
from bandproof.drivers.scope_contract import SCOPE_CLAUSES
from bandproof.drivers.session import as_text
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch
from bandproof.drivers.trials import AWKWARD
from bandproof.drivers.walk import NO_BOARD

__all__ = ["CLAUSES", "Broken", "NotTried", "Outcome", "check"]

UNKNOWN = "XYZZY:PLUGH 7"  # a command no instrument has


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of a clause: its name, what it demands, whether it is kept, what was found otherwise."""

    clause: str
    demand: str
    verdict: Literal["kept", "broken", "not tried"]
    found: str = ""


# --- any instrument ---


def identifies_itself_alike_twice(instrument: Instrument) -> None:
    """Asked twice what it is, it says the same."""
    first, second = instrument.identify(), instrument.identify()
    if not first + second:
        raise NotTried("by its dialect it cannot be asked")
    demand(first == second, f"{first!r}, then {second!r}")


def reports_an_unknown_command(instrument: Instrument) -> None:
    """A command it does not know is reported as an error, not passed over."""
    if not instrument.session.habits.errors:
        raise NotTried("it has no error query")
    try:
        instrument.session.command(UNKNOWN)
        instrument.check_errors()
    except InstrumentError:
        return
    raise Broken(f"{UNKNOWN!r} left no error")


def has_no_errors_left(instrument: Instrument) -> None:
    """Asked again after an error, it has none left."""
    instrument.check_errors()


# --- generator ---


def is_off_when_safe(generator: Generator) -> None:
    """Made safe, its output answers that it is off."""
    output = generator.dialect.output
    generator.be_safe()
    if not output.query:
        raise NotTried("its output cannot be asked")
    answer = generator.session.ask(output.query, as_text)
    demand(is_like(output.is_off, answer), f"answers {answer!r}")


def reads_back_frequency_amplitude_and_offset(generator: Generator) -> None:
    """Frequency, amplitude and offset read back as they were set."""
    _settle(generator)
    generator.set_frequency(AWKWARD)


def keeps_its_frequency_when_the_amplitude_changes(generator: Generator) -> None:
    """A new amplitude leaves frequency and offset as they were."""
    _settle(generator)
    before = _numbers(generator)
    generator.set_amplitude(0.1)
    after = _numbers(generator)
    demand(before[::2] == after[::2], f"{before} Hz, V, V became {after}")


def repeats_nothing(generator: Generator) -> None:
    """A setting made again alike costs no message."""
    _settle(generator)
    before = generator.session.sent
    _settle(generator)
    demand(generator.session.sent == before, f"{generator.session.sent - before} messages were sent")


def is_as_before_after_reopening(generator: Generator) -> None:
    """Closed, opened and restored, it has the settings it had."""
    _settle(generator)
    before = _numbers(generator)
    generator.set_frequency(2000.0)
    generator.set_frequency(1000.0)
    generator.reopen()
    generator.restore()
    after = _numbers(generator)
    demand(before == after, f"{before} Hz, V, V became {after}")


def switches_its_output(generator: Generator) -> None:
    """Its output goes on and off as told."""
    _settle(generator)
    try:
        generator.output(True)
    finally:
        generator.be_safe()


def _settle(generator: Generator) -> None:
    if generator.dialect.load.set:
        generator.set_load(float("inf") if generator.dialect.load.high else 50.0)
    generator.set_sine()
    generator.set_frequency(1000.0)
    generator.set_amplitude(0.2)
    generator.set_offset(0.05)


def _numbers(generator: Generator) -> tuple[float, ...]:
    dialect = generator.dialect
    numbers = (dialect.frequency, dialect.amplitude, dialect.offset)
    return tuple(generator.read_number(number) for number in numbers if number.query)


# --- switch ---


def closes_one_route_and_opens_the_others(switch: Switch, routes: Sequence[str]) -> None:
    """Closing a route opens the one closed before."""
    if len(routes) < 2 or not switch.dialect.query:
        raise NotTried("it takes two routes that can be asked")
    for route in (routes[0], routes[1]):
        switch.close(route)
    demand(not switch.is_closed(routes[0]), f"{routes[0]} is still closed after {routes[1]}")
    demand(switch.is_closed(routes[1]), f"{routes[1]} answers that it is open")


def opens_every_route(switch: Switch, routes: Sequence[str]) -> None:
    """Made safe, no route is closed."""
    if not routes or not switch.dialect.query:
        raise NotTried("it takes a route that can be asked")
    switch.close(routes[0])
    switch.be_safe()
    closed = [route for route in routes if switch.is_closed(route)]
    demand(not closed, f"{', '.join(closed)} still closed")


def closes_again_after_reopening(switch: Switch, routes: Sequence[str]) -> None:
    """Closed, opened and restored, the same route is closed; closed again alike, it costs no message."""
    if not routes or not switch.dialect.query:
        raise NotTried("it takes a route that can be asked")
    switch.close(routes[0])
    switch.reopen()
    switch.restore()
    demand(switch.is_closed(routes[0]), f"{routes[0]} is open")
    before = switch.session.sent
    switch.close(routes[0])
    demand(switch.session.sent == before, f"{switch.session.sent - before} messages were sent")


# --- supply ---


def gives_nothing_when_safe(supply: Supply) -> None:
    """Made safe, its outputs answer that they are off and give no current."""
    supply.be_safe()
    currents = [supply.read_current(channel) for channel in supply.channels]
    demand(all(abs(current) < 0.01 for current in currents), f"{currents} A")


def reads_back_voltages_and_limits(supply: Supply) -> None:
    """Voltages and current limits read back as they were set, each channel for itself."""
    for channel in supply.channels:
        supply.set_voltage(channel, 5.0 + channel)
        supply.set_current_limit(channel, 0.05)
    found = [supply.read_number(supply.dialect.voltage, name) for name in supply.dialect.channels]
    apart = all(abs(voltage - 5.0 - channel) < 0.3 for channel, voltage in zip(supply.channels, found, strict=True))
    demand(apart, f"{found} V for {[5.0 + channel for channel in supply.channels]}")


def has_its_voltages_after_reopening(supply: Supply) -> None:
    """Closed, opened and restored, it has the voltages it had."""
    reads_back_voltages_and_limits(supply)
    before = [supply.read_number(supply.dialect.voltage, name) for name in supply.dialect.channels]
    supply.reopen()
    supply.restore()
    after = [supply.read_number(supply.dialect.voltage, name) for name in supply.dialect.channels]
    demand(before == after, f"{before} V became {after}")


def switches_its_outputs(supply: Supply) -> None:
    """Its outputs go on and off as told."""
    reads_back_voltages_and_limits(supply)
    try:
        supply.output(True)
    finally:
        supply.be_safe()


_ANY = (identifies_itself_alike_twice, reports_an_unknown_command, has_no_errors_left)
CLAUSES: dict[type[Instrument], tuple[Callable[..., None], ...]] = {
    Generator: (
        is_off_when_safe,
        *_ANY,
        reads_back_frequency_amplitude_and_offset,
        keeps_its_frequency_when_the_amplitude_changes,
        repeats_nothing,
        is_as_before_after_reopening,
        switches_its_output,
        is_off_when_safe,
    ),
    Scope: (*_ANY, *SCOPE_CLAUSES),
    Switch: (*_ANY, closes_one_route_and_opens_the_others, opens_every_route, closes_again_after_reopening),
    Supply: (
        gives_nothing_when_safe,
        *_ANY,
        reads_back_voltages_and_limits,
        has_its_voltages_after_reopening,
        switches_its_outputs,
    ),
}
_DRIVING = (switches_its_output, switches_its_outputs)
_ROUTED = CLAUSES[Switch][len(_ANY) :]


def check(instrument: Instrument, *, no_board: bool = False, routes: Sequence[str] = ()) -> tuple[Outcome, ...]:
    """Try every clause for an instrument's kind.

    Parameters
    ----------
    instrument : Generator, Scope, Switch or Supply
        Its settings are changed.
    no_board : bool
        The operator says that no board is connected, so that outputs may be switched on.
    routes : sequence of str
        The switch's routes.

    Returns
    -------
    tuple of Outcome
        In the order of `CLAUSES`; nothing is raised for what an instrument does.
    """
    outcomes = []
    for clause in CLAUSES[type(instrument)]:
        if clause in _DRIVING and not no_board:
            outcomes.append(_outcome(clause, "not tried", NO_BOARD))
        else:
            outcomes.append(_tried(clause, instrument, (routes,) if clause in _ROUTED else ()))
    return tuple(outcomes)


def _tried(clause: Callable[..., None], instrument: Instrument, more: tuple[object, ...]) -> Outcome:
    try:
        if instrument.session.link.is_dirty:
            instrument.reopen()
        clause(instrument, *more)
    except (NotTried, BeyondLimits) as why:
        return _outcome(clause, "not tried", str(why))
    except (Broken, InstrumentProblem) as problem:
        return _outcome(clause, "broken", str(problem))
    return _outcome(clause, "kept")


def _outcome(clause: Callable[..., None], verdict: Literal["kept", "broken", "not tried"], found: str = "") -> Outcome:
    return Outcome(clause.__name__, (clause.__doc__ or "").splitlines()[0], verdict, found)
