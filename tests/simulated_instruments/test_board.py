"""The board's solution against numerical integration, the network's response, and common sense.

Outside witnesses: scipy's DOP853 integrator for transients; nodal analysis (analysis.network.response), which shares no
code with the state space beyond the parts, for steady state.
"""

from itertools import chain

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor, response, state_space
from bandproof.simulated_instruments.board import Board, Drive, FrontEnd, Section
from bandproof.simulated_instruments.dynamics import REMAINDER, Dynamics
from bandproof.simulated_instruments.slewing import excess


def integrated(network, node, events, times):
    """Volts at a node by integration, from rest; events are (instant, Drive)."""
    system = state_space(network, [node])
    offsets = [u.offset for u in network.opamps]
    state, volts = np.linalg.solve(system.a, -system.b @ np.array([0.0, *offsets])), np.empty(len(times))
    ends = [at for at, _ in events[1:]] + [times[-1] + 1e-9]
    for (at, drive), end in zip(events, ends, strict=True):

        def inputs(t, at=at, drive=drive):
            emf = drive.offset + drive.amplitude * np.sin(2 * np.pi * drive.frequency * (t - at))
            return np.array([emf, *offsets])

        solution = solve_ivp(
            lambda t, x, u=inputs: system.a @ x + system.b @ u(t),
            (at, end),
            state,
            method="DOP853",
            rtol=1e-10,
            atol=1e-13,
            max_step=1e-5,  # its interpolation between steps is of lower order: without this 2e-7 V off
            dense_output=True,
        )
        inside = (times >= at) & (times < end)
        drives = np.array([inputs(t) for t in times[inside]]).T
        volts[inside] = (system.c @ solution.sol(times[inside]) + system.d @ drives)[0]
        state = solution.y[:, -1]
    return volts


EVENTS = [(1.0, Drive(400.0, 1.0, 0.2)), (1.004, Drive(650.0, 0.5)), (1.0061, Drive(650.0)), (1.009, Drive(90.0, 2.0))]


@pytest.fixture
def slow_band(band):
    """The band with an op-amp of 50 kHz, which an explicit integrator can follow."""
    return Network(
        band.resistors, band.capacitors, (OpAmp("U1", "0", "m", "out", gbw=5e4, offset=2e-3),), source_resistance=50.0
    )


def test_transients_through_four_events_agree_with_numerical_integration(slow_band):
    board = Board(slow_band, [FrontEnd("out")])
    for at, drive in EVENTS:
        board.set_drive(at, drive)
    times = 1.0 + 1e-5 * np.arange(2000)
    expected = integrated(slow_band, "out", EVENTS, times)
    assert np.abs(expected).max() > 0.5
    # the integrator's tolerance, 1e-10 a step over some hundred steps, is what limits
    assert board.volts(0, 1.0, 1e-5, 2000) == pytest.approx(expected, abs=2e-8)


def buffered_chain(stages):
    """Equal RC low-passes with equal buffers between: modes that coincide, without enough eigenvectors."""
    nodes = ["in", *(f"n{i}" for i in range(stages))]
    return Network(
        tuple(Resistor(f"R{i}", nodes[i] if i == 0 else f"b{i - 1}", f"n{i}", 10e3) for i in range(stages)),
        tuple(Capacitor(f"C{i}", f"n{i}", "0", 10e-9) for i in range(stages)),
        tuple(OpAmp(f"U{i}", f"n{i}", f"b{i}", f"b{i}", gbw=5e4) for i in range(stages)),
    )


@pytest.mark.parametrize("stages", [2, 3, 4])
def test_coinciding_modes_agree_with_numerical_integration(stages):
    network, node = buffered_chain(stages), f"b{stages - 1}"
    board = Board(network, [FrontEnd(node)])
    for at, drive in EVENTS:
        board.set_drive(at, drive)
    times = 1.0 + 1e-5 * np.arange(2000)
    assert board.volts(0, 1.0, 1e-5, 2000) == pytest.approx(integrated(network, node, EVENTS, times), abs=2e-8)


@pytest.mark.parametrize("frequency", [1.0, 100.0, 480.0, 5e3, 1e5])
def test_steady_state_is_the_networks_response(band, frequency):
    driven = band.driven_through(50.0)
    board = Board(driven, [FrontEnd("in"), FrontEnd("out")])
    board.set_drive(1.0, Drive(frequency, 0.8))
    count, interval = 400, 4.25 / frequency / 400
    angle = 2 * np.pi * frequency * interval * np.arange(count)
    # the sine began 99 s, thus whole periods, before: all modes are gone
    expected = response(driven, [frequency], ["in", "out"])[:, 0]
    for channel in range(2):
        wave = 0.8 * (expected[channel] * np.exp(1j * angle)).imag
        # 1e-9 V of dropped remainders, 1e-9 relative for conditioning of the state space over 8 decades
        assert board.volts(channel, 100.0, interval, count) == pytest.approx(wave, abs=5e-9)


