"""Shipped dialects and drivers against the simulated instruments, over sockets, in virtual time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from bandproof.analysis.network import Capacitor, Network, Resistor
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import load
from bandproof.drivers.errors import InstrumentError, InstrumentProblem, LinkBroken, LinkClosed, NoAnswer, ReplyError
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch
from bandproof.simulated_instruments.bench import World, start
from bandproof.simulated_instruments.faults import Fault
from bandproof.simulated_instruments.imperfections import Imperfections

R, C = 1000.0, 1e-7
LOW_PASS = Network(resistors=(Resistor("R1", "in", "out", R),), capacitors=(Capacitor("C1", "out", "0", C),), opamps=())
WORLD = World(
    network=LOW_PASS,
    scope={1: "in", 2: "switch"},
    routes={"101": "out", "102": "in"},
    imperfections=replace(Imperfections(), adc_bits=8, noise=0.5),
)
NOISE = 0.58  # LSB rms: 0.5 of noise and 1 / sqrt(12) of rounding, which this noise makes independent


class Controller:
    """Generator, scope and switch on one simulated bench, with the log of what they were told."""

    def __init__(self, world, folder):
        path = folder / "clock"
        create_clock_file(path)
        self.clock = VirtualClock(path, patience=1.0)
        self.log = ExchangeLog(folder / "exchange.log")
        self.path = folder / "exchange.log"
        self.bench = start(replace(world, clock=str(path)))
        kinds = {"generator": (Generator, "generator"), "scope": (Scope, "digitizer"), "switch": (Switch, "switch")}
        for name, (kind, dialect) in kinds.items():
            address = f"TCPIP::127.0.0.1::{self.bench.ports[name]}::SOCKET"
            entry = load(f"scpi99-{dialect}")
            setattr(self, name, kind(Session(Link(address, self.clock, self.log), entry.habits), entry))

    def prepare(self):
        for instrument in (self.generator, self.scope, self.switch):
            instrument.identify()
            instrument.reset()
        self.generator.set_sine()
        self.generator.set_frequency(1000.0)
        self.generator.set_amplitude(1.0)
        self.generator.set_offset(0.1)
        self.switch.close("101")
        for channel in (1, 2):
            self.scope.set_channel(channel, range=2.0)
        self.generator.output(True)
        return self.scope.set_record(0.01, 1000)

    def end(self):
        for instrument in (self.generator, self.scope, self.switch):
            instrument.disconnect()
        self.log.close()
        self.clock.close()
        self.bench.stop()


@pytest.fixture
def controller(tmp_path):
    made = []

    def make(world=WORLD):
        made.append(Controller(world, tmp_path))
        return made[-1]

    yield make
    for one in made:
        one.end()


def settled_record(bench):
    bench.clock.wait(100 * R * C)  # 100 time constants: e**-100
    return bench.scope.acquire()


def sine(volts, interval, frequency):
    """Return complex amplitudes and means of (2, N) samples by linear least squares (IEEE 1057, three parameters)."""
    w = 2 * np.pi * frequency * interval * np.arange(volts.shape[1])
    basis = np.stack([np.cos(w), -np.sin(w), np.ones_like(w)], axis=1)
    a, b, mean = np.linalg.lstsq(basis, volts.T, rcond=None)[0]
    return a + 1j * b, mean


def test_a_sine_through_a_low_pass_has_the_volts_of_its_formula(controller):
    bench = controller()
    setting = bench.prepare()
    assert (setting.points, setting.sample_interval) == (1000, 1e-5)
    record = settled_record(bench)
    amplitude, mean = sine(record.volts, record.sample_interval, 1000.0)
    ratio = 1 / (1 + 2j * np.pi * 1000.0 * R * C)  # the formula of an RC low-pass
    four = 4 * NOISE * record.lsb[0] * np.sqrt(2 / 1000)  # 4 standard errors of an amplitude (IEEE 1057)
    assert abs(amplitude[0]) == pytest.approx(1.0, abs=four)
    assert abs(amplitude[1] / amplitude[0] - ratio) < 2 * four
    assert mean == pytest.approx([0.1, 0.1], abs=four)
    assert not record.overload.any()
    assert record.lsb == pytest.approx([2 / 128] * 2)


def test_an_overload_is_seen_on_the_channel_that_has_it(controller):
    bench = controller()
    bench.prepare()
    bench.scope.set_channel(1, range=0.5)
    bench.scope.set_channel(2, range=1.0)
    record = settled_record(bench)
    assert record.overload.tolist() == [True, False]
    assert record.volts.flags.writeable is False


def test_one_sweep_point_is_nine_messages(controller):
    bench = controller()
    bench.prepare()
    bench.scope.acquire()
    before = len(bench.path.read_text().splitlines())
    bench.generator.set_frequency(2000.0)
    bench.scope.acquire()
    lines = [line.split(" ", 4)[2:] for line in bench.path.read_text().splitlines()[before:]]
    assert [text for direction, _, text in lines if direction == ">"] == [
        "SOURce:FREQuency:CW 2000\\n",
        "*OPC?\\n",
        "SOURce:FREQuency:CW?\\n",
        "SYSTem:ERRor?\\n",
        "INITiate:IMMediate\\n",
        "*OPC?\\n",
        "TRACe:DATA? CH1\\n",
        "TRACe:DATA? CH2\\n",
        "SYSTem:ERRor?\\n",
    ]


def test_a_setting_outside_the_instruments_range_is_named_by_the_instrument(controller):
    bench = controller()
    bench.prepare()
    with pytest.raises(InstrumentError, match=r"-222.*after 'SOURce:FREQuency:CW 1e"):
        bench.generator.set_frequency(1e15)
    assert bench.generator.set_frequency(500.0) == 500.0


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


@pytest.mark.parametrize(("name", "kind"), FAULTS.items(), ids=FAULTS.keys())
def test_after_a_fault_reopen_and_restore_measure_the_same_record(controller, name, kind):
    bench = controller(replace(WORLD, faults=(Fault(name, step=1),)))
    bench.prepare()
    expected = np.abs(sine(settled_record(bench).volts, 1e-5, 1000.0)[0])
    bench.clock.mark(1, 0)
    with pytest.raises(InstrumentProblem) as caught:
        bench.scope.acquire()
    assert isinstance(caught.value, kind)
    if kind is not InstrumentError:
        with pytest.raises(LinkClosed):
            bench.scope.acquire()
    bench.clock.mark(1, 1)
    bench.scope.reopen()
    bench.scope.restore()
    again = np.abs(sine(settled_record(bench).volts, 1e-5, 1000.0)[0])
    assert again == pytest.approx(expected, abs=4 * NOISE * 2 / 128 * np.sqrt(2 / 1000) * 2)


def test_the_generator_is_made_safe_on_a_freshly_reopened_link(controller):
    bench = controller()
    bench.prepare()
    bench.generator.reopen()
    bench.generator.be_safe()
    four = NOISE * (1 + 4 / np.sqrt(2 * 1000))  # LSB: 4 standard errors of a standard deviation above it
    assert (np.std(settled_record(bench).volts, axis=1) <= four * 2 / 128).all()
    bench.generator.restore()
    assert bench.generator.session.ask("OUTPut:STATe?", bytes) == b"0"  # safe is what it was told last
