"""Tables a generator plays: how they come in, what they cost, what the board makes of them.

Outside witnesses: the table itself at its own points, scipy's DOP853 integrator, nodal analysis.
"""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from bandproof.analysis.network import Network, OpAmp, Resistor, response, state_space
from bandproof.simulated_instruments.board import Board, Drive, FrontEnd
from bandproof.simulated_instruments.device import Timing
from bandproof.simulated_instruments.generator import Generator
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.traces import MOST_POINTS, harmonics

LOAD = Network((Resistor("R1", "in", "0", 50.0),), ())
TABLE = np.array([0.5, -0.25, 1.0, -1.0, 0.125, 0.0])


class Bench:
    """A generator in front of a resistor, spoken to directly."""

    def __init__(self, **imperfections):
        self.board, self.t = Board(LOAD, [FrontEnd("in")]), 0.0
        self.generator = Generator(self.board, imperfections=Imperfections(**imperfections), timing=Timing())

    def send(self, message):
        answer = self.generator.message(message if isinstance(message, bytes) else message.encode(), self.t)
        self.t = max(self.t, answer.ready_at)
        return answer.reply

    def error(self):
        return int(self.send("SYST:ERR?").split(b",")[0])


def block(data):
    length = str(len(data)).encode()
    return b"#%d" % len(length) + length + data


UPLOADS = {
    "REAL,32": block(TABLE.astype(">f4").tobytes()),
    "REAL,64": block(TABLE.astype(">f8").tobytes()),
    "INT,16": block(np.rint(TABLE * 32767).astype(">i2").tobytes()),
    "ASC": b",".join(b"%.6f" % value for value in TABLE.tolist()),
}


@pytest.mark.parametrize("form", UPLOADS)
def test_a_table_comes_in_in_every_form_and_can_be_asked_for(form):
    bench = Bench()
    bench.send(f"FORM {form}")
    bench.send(b"TRAC:DATA SAW," + UPLOADS[form])
    assert bench.send("TRAC:POIN? SAW") == b"6\n"
    assert bench.send("TRAC:CAT?") == b'"SAW"\n'
    came = bench.send("TRAC? SAW")
    assert came[:-1] == UPLOADS[form] or form == "ASC"
    bench.send("FORM ASC")
    found = np.array([float(number) for number in bench.send("TRAC? SAW").split(b",")])
    assert found == pytest.approx(TABLE, abs=0.5 / 32767 if form == "INT,16" else 1e-9)
    assert bench.error() == 0


def test_swapped_blocks_have_their_least_significant_byte_first():
    bench = Bench()
    bench.send("FORM REAL,64;FORM:BORD SWAP")
    bench.send(b"TRAC SAW," + block(TABLE.astype("<f8").tobytes()))
    bench.send("FORM ASC")
    assert np.array([float(number) for number in bench.send("TRAC? SAW").split(b",")]).tolist() == TABLE.tolist()


@pytest.mark.parametrize(
    ("message", "number"),
    [
        (b"FUNC USER", -221),
        (b"FUNC:USER SAW", -224),
        (b"TRAC? SAW", -224),
        (b"TRAC SAW,0.5,1.5", -222),
        (b"TRAC SAW,0.5", -220),
        (b"TRAC SAW", -109),
        (b"TRAC SAW,0.5 V,0", -138),
        (b"TRAC SAW," + b",".join([b"0"] * (MOST_POINTS + 1)), -223),
        (b"TRAC SAW,#14abcd", -104),  # the format is ASCii
        (b"FORM REAL,32;:TRAC SAW,#13abc", -161),
        (b"FORM REAL,32;:TRAC SAW,#18" + np.array([0.0, np.nan], ">f4").tobytes(), -222),
        (b"FORM REAL,16", -224),
        (b"TRAC SAW,0,1;:FUNC:USER SAW;:FUNC USER;:TRAC:DEL:ALL", -221),
        (b";:".join(b"TRAC:DEF N%d" % n for n in range(17)), -225),
    ],
)
def test_what_cannot_be_played_is_refused_through_the_error_queue(message, number):
    bench = Bench()
    bench.send(message)
    assert bench.error() == number


def test_an_upload_takes_its_time():
    bench = Bench()
    bench.send("FORM REAL,64")
    message = b"TRAC SAW," + block(np.zeros(4096).tobytes())
    before = bench.t
    bench.send(message)
    bench.send("*OPC?")
    assert bench.t - before == pytest.approx(2 * 0.2e-3 + 0.1 + len(message) / 1e6, abs=1e-9)


@pytest.mark.parametrize("count", [2, 5, 6, 63, 64])
def test_the_harmonics_of_a_table_pass_through_its_points(count):
    table = np.random.default_rng(count).uniform(-1, 1, count)
    mean, lines = harmonics(table)
    phase = np.arange(count) / count
    volts = mean + sum((weight * np.exp(2j * np.pi * order * phase)).imag for order, weight in lines)
    assert volts == pytest.approx(table, abs=1e-12)
    assert max(order for order, _ in lines) <= count / 2


def test_a_table_of_a_sine_is_a_sine():
    phase = np.arange(1000) / 1000
    mean, lines = harmonics(0.5 * np.sin(2 * np.pi * phase))
    assert abs(mean) < 1e-15
    assert lines == ((1, pytest.approx(0.5, abs=1e-12)),)