def test_dwelling_too_short_measures_wrongly(band):
    board = Board(band, [FrontEnd("out")])
    board.set_drive(1.0, Drive(480.0, 1.0))
    early, late = board.volts(0, 1.0, 1e-5, 200), board.volts(0, 1.0 + 100 / 480.0, 1e-5, 200)
    assert np.abs(early - late).max() > 0.1 * np.abs(late).max()


def test_volts_depend_on_the_time_since_the_events_only(band):
    records = []
    for origin in (0.5, 7.25, 1e4 + 0.1):
        board = Board(band, [FrontEnd("out", (Section(6.0, 1.0, -1.0),))])
        board.set_drive(origin, Drive(480.0, 1.0, 0.1))
        board.set_drive(origin + 0.02, Drive(510.0, 1.0, 0.1))
        records.append(board.volts(0, origin + 0.0213, 1e-5, 500))
    assert np.array_equal(records[0], records[1])
    assert np.array_equal(records[0], records[2])


def test_looking_twice_or_elsewhere_changes_nothing(band):
    board = Board(band, [FrontEnd("out"), FrontEnd("in")])
    board.set_drive(1.0, Drive(480.0, 1.0))
    first = board.volts(0, 1.01, 1e-5, 100)
    board.volts(0, 0.5, 1e-3, 1000)
    board.set_front_end(1.5, 1, FrontEnd("a"))
    assert np.array_equal(board.volts(0, 1.01, 1e-5, 100), first)


def test_op_amp_outputs_clip_at_swing_and_other_nodes_do_not(band):
    board = Board(band, [FrontEnd("out"), FrontEnd("in")])
    board.set_drive(1.0, Drive(480.0, 20.0))
    assert np.abs(board.volts(0, 3.0, 1e-5, 1000)).max() == pytest.approx(12.0)
    assert np.abs(board.volts(1, 3.0, 1e-5, 1000)).max() == pytest.approx(20.0, rel=1e-3)


def test_high_pass_section_settles_and_turns_the_phase():
    network = Network((Resistor("R1", "in", "0", 1e3),), ())
    rate = 2 * np.pi * 5.0
    board = Board(network, [FrontEnd("in", (Section(rate, 1.0, -1.0),))])
    board.set_drive(1.0, Drive(20.0, 1.0, 0.5))
    at_once = board.volts(0, 1.0, 1e-9, 1)[0]
    assert at_once == pytest.approx(0.5, abs=1e-6)  # the step of 0.5 V passes before the capacitor charges
    times = 10.0 + 1e-3 * np.arange(100)
    ratio = 1j * 20 / (1j * 20 + 5)  # first-order high-pass at 5 Hz; common practice
    wave = (ratio * np.exp(2j * np.pi * 20 * (times - 1.0))).imag
    assert board.volts(0, 10.0, 1e-3, 100) == pytest.approx(wave, abs=2 * REMAINDER)


def test_open_input_and_grounded_input_read_nothing(band):
    board = Board(band, [FrontEnd(None), FrontEnd("in", grounded=True)])
    board.set_drive(1.0, Drive(480.0, 1.0))
    assert not board.volts(0, 1.0, 1e-5, 50).any()
    assert not board.volts(1, 1.0, 1e-5, 50).any()


def test_a_probe_that_moves_meets_its_node_at_the_nodes_voltage_and_loads_it():
    """Two RC sections; the equations of both node voltages written down by hand, integrated over the move."""
    r, c, probe_r, probe_c, moved = 10e3, 10e-9, 50e3, 10e-9, 2.0 + 2.31e-4
    network = Network(
        (Resistor("R1", "in", "a", r), Resistor("R2", "a", "b", r)),
        (Capacitor("C1", "a", "0", c), Capacitor("C2", "b", "0", c)),
    )
    on_a, on_b = (FrontEnd(node, resistance=probe_r, capacitance=probe_c) for node in "ab")
    board = Board(network, [on_a, FrontEnd("b")])
    board.set_drive(2.0, Drive(3e3, 1.0, 0.5))
    board.set_front_end(moved, 0, on_b)

    def slopes(t, v):
        emf = 0.5 + np.sin(2 * np.pi * 3e3 * (t - 2.0))
        load = np.array([1.0, 0.0] if t < moved else [0.0, 1.0])
        currents = np.array([(emf - v[0]) / r - (v[0] - v[1]) / r, (v[0] - v[1]) / r]) - load * v / probe_r
        return currents / (c + load * probe_c)

    options = {"method": "DOP853", "rtol": 1e-11, "atol": 1e-13, "max_step": 1e-6}
    times = 2.0 + 2e-6 * np.arange(500)
    early, late = times[times < moved], times[times >= moved]
    first = solve_ivp(slopes, (2.0, moved - 1e-12), [0.0, 0.0], t_eval=early, **options)
    end = solve_ivp(slopes, (2.0, moved - 1e-12), [0.0, 0.0], **options).y[:, -1]
    second = solve_ivp(slopes, (moved, times[-1] + 1e-9), end, t_eval=late, **options)
    expected = np.hstack([first.y, second.y])
    seen = [board.volts(channel, 2.0, 2e-6, 500) for channel in (0, 1)]
    assert seen[1] == pytest.approx(expected[1], abs=1e-8)
    assert seen[0] == pytest.approx(np.where(times < moved, expected[0], expected[1]), abs=1e-8)


