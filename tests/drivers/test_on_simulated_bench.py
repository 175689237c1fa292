"""Shipped dialects and drivers against the simulated instruments, over sockets, in virtual time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from bandproof.analysis.network import Capacitor, Network, Resistor, response
from bandproof.analysis.sine import fit_sines
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import load
from bandproof.drivers.errors import (
    BeyondLimits,
    InstrumentError,
    InstrumentProblem,
    LinkBroken,
    LinkClosed,
    NoAnswer,
    ReplyError,
    SettingRefused,
)
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.slots import Waveform
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


TWO_TONES = 0.5 * np.sin(2 * np.pi * 3 * np.arange(256) / 256) + 0.3 * np.cos(2 * np.pi * 7 * np.arange(256) / 256)


def assert_two_tones(bench):
    """Both tones of the table, 300 and 700 Hz, at 1 V for +1, and what the network makes of them."""
    record = settled_record(bench)
    fit = fit_sines(record.volts, record.sample_interval, [300.0, 700.0])
    four = 4 * np.sqrt(fit.covariance[..., 0, 0] + fit.covariance[..., 1, 1])
    assert (np.abs(np.abs(fit.phasor[0]) - [0.5, 0.3]) < four[0]).all()
    ratio = response(LOW_PASS, [300.0, 700.0], ["out"])[0]
    assert (np.abs(fit.phasor[1] - ratio * fit.phasor[0]) < four[0] + four[1]).all()
    assert four.max() < 0.01
    # both tones of one wave: at the table's beginning the phases are those of a sine and of a cosine
    beginning = 7 * np.angle(fit.phasor[0, 0] * 1j) - 3 * np.angle(fit.phasor[0, 1])
    assert abs(np.exp(1j * beginning) - 1) < 7 * four[0, 0] / 0.5 + 3 * four[0, 1] / 0.3


@pytest.mark.parametrize("form", ["real32", "real64", "int16", "ascii"])
def test_a_table_of_two_tones_comes_out_as_both_and_the_board_answers_each(controller, form):
    bench = controller()
    bench.prepare()
    bench.generator.set_frequency(100.0)
    bench.scope.set_record(0.02, 2000)
    slot = bench.generator.dialect.waveform
    words = {"real32": "REAL,32", "real64": "REAL,64", "int16": "INTeger,16", "ascii": "ASCii"}
    data, full = ("{values}" if form == "ascii" else "{block}"), (32767.0 if form == "int16" else 1.0)
    upload = slot.upload.replace("{block}", data)
    changed = replace(slot, prepare=(f"FORMat:DATA {words[form]}",), upload=upload, encoding=form, full=full)
    bench.generator.dialect = replace(bench.generator.dialect, waveform=changed)
    bench.generator.play(TWO_TONES)
    assert_two_tones(bench)


def test_a_table_is_sent_once_and_the_sine_comes_back(controller):
    bench = controller()
    bench.prepare()
    bench.generator.play(TWO_TONES)
    before = bench.generator.session.sent
    bench.generator.play(TWO_TONES)
    assert bench.generator.session.sent == before
    bench.generator.set_sine()
    record = settled_record(bench)
    amplitude, _ = sine(record.volts, record.sample_interval, 1000.0)
    assert abs(amplitude[0]) == pytest.approx(1.0, abs=4 * NOISE * record.lsb[0] * np.sqrt(2 / 1000))
    bench.generator.play(TWO_TONES)
    lines = bench.path.read_text().splitlines()
    assert sum("TRACe:DATA WAVE" in line for line in lines) == 1
    assert sum("FUNCtion:SHAPe USER" in line for line in lines) == 2
    assert sum("FUNCtion:SHAPe SINusoid" in line for line in lines) == 2


def test_a_table_is_played_again_after_reopening_and_resetting_the_instrument(controller):
    bench = controller()
    bench.prepare()
    bench.generator.set_frequency(100.0)
    bench.scope.set_record(0.02, 2000)
    table = TWO_TONES.copy()
    bench.generator.play(table)
    table[:] = 0.0  # the caller's own: what was played is remembered
    bench.generator.session.command("*RST")
    bench.generator.reopen()
    bench.generator.restore()
    assert_two_tones(bench)


def test_a_generator_without_a_waveform_slot_says_so(controller):
    generator = controller().generator
    generator.dialect = replace(generator.dialect, waveform=Waveform())
    with pytest.raises(BeyondLimits, match=r"its dialect has no waveform\.upload slot: nothing was sent"):
        generator.play(TWO_TONES)


@pytest.mark.parametrize(
    ("samples", "words"),
    [
        (np.array([0.0, 1.01]), "from -1 to 1"),
        (np.array([0.0, np.nan]), "from -1 to 1"),
        (np.zeros((2, 2)), "one row"),
        (np.zeros(1), "2 to inf points by the dialect, got 1"),
    ],
)
def test_a_table_that_is_none_is_refused_before_anything_is_sent(controller, samples, words):
    generator = controller().generator
    with pytest.raises(BeyondLimits, match=words):
        generator.play(samples)
    assert generator.session.sent == 0


def test_amplitudes_in_rms_and_tables_do_not_go_together(controller):
    generator = controller().generator
    generator.dialect = replace(generator.dialect, amplitude=replace(generator.dialect.amplitude, meaning="rms"))
    with pytest.raises(BeyondLimits, match="rms"):
        generator.play(TWO_TONES)


def test_a_table_the_instrument_refuses_is_named_by_its_slot_not_by_its_bytes(controller):
    bench = controller()
    bench.prepare()
    with pytest.raises(InstrumentError, match=r"-223.*after 'TRACe:DATA WAVE,{block}'"):
        bench.generator.play(np.zeros(5000))
    bench.generator.play(TWO_TONES)


def test_points_that_got_lost_on_the_way_are_seen(controller):
    generator = controller().generator
    slot = replace(generator.dialect.waveform, points="SYSTem:VERSion?")  # 1999.0
    generator.dialect = replace(generator.dialect, waveform=slot)
    with pytest.raises(SettingRefused, match="256 points"):
        generator.play(TWO_TONES)


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
