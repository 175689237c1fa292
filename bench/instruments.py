"""The instruments of a bench: opened, identified, made safe on every road out."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import closing, contextmanager, nullcontext
from dataclasses import dataclass, field, replace
from pathlib import Path

from bandproof.bench.bench_file import parse_bench
from bandproof.bench.errors import BenchFault
from bandproof.bench.locks import locked
from bandproof.bench.system import detached
from bandproof.bench.thru import Ranges
from bandproof.bench.types import Bench
from bandproof.drivers.clock import Clock
from bandproof.drivers.dialect import (
    Dialect,
    GeneratorDialect,
    ScopeDialect,
    SupplyDialect,
    SwitchDialect,
    load,
    parse,
    source,
)
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.generator import Generator
from bandproof.drivers.lifeline import Lifeline
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch

__all__ = ["Devices", "load_dialects", "occupied", "opened", "with_dialect_texts"]


@dataclass(slots=True)
class Devices:
    """The opened instruments of a bench.

    ``declared`` has the addresses as the bench file has them, by role; ``await_lifeline`` comes before the output is
    switched on.
    """

    generator: Generator
    scope: Scope
    switch: Switch | None
    supply: Supply | None = None
    declared: dict[str, str] = field(default_factory=dict)
    await_lifeline: Callable[[], None] = lambda: None

    def by_role(self) -> dict[str, Generator | Scope | Switch | Supply]:
        """Return the instruments that are there by what they do, the generator first."""
        found = {"generator": self.generator, "scope": self.scope, "switch": self.switch, "supply": self.supply}
        return {role: instrument for role, instrument in found.items() if instrument is not None}

    def all(self) -> tuple[Generator | Scope | Switch | Supply, ...]:
        """Return the instruments that are there, the generator first."""
        return tuple(self.by_role().values())

    def role_of(self, address: str) -> str:
        """Return what the instrument at an address does on this bench."""
        return next((role for role, one in self.by_role().items() if one.address == address), "instrument")

    def identities(self) -> dict[str, str]:
        """Return what each instrument says it is, by role.

        Raises
        ------
        BenchFault
            An instrument does not answer as its dialect says; nothing was set.
        InstrumentProblem
            What the drivers met.
        """
        return {role: self._identified(role, instrument) for role, instrument in self.by_role().items()}

    def set_ranges(self, channels: Sequence[int], ranges: Sequence[float], factors: Mapping[int, float]) -> Ranges:
        """Set channels to ranges in V peak at the tips of probes of these factors; return the ranges read back."""
        first, second = (
            self.scope.set_channel(channel, range=wanted, probe_factor=factors[channel]).range
            for channel, wanted in zip(channels, ranges, strict=True)
        )
        return first, second

    def _identified(self, role: str, instrument: Generator | Scope | Switch | Supply) -> str:
        """Return what an instrument says it is, after a question only its kind can answer (BenchFault)."""
        words = instrument.identify()
        if (problem := instrument.is_understood()) is not None:
            raise BenchFault(
                f"the instrument at {instrument.address} does not answer as the {role} its dialect describes; it says "
                f"{words or 'nothing'!r}. Is it another instrument, or is the dialect wrong? ({problem})"
            ) from problem
        return words


@contextmanager
def occupied(bench: Bench, clock: Clock, log_path: Path | None, *, who: str) -> Iterator[Devices]:
    """Yield the bench's instruments, locked, with a lifeline that switches the generator off should this process die.

    ``who`` is told to whoever comes second; without it nothing is locked: a rehearsal's instruments are its own.
    ``bench`` has its dialects' texts.

    Raises
    ------
    DialectMistakes, BenchFault, InstrumentProblem
        As ``opened``, and another process has an instrument.
    """
    addresses = [instrument.address for instrument in bench.instruments.values()]
    with (
        locked(addresses, who=who) if who else nullcontext(),
        _lifeline(bench) as lifeline,
        opened(bench, clock, log_path, lifeline) as devices,
    ):
        yield devices


def _lifeline(bench: Bench) -> Lifeline:
    """Return the process that switches the generator off should this one be killed."""
    generator = bench.instruments["generator"]
    return Lifeline.start(
        generator.address,
        dialect_text=bench.dialect_texts["generator"],
        visa_library=bench.visa_library,
        clock_path=bench.clock,
        popen_options=detached(),
        serial=generator.serial,
    )


@contextmanager
def opened(bench: Bench, clock: Clock, log_path: Path | None, lifeline: Lifeline | None = None) -> Iterator[Devices]:
    """Yield the bench's instruments; the generator is off when this ends, however it ends, if it can be reached.

    A lifeline is told when the generator was left off.

    Raises
    ------
    DialectMistakes
        A dialect is missing or wrong; nothing was opened.
    BenchFault
        A dialect is of another kind than its place in the bench file, or the generator could not be reached at the end.
    InstrumentProblem
        What the drivers met.
    """
    dialects = load_dialects(bench)
    with closing(ExchangeLog(log_path)) as log:
        sessions = {role: Session(_link(bench, role, clock, log), dialect.habits) for role, dialect in dialects.items()}
        devices = _devices(bench, sessions, dialects)
        if lifeline is not None:
            devices.await_lifeline = lifeline.await_ready
        try:
            yield devices
        except BaseException as problem:
            _leave_safe(devices.generator, problem)
            _tell(lifeline)
            _power_down(devices, problem)
            raise
        else:
            _leave_safe(devices.generator, None)
            _tell(lifeline)
            _power_down(devices, None)
        finally:
            for session in sessions.values():
                session.link.close()


def _link(bench: Bench, role: str, clock: Clock, log: ExchangeLog) -> Link:
    instrument = bench.instruments[role]
    return Link(instrument.address, clock, log, visa_library=bench.visa_library, serial=instrument.serial)


def _power_down(devices: Devices, after: BaseException | None) -> None:
    """Switch the board's supply off, after the generator; a supply never reached is left alone."""
    supply = devices.supply
    if supply is None or not (supply.session.link.is_open or supply.session.link.is_dirty):
        return
    try:
        supply.be_safe()
    except InstrumentProblem as problem:
        if after is None:
            raise BenchFault(
                f"the supply at {supply.address} could not be switched off: do it by hand ({problem})"
            ) from problem