def test_a_table_is_played_at_amplitude_and_offset_with_each_harmonic_at_its_level():
    """Its mean is direct voltage and knows no flatness; a harmonic has that of its own frequency."""
    flatness = {"flatness": 0.1, "flatness_angle": 0.3}
    bench = Bench(**flatness)
    phase = np.arange(64) / 64
    table = 0.1 + 0.5 * np.sin(2 * np.pi * phase) + 0.25 * np.cos(6 * np.pi * phase)
    bench.send(b"TRAC SAW," + b",".join(b"%.17g" % value for value in table.tolist()))
    bench.send("FUNC:USER SAW;:FUNC:SHAP USER;:FREQ 500;:VOLT 2;VOLT:OFFS 0.3;:OUTP ON")
    assert bench.error() == 0
    count = 400
    began = 1.0  # a whole number of periods after the last change
    volts = bench.board.volts(0, bench.board._events[-1].at + began, 1 / 500 / count, count)
    angle = 2 * np.pi * np.arange(count) / count
    level = [1 + 0.1 * np.sin(np.log2(f / 1e3) / 2 + 0.3) for f in (500.0, 1500.0)]
    expected = 0.3 + 2 * (0.1 + 0.5 * level[0] * np.sin(angle) + 0.25 * level[1] * np.cos(3 * angle))
    assert volts == pytest.approx(expected, abs=1e-9)
    bench.send("FUNC SIN")
    assert np.abs(bench.board.volts(0, bench.t, 1e-5, 400) - 0.3).max() == pytest.approx(2 * level[0], rel=1e-4)


def test_new_points_for_the_table_that_is_played_are_heard_at_once():
    bench = Bench()
    bench.send("TRAC SAW,1,-1;:FUNC:USER SAW;:FUNC USER;:VOLT 1;:OUTP ON")
    bench.send("TRAC SAW,1,1")
    assert bench.board.volts(0, bench.t, 1e-5, 100) == pytest.approx(np.ones(100))


def test_the_board_answers_a_table_as_its_response_says_and_settles_as_an_integrator_does(band):
    slow = Network(
        band.resistors, band.capacitors, (OpAmp("U1", "0", "m", "out", gbw=5e4, offset=2e-3),), source_resistance=50.0
    )
    lines = ((1, 0.4 + 0.1j), (2, -0.3j), (5, 0.2 + 0.0j))
    changes = [(1.0, Drive(300.0, 1.0, 0.1, lines)), (1.0052, Drive(450.0, 0.7)), (1.0101, Drive(200.0, 0.9, 0, lines))]
    board = Board(slow, [FrontEnd("out")])
    for at, drive in changes:
        board.set_drive(at, drive)
    system = state_space(slow, ["out"])

    def inputs(t, at, drive):
        turns = 2j * np.pi * drive.frequency * (t - at)
        emf = drive.offset + drive.amplitude * sum((w * np.exp(n * turns)).imag for n, w in drive.harmonics)
        return np.array([emf, np.full_like(t, 2e-3)])

    state, times = np.linalg.solve(system.a, -system.b @ np.array([0.0, 2e-3])), 1.0 + 1e-5 * np.arange(1600)
    expected, ends = [], [1.0052, 1.0101, times[-1] + 1e-9]
    for (at, drive), end in zip(changes, ends, strict=True):
        solution = solve_ivp(
            lambda t, x, at=at, drive=drive: system.a @ x + system.b @ inputs(np.asarray(t), at, drive),
            (at, end), state, method="DOP853", rtol=1e-10, atol=1e-13, max_step=1e-5, dense_output=True,
        )  # fmt: skip
        inside = times[(times >= at) & (times < end)]
        expected.append((system.c @ solution.sol(inside) + system.d @ inputs(inside, at, drive))[0])
        state = solution.y[:, -1]
    assert board.volts(0, 1.0, 1e-5, 1600) == pytest.approx(np.concatenate(expected), abs=2e-8)  # as in test_board

    count = 100
    seen = np.fft.rfft(board.volts(0, 1.0101 + 100.0, 1 / 200.0 / count, count)) / count
    ratio = response(slow, [200.0, 400.0, 1000.0], ["out"])[0]
    for (order, weight), h in zip(lines, ratio, strict=True):
        assert 2j * seen[order] == pytest.approx(0.9 * weight * h, abs=5e-9)


def test_a_probe_put_on_a_divider_while_a_table_is_played_starts_from_what_the_divider_gives_then():
    """Its capacitor has the node's voltage at that instant, later it follows as one behind 500 ohm."""
    divider = Network((Resistor("R1", "in", "mid", 1e3), Resistor("R2", "mid", "0", 1e3)), ())
    lines = ((1, 0.5 + 0.2j), (3, 0.3j))
    board = Board(divider, [FrontEnd(None), FrontEnd("mid")])
    board.set_drive(1.0, Drive(1e3, 1.0, 0.2, lines))
    at = 2.0001  # a tenth of a period after the beginning of one
    board.set_front_end(at, 0, FrontEnd("mid", capacitance=1e-7))
    emf = 0.2 + sum((weight * np.exp(0.2j * np.pi * order)).imag for order, weight in lines)
    first = board.volts(1, at, 1e-9, 2)
    assert abs(emf) > 0.5
    assert first[0] == pytest.approx(emf / 2, abs=1e-9)
    assert abs(first[1] - first[0]) < 1e-5  # 1 ns of 50 us
    steady = 0.1 + sum(
        (weight * np.exp(0.2j * np.pi * order) / (1 + 2j * np.pi * 1e3 * order * 500 * 1e-7)).imag / 2
        for order, weight in lines
    )
    assert board.volts(0, at + 0.1, 1e-9, 1)[0] == pytest.approx(steady, abs=1e-9)
