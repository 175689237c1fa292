"""The instruments of a bench: opened, identified, made safe on every road out."""

from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path

from bandproof.bench.errors import BenchFault
from bandproof.bench.types import Bench
from bandproof.drivers.clock import Clock
from bandproof.drivers.dialect import Dialect, GeneratorDialect, ScopeDialect, SwitchDialect, load
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch

__all__ = ["Devices", "load_dialects", "opened"]


@dataclass(slots=True)
class Devices:
    """The opened instruments of a bench."""

    generator: Generator
    scope: Scope
    switch: Switch | None

    def all(self) -> tuple[Generator | Scope | Switch, ...]:
        """Return the instruments that are there, the generator first."""
        found = (self.generator, self.scope, self.switch)
        return tuple(instrument for instrument in found if instrument is not None)

    def identities(self) -> dict[str, str]:
        """Return what each instrument says it is, by role."""
        found = {"generator": self.generator.identify(), "scope": self.scope.identify()}
        if self.switch is not None:
            found["switch"] = self.switch.identify()
        return found


@contextmanager
def opened(bench: Bench, clock: Clock, log_path: Path | None) -> Iterator[Devices]:
    """Yield the bench's instruments; the generator is off when this ends, however it ends, if it can be reached.

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
        sessions = {
            role: Session(
                Link(bench.instruments[role].address, clock, log, visa_library=bench.visa_library), dialect.habits
            )
            for role, dialect in dialects.items()
        }
        devices = _devices(bench, sessions, dialects)
        try:
            yield devices
        finally:
            try:
                _leave_safe(devices.generator)
            finally:
                for session in sessions.values():
                    session.link.close()


def load_dialects(bench: Bench) -> dict[str, Dialect]:
    """Return the bench's dialects by role.

    Raises
    ------
    DialectMistakes
        A dialect is missing or wrong.
    BenchFault
        A dialect is for another kind of instrument than the place it is named at.
    """
    dialects = {role: load(instrument.dialect) for role, instrument in bench.instruments.items()}
    for role, dialect in dialects.items():
        if dialect.kind != role:
            raise BenchFault(
                f"[{role}] names the dialect {bench.instruments[role].dialect!r}, which is for a {dialect.kind}: "
                "name another dialect in the bench file"
            )
    return dialects


def _devices(bench: Bench, sessions: dict[str, Session], dialects: dict[str, Dialect]) -> Devices:
    generator, scope, switch = (dialects.get(role) for role in ("generator", "scope", "switch"))
    assert isinstance(generator, GeneratorDialect)  # load_dialects saw to it
    assert isinstance(scope, ScopeDialect)
    return Devices(
        Generator(sessions["generator"], generator, ceiling=bench.ceiling),
        Scope(sessions["scope"], scope),
        Switch(sessions["switch"], switch) if isinstance(switch, SwitchDialect) else None,
    )


def _leave_safe(generator: Generator) -> None:
    """Switch the generator off, over a fresh connection if the old one is broken."""
    link = generator.session.link
    if not link.is_open and not link.is_dirty:
        return  # it was never reached: nothing of ours is on
    try:
        if link.is_dirty:
            generator.reopen()
        generator.be_safe()
    except InstrumentProblem as first:
        try:
            generator.reopen()
            generator.be_safe()
        except InstrumentProblem as problem:
            raise BenchFault(
                f"the generator at {generator.address} could not be switched off: switch it off by hand now ({problem})"
            ) from first