def _tell(lifeline: Lifeline | None) -> None:
    if lifeline is not None:
        lifeline.done()


def with_dialect_texts(bench: Bench) -> Bench:
    """Return the bench with the texts of its dialects, so that a run keeps what it was made with (DialectMistakes)."""
    texts = {role: source(instrument.dialect) for role, instrument in bench.instruments.items()}
    return replace(bench, dialect_texts={**texts, **bench.dialect_texts})


def load_dialects(bench: Bench) -> dict[str, Dialect]:
    """Return the bench's dialects by role.

    Raises
    ------
    DialectMistakes
        A dialect is missing or wrong.
    BenchFault
        A dialect is for another kind of instrument than the place it is named at.
    """
    dialects = {
        role: parse(bench.dialect_texts[role], instrument.dialect)
        if role in bench.dialect_texts
        else load(instrument.dialect)
        for role, instrument in bench.instruments.items()
    }
    for role, dialect in dialects.items():
        if dialect.kind != role:
            raise BenchFault(
                f"[{role}] names the dialect {bench.instruments[role].dialect!r}, which is for a {dialect.kind}: "
                "name another dialect in the bench file"
            )
    return dialects


def _devices(bench: Bench, sessions: dict[str, Session], dialects: dict[str, Dialect]) -> Devices:
    generator, scope, switch, supply = map(dialects.get, ("generator", "scope", "switch", "supply"))
    assert isinstance(generator, GeneratorDialect)  # load_dialects saw to it
    assert isinstance(scope, ScopeDialect)
    return Devices(
        Generator(sessions["generator"], generator, ceiling=bench.ceiling),
        Scope(sessions["scope"], scope),
        Switch(sessions["switch"], switch) if isinstance(switch, SwitchDialect) else None,
        Supply(sessions["supply"], supply) if isinstance(supply, SupplyDialect) else None,
        {role: instrument.address for role, instrument in parse_bench(bench.text, bench.title).instruments.items()},
    )


def _leave_safe(generator: Generator, after: BaseException | None) -> None:
    """Switch the generator off, over a fresh connection if the old one is broken; once more if that fails."""
    link = generator.session.link
    if not link.is_open and not link.is_dirty:
        return  # it was never reached
    try:
        generator.be_safe()
    except InstrumentProblem:
        try:
            generator.reopen()
            generator.be_safe()
        except InstrumentProblem as problem:
            if after is not None and not generator.has_driven:
                return  # nothing of ours is on, and what went wrong is on its way to the user
            first = f"{after}\n" if after is not None else ""
            raise BenchFault(
                f"{first}THE GENERATOR MAY STILL BE ON: {generator.address} could not be switched off, "
                f"switch it off by hand now ({problem})"
            ) from after
