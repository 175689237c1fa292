"""Shipped dialects over every kind of wire: the same record, and each fault one of our errors that reopening mends."""

from __future__ import annotations

import random
import threading
import time
from contextlib import ExitStack
from dataclasses import replace

import numpy as np
import pytest

from bandproof.analysis.network import Capacitor, Network, Resistor
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import load
from bandproof.drivers.errors import InstrumentError, InstrumentProblem, LinkBroken, NoAnswer, ReplyError
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.serial_line import QUIET, SerialLine
from bandproof.drivers.session import Session, as_text
from bandproof.drivers.switch import Switch
from bandproof.simulated_instruments.bench import World, start
from bandproof.simulated_instruments.faults import Fault
from bandproof.simulated_instruments.imperfections import Imperfections
from tests.benchmarks._serial_bridge import serial_address

NETWORK = Network((Resistor("R1", "in", "out", 1e3),), (Capacitor("C1", "out", "0", 1e-7),), ())
WORLD = World(
    network=NETWORK,
    scope={1: "in", 2: "switch"},
    routes={"101": "out"},
    imperfections=replace(Imperfections(), adc_bits=8, noise=0.5),
)
KINDS = {"generator": (Generator, "generator"), "scope": (Scope, "digitizer"), "switch": (Switch, "switch")}
PATIENCE = 1.0  # s by the wall


class Controller:
    """Generator, scope and switch over one kind of wire."""

    def __init__(self, stack, folder, wire, faults=()):
        path = folder / f"clock-{wire}"
        create_clock_file(path)
        self.hung_up = threading.Event() if wire == "serial" else None  # set when the scope's line is closed
        self.clock = VirtualClock(path, patience=PATIENCE)
        stack.callback(self.clock.close)
        handle = stack.enter_context(start(replace(WORLD, clock=str(path), faults=faults)))
        for name, (kind, dialect) in KINDS.items():
            if wire == "serial":
                address = stack.enter_context(
                    serial_address(handle.ports[name], self.hung_up if name == "scope" else None)
                )
            elif wire == "hislip":
                address = f"TCPIP::127.0.0.1::hislip0,{handle.hislip_ports[name]}::INSTR"
            else:
                address = f"TCPIP::127.0.0.1::{handle.ports[name]}::SOCKET"
            entry = load(f"scpi99-{dialect}")
            instrument = kind(Session(Link(address, self.clock), entry.habits), entry)
            stack.callback(instrument.disconnect)
            setattr(self, name, instrument)

    def record(self):
        """Set everything, and return the volts of a record."""
        for instrument in (self.generator, self.scope, self.switch):
            instrument.identify()
            instrument.reset()
        self.generator.set_sine()
        self.generator.set_frequency(1000.0)
        self.generator.set_amplitude(1.0)
        self.switch.close("101")
        for channel in (1, 2):
            self.scope.set_channel(channel, range=2.0)
        self.generator.output(True)
        self.scope.set_record(0.01, 1000)
        self.clock.wait(1.0)
        return self.scope.acquire().volts


@pytest.fixture
def controller(tmp_path):
    with ExitStack() as stack:
        yield lambda wire, **options: Controller(stack, tmp_path, wire, **options)


WIRES = ("hislip", "serial")


@pytest.mark.parametrize("wire", WIRES)
def test_a_record_is_the_one_over_the_raw_socket_to_the_last_bit(controller, wire):
    volts = controller(wire).record()
    assert np.ptp(volts[0]) > 1.9
    assert np.array_equal(volts, controller("socket").record())


FAULTS = {
    "silent-instrument": NoAnswer,
    "late-answer": NoAnswer,
    "dropped-connection": LinkBroken,
    "truncated-block": NoAnswer,
    "lying-block-length": ReplyError,
    "endless-reply": ReplyError,
    "dripping-reply": NoAnswer,
    "garbage-bytes": ReplyError,
    "error-entry": InstrumentError,
    "unfinished-acquisition": NoAnswer,
}


