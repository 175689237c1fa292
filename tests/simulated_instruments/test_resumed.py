"""A bench switched on later equals one that never was off: records depend on the last settings and on names only."""

import struct

import numpy as np
import pytest

from bandproof.analysis.network import modes
from bandproof.simulated_instruments.bench import instruments
from bandproof.simulated_instruments.board import Board, Drive, FrontEnd
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.imperfections import Imperfections, Sizes
from bandproof.simulated_instruments.timebase import VirtualTimebase

REFERENCE = Imperfections.reference(4)
STEADY = Imperfections.draw(4, Sizes(drift=0.0))  # all of the reference bench that does not depend on the hour


@pytest.fixture
def dwell(band):
    """The s after which the slowest mode is below 1e-4."""
    return float(np.log(1e4) / np.abs(modes(band).real).min())


class Timed:
    """Instruments in this process on a time file, whose t is written as the controller does."""

    def __init__(self, world, path, t):
        path.write_bytes(struct.pack("<dQQ", t, 0, 0) + bytes(40))
        self.path, self.base = path, VirtualTimebase(path)
        self.devices = instruments(world, self.base, FaultPlan((), self.base))

    def set(self, offset, kind, *values):
        data = bytearray(self.path.read_bytes())
        struct.pack_into(kind, data, offset, *values)
        with self.path.open("r+b") as file:
            file.write(data)

    def ask(self, name, message):
        answer = self.devices[name].message(message.encode(), self.base.now())
        self.base.reach(answer.ready_at)
        return answer.reply

    def live(self):
        """Do many other things."""
        draw = np.random.default_rng(1)
        for step in range(40):
            self.set(8, "<QQ", step, step % 2)
            frequency, volts, offset = draw.uniform([100, 0.1, -1], [2000, 2, 1])
            self.ask("generator", f"FREQ {frequency:.3f};VOLT {volts:.3f};VOLT:OFFS {offset:.3f};:OUTP ON;*OPC?")
            self.ask("switch", f"ROUT:CLOS (@{101 + step % 2});*OPC?")
            self.ask("scope", f"INP2:COUP {'AC' if step % 3 else 'DC'};:INIT;*OPC?")
            self.set(0, "<d", self.base.now() + draw.uniform(0, 0.1))

    def resume(self, t, dwell):
        """From t on: set everything, two settings, a dwell after each, and a record."""
        self.set(0, "<d", t)
        self.set(8, "<QQ", 41, 1)
        self.ask("scope", "*RST;*OPC?;:SENS1:VOLT:RANG 2;:SENS2:VOLT:RANG 5;:SENS:SWE:POIN 4096;TIME 0.04096;*OPC?")
        self.ask("switch", "*RST;ROUT:CLOS (@101);*OPC?")
        self.ask("generator", "*RST;VOLT 1;:OUTP ON;FREQ 450;*OPC?")
        self.set(0, "<d", self.base.now() + dwell)
        self.ask("generator", "FREQ 480;*OPC?")
        self.set(0, "<d", self.base.now() + dwell)
        self.ask("scope", "INIT;*OPC?")
        blocks = [self.ask("scope", f"TRAC? CH{channel}") for channel in (1, 2)]
        assert self.ask("scope", "SYST:ERR?") == b'0,"No error"\n'
        return blocks


def test_resumed_bench_gives_the_records_of_an_unbroken_one(world, tmp_path, dwell):
    given = world(imperfections=REFERENCE)
    unbroken, resumed = Timed(given, tmp_path / "a", 0.0), Timed(given, tmp_path / "b", 1234.5)
    unbroken.live()
    assert 0 < unbroken.base.now() < 1234.5
    first, second = unbroken.resume(1234.5, dwell), resumed.resume(1234.5, dwell)
    assert first == second
    assert len(set(second[1])) > 20, "the record holds a signal"
    assert unbroken.base.now() == resumed.base.now()


def test_time_may_begin_anywhere(world, tmp_path, dwell):
    given = world(imperfections=STEADY)
    found = [Timed(given, tmp_path / f"{t}", t).resume(t, dwell) for t in (0.0, -50.25, -1e5, 1e5 + 0.1)]
    assert all(one == found[0] for one in found)


def test_instrument_answers_at_the_time_that_is_and_not_at_zero(world, tmp_path):
    bench = Timed(world(), tmp_path / "time", -50.0)
    bench.ask("generator", "OUTP ON;*OPC?")
    assert bench.base.now() == pytest.approx(-50.0 + 0.2e-3 + 5e-3)


def test_what_has_decayed_is_forgotten_to_the_last_bit(band, dwell):
    boards, draw = [Board(band, [FrontEnd("out")]) for _ in range(2)], np.random.default_rng(2)
    for step in range(30):
        boards[0].set_drive(step * 0.01, Drive(*draw.uniform([100, 0.1, -1], [2000, 5, 1])))
    for board in boards:
        board.set_drive(7.0, Drive(450.0, 1.0))
        board.set_drive(7.0 + 3 * dwell, Drive(480.0, 1.0))  # 1e-12 of any history is left
    one, other = (board.volts(0, 7.0 + 3 * dwell + 1e-4, 1e-5, 1000) for board in boards)
    assert np.array_equal(one, other)