def test_slewing_is_what_a_rate_limiter_leaves_of_a_wave_in_the_end():
    """Witness: the limiter itself in small steps over many periods, its input a sine and a third harmonic."""
    steepest, count = 2 * np.pi * (1.0 + 3 * 0.4), 20_000
    for slew, periods in ((0.6, 50), (1.5, 40), (4.0, 10), (8.0, 4), (9.0, 4)):
        phase = np.arange(count) / count
        wave = 1.0 * np.sin(2 * np.pi * phase) + 0.4 * np.cos(6 * np.pi * phase)
        volts, limited = 0.0, []
        for _ in range(periods):
            limited = []
            for target in wave.tolist():
                volts += max(-slew / count, min(slew / count, target - volts))
                limited.append(volts)
        found = wave - excess(np.array([1.0, 0.4j]), np.array([1, 3]), 1.0, slew, phase)
        bend = (steepest + slew) / 4 / 2048  # a bend between two of its 2048 points; the witness is a step late
        assert found == pytest.approx(np.array(limited), abs=bend + steepest / count), slew


@pytest.mark.parametrize("slew", [0.2, 1.0, 3.0])
def test_the_triangle_left_of_a_sine_has_the_fundamental_of_one(slew):
    """A triangle of peak slew / (4 f) has a fundamental of 8 / pi^2 of that, and turns where the sine comes down to it.

    A pure triangle is left below 1 / sqrt(1 + pi^2 / 4) of the sine's slope: there it falls faster than the limit.
    """
    phase = np.arange(20_000) / 20_000
    found = np.sin(2 * np.pi * phase) - excess(np.array([1.0 + 0j]), np.array([1]), 1.0, slew, phase)
    fundamental = 2 * np.mean(found * np.exp(-2j * np.pi * phase))
    expected = 8 / np.pi**2 * slew / 4 * np.exp(-1j * (np.pi - np.arcsin(slew / 4)))
    chord = (2 * np.pi / 2048) ** 2 / 8  # of the peak, by which straight lines between 2048 points miss a sine
    assert fundamental == pytest.approx(expected, rel=chord / (slew / (2 * np.pi)))  # as a turn: the slower the longer


def test_growing_system_is_refused():
    with pytest.raises(ValueError, match="no steady state"):
        Dynamics(np.array([[1.0]]), np.array([[1.0]]), np.array([[1.0]]), np.array([[0.0]]))


def test_five_equal_bands_side_by_side_keep_the_answer_of_one(band):
    def copy(i):
        rename = {"in": "in", "0": "0"} | {node: f"{node}{i}" for node in ("a", "m", "out")}
        return (
            [Resistor(f"{r.name}x{i}", rename[r.a], rename[r.b], r.resistance) for r in band.resistors],
            [Capacitor(f"{c.name}x{i}", rename[c.a], rename[c.b], c.capacitance) for c in band.capacitors],
            [OpAmp(f"U{i}", "0", f"m{i}", f"out{i}", gbw=4e6) for u in band.opamps],
        )

    kinds = zip(*(copy(i) for i in range(5)), strict=True)
    five = Board(Network(*(tuple(chain.from_iterable(kind)) for kind in kinds)), [FrontEnd("out3")])
    one = Board(band, [FrontEnd("out")])
    for board in (five, one):
        board.set_drive(1.0, Drive(480.0, 1.0))
        board.set_drive(1.003, Drive(700.0, 1.0))
    # driven by the EMF directly, bands do not see each other
    assert five.volts(0, 1.0, 1e-5, 1000) == pytest.approx(one.volts(0, 1.0, 1e-5, 1000), abs=1e-8)