@pytest.mark.parametrize("wire", WIRES)
@pytest.mark.parametrize(("name", "kind"), FAULTS.items(), ids=FAULTS.keys())
def test_a_fault_is_one_of_our_errors_in_bounded_time_and_reopening_mends_it(controller, wire, name, kind):
    if (wire, name) == ("serial", "dropped-connection"):
        kind = NoAnswer  # a serial line has no connection that could be seen to end
    bench = controller(wire, faults=(Fault(name, step=1),))
    expected = np.ptp(bench.record(), axis=1)
    bench.clock.mark(1, 0)
    began = time.monotonic()
    with pytest.raises(InstrumentProblem) as caught:
        bench.scope.acquire()
    assert time.monotonic() - began < 2 * PATIENCE + 2.0  # two awaited answers at most, and a busy machine
    assert type(caught.value) is kind
    bench.clock.mark(1, 1)
    if bench.hung_up is not None:
        bench.scope.disconnect()
        assert bench.hung_up.wait(5.0), "the scope forgets what was said when its line is closed"
    bench.scope.reopen()
    bench.scope.restore()
    bench.clock.wait(1.0)
    assert np.ptp(bench.scope.acquire().volts, axis=1) == pytest.approx(expected, abs=8 * 2 / 128)


class Port:
    """A serial port in memory: bytes come in pieces, each after one read that found nothing where None stands."""

    def __init__(self, *pieces):
        self.pieces, self.timeout, self.waits = list(pieces), None, []

    @property
    def in_waiting(self):
        return len(self.pieces[0]) if self.pieces and self.pieces[0] else 0

    def read(self, size=1):
        self.waits.append(self.timeout)
        if not self.pieces or self.pieces[0] is None:
            self.pieces[:1] = []
            return b""
        data, self.pieces[0] = self.pieces[0][:size], self.pieces[0][size:]
        if not self.pieces[0]:
            del self.pieces[0]
        return data


def test_what_an_instrument_was_still_saying_when_the_port_is_opened_is_thrown_away():
    port = Port(b"old wor", b"ds\n", None, b"new\n")
    line = SerialLine(port, 1.0)
    assert set(port.waits) == {QUIET}
    assert line.has_stray()
    assert line.read(100, 0.5, line=True) == b"new\n"
    assert not line.has_stray()


def test_no_more_is_read_than_was_asked_for():
    line = SerialLine(Port(None, b"abcdef"), 1.0)
    assert line.read(4, 0.5, line=False) == b"abcd"
    assert line.read(4, 0.5, line=False) == b"ef"


def test_silence_is_told_as_a_time_out():
    with pytest.raises(TimeoutError):
        SerialLine(Port(None, None), 1.0).read(1, 0.5, line=True)


def test_a_line_that_never_falls_quiet_is_a_broken_or_unanswered_link(linked, loopback):
    def chatter(connection, stop):
        while not stop.is_set():
            connection.sendall(b"1" * 100)

    port = int(loopback(chatter).split("::")[2])
    with serial_address(port) as address, pytest.raises(LinkBroken, match="does not stop talking"):
        Session(linked(address)).ask("*IDN?", as_text)


@pytest.mark.parametrize("seed", range(10))
def test_mutated_serial_replies_are_right_or_one_of_our_errors(linked, loopback, seed):
    """A sample; `python -m tests.benchmarks transports` sends more."""
    from tests.benchmarks.transports import damaged, spoken

    draw = random.Random(seed)
    port = int(loopback(spoken(lambda: damaged(b"#15abcde\n", draw))).split("::")[2])
    with serial_address(port) as address:
        session = Session(linked(address))
        for _ in range(5):
            found = outcome(session)
            assert len(found) == 5 or found.isprintable()
        session.link.close()


def outcome(session):
    """Return the block, or the words of one of our errors after reopening."""
    try:
        return session.ask_block("READ?", 5)
    except InstrumentProblem as problem:
        session.link.close()
        return again(session, str(problem))


def again(session, words):
    session.link.reopen()
    return words
