"""Each imperfection alone, on an otherwise ideal bench, does to a record what its definition says."""

import numpy as np
import pytest

from bandproof.analysis.network import Network, OpAmp, Resistor
from bandproof.analysis.sine import distortion
from bandproof.simulated_instruments.bench import World, instruments
from bandproof.simulated_instruments.faults import FaultPlan
from bandproof.simulated_instruments.imperfections import RANGES, Imperfections, Sizes
from bandproof.simulated_instruments.timebase import VirtualTimebase

RATE, POINTS = 1e6, 10_000
LOAD = Network((Resistor("R1", "in", "0", 50.0),), ())


@pytest.fixture
def measure(tmp_path):
    """Return the phasors (2,) of a record at a frequency, relative to the generator's sine as set, and the record."""

    def make(
        frequency=10e3, *, network=LOAD, node="in", coupling="DC", filtered=0, seconds=1.0, volts=1.0, **imperfections
    ):
        timebase = VirtualTimebase(tmp_path / "time")
        world = World(
            network=network,
            scope={1: "in", 2: "switch"},
            routes={"101": node},
            seed=3,
            imperfections=Imperfections(**imperfections),
        )
        bench, t = instruments(world, timebase, FaultPlan((), timebase)), 0.0

        def send(name, message):
            nonlocal t
            answer = bench[name].message(message.encode(), t)
            t = max(t, answer.ready_at)
            return answer.reply

        send("switch", "ROUT:CLOS (@101)")
        send("generator", f"FREQ {frequency};VOLT {volts}")
        event = t + 0.2e-3 + 5e-3
        send("generator", "OUTP ON")
        send("scope", f"INP1:COUP {coupling};:INP2:COUP {coupling};:SENS1:VOLT:RANG 2;:SENS2:VOLT:RANG 5")
        send("scope", f"INP1:FILT {filtered};:INP2:FILT {filtered}")
        send("scope", f"SENS:SWE:POIN {POINTS};TIME {POINTS / RATE}")
        t += seconds
        first = t + 0.2e-3 + 10e-3
        send("scope", "INIT")
        records = [np.frombuffer(send("scope", f"TRAC? CH{n}")[7:-1], ">f4").astype(float) for n in (1, 2)]
        angle = 2 * np.pi * frequency * (first - event + np.arange(POINTS) / RATE)
        basis = np.stack([np.sin(angle), np.cos(angle), np.ones(POINTS)], axis=1)
        fitted = np.linalg.lstsq(basis, np.array(records).T, rcond=None)[0]
        assert send("scope", "SYST:ERR?") == b'0,"No error"\n'
        return fitted[0] + 1j * fitted[1], np.array(records), first

    return make


FLOAT32 = 1e-6  # relative: records travel as 32-bit reals


def test_ideal_bench_gives_the_sine_as_set_in_amplitude_and_phase(measure):
    phasors, _, _ = measure()
    assert phasors == pytest.approx([1.0, 1.0], rel=FLOAT32)


def test_output_resistance_divides_with_the_load(measure):
    phasors, _, _ = measure(output_resistance=25.0)
    assert phasors == pytest.approx([50 / 75, 50 / 75], rel=FLOAT32)


def test_flatness_scales_the_level_with_frequency(measure):
    one, _, _ = measure(frequency=1e3, flatness=0.01, flatness_angle=np.pi / 2)
    other, _, _ = measure(frequency=1e3 * 2 ** (2 * np.pi), flatness=0.01, flatness_angle=np.pi / 2)
    assert abs(one[0]) == pytest.approx(1.01, rel=FLOAT32)
    assert abs(other[0]) == pytest.approx(0.99, rel=FLOAT32)


def test_frequency_error_shows_as_a_growing_phase(measure):
    _, records, _ = measure(frequency_error=1e-3)
    spectrum = np.abs(np.fft.rfft(records[0] * np.hanning(POINTS), 64 * POINTS))
    assert np.argmax(spectrum) * RATE / (64 * POINTS) == pytest.approx(10e3 * 1.001, abs=RATE / (64 * POINTS))


def test_time_base_error_shows_as_another_frequency(measure):
    _, records, _ = measure(timebase_error=1e-3)
    spectrum = np.abs(np.fft.rfft(records[0] * np.hanning(POINTS), 64 * POINTS))
    assert np.argmax(spectrum) * RATE / (64 * POINTS) == pytest.approx(10e3 * 1.001, abs=RATE / (64 * POINTS))


def test_channel_and_range_gain_errors_multiply(measure):
    ranges = tuple(0.003 if value == 5.0 else 0.0 for value in RANGES)
    phasors, _, _ = measure(channel_gain=(0.01, -0.02), range_gain=((0.0,) * len(RANGES), ranges))
    assert phasors == pytest.approx([1.01, 0.98 * 1.003], rel=FLOAT32)


def test_skew_is_a_delay_of_each_channel(measure):
    phasors, _, _ = measure(skew=(0.0, 1e-6))
    assert phasors[1] == pytest.approx(np.exp(2j * np.pi * 10e3 * 1e-6), rel=FLOAT32)


@pytest.mark.parametrize(("frequency", "gain"), [(1e2, 0.0), (1.5e3, 0.05 * 1j / (1 + 1j)), (100e3, 0.05)])
def test_probe_compensation_error_acts_above_its_corner(measure, frequency, gain):
    phasors, _, _ = measure(frequency, probe_compensation=(0.05, 0.0))
    assert phasors[1] == pytest.approx(1.0, rel=FLOAT32)
    # away from the corner the first-order step is not complete: 0.05 times corner / frequency, or its inverse
    assert phasors[0] == pytest.approx(1 + gain, abs=FLOAT32 if frequency == 1.5e3 else 0.05 / 14)


def test_ac_coupling_is_a_high_pass_in_ac_only(measure):
    corners = {"ac_corner": (1e3, 500.0)}
    alternating, _, _ = measure(1e3, coupling="AC", **corners)
    assert alternating == pytest.approx([1j / (1 + 1j), 2j / (1 + 2j)], rel=FLOAT32)  # common practice
    direct, _, _ = measure(1e3, coupling="DC", **corners)
    assert direct == pytest.approx([1.0, 1.0], rel=FLOAT32)


def test_hum_has_its_amplitude_and_frequency_and_a_phase_of_its_own(measure):
    _, records, _ = measure(hum=(0.25, 0.0), hum_frequency=1e3, volts=0.0)
    angle = 2 * np.pi * 1e3 * np.arange(POINTS) / RATE
    assert 2 * abs(np.mean(records[0] * np.exp(-1j * angle))) == pytest.approx(0.25, rel=FLOAT32)
    assert not records[1].any()


def test_drift_grows_with_time(measure):
    phasors, _, first = measure(drift=(1e-3, 0.0), seconds=100.0)
    assert first > 100
    assert phasors == pytest.approx([1 + 1e-3 * first, 1.0], rel=FLOAT32)


def test_reseated_contacts_scatter_the_switched_channel_only(measure):
    phasors, _, _ = measure(reseating=0.01)
    assert phasors[0] == pytest.approx(1.0, rel=FLOAT32)
    assert 1e-5 < abs(phasors[1] - 1) <= 0.01


def test_nonlinearity_bends_by_its_size_at_half_scale(measure):
    _, straight, _ = measure(adc_bits=16)
    _, bent, _ = measure(adc_bits=16, nonlinearity=(10.0, 0.0))
    difference = (bent - straight)[0] * 32768 / 2.0  # in codes of a 2 V range, driven to half scale
    assert difference.max() == pytest.approx(10.0, abs=1.0)  # both rounded to whole codes
    assert difference.min() == pytest.approx(-10.0, abs=1.0)
    assert not (bent - straight)[1].any()


DIVIDER = Network((Resistor("R1", "in", "mid", 10e3), Resistor("R2", "mid", "0", 15e3)), ())
FOLLOWER = Network(
    (*DIVIDER.resistors, Resistor("R3", "out", "0", 1e3)), (), (OpAmp("U1", "mid", "out", "out", gbw=1e9, slew=1e4),)
)


@pytest.mark.parametrize(("resistance", "capacitance"), [(1e6, 0.0), (0.0, 100e-12), (1e6, 100e-12)])
def test_a_probe_loads_the_node_it_is_on(measure, resistance, capacitance):
    phasors, _, _ = measure(
        20e3, network=DIVIDER, node="mid", probe_resistance=resistance, probe_capacitance=capacitance
    )
    load = (1 / resistance if resistance else 0.0) + 2j * np.pi * 20e3 * capacitance
    by_hand = (1 / 10e3) / (1 / 10e3 + 1 / 15e3 + load)  # the current law at the node
    assert abs(by_hand - 0.6) > 1e-3
    assert phasors == pytest.approx([1.0, by_hand], rel=FLOAT32)


def test_both_channels_load_the_board_even_on_one_node(measure):
    phasors, _, _ = measure(
        network=Network((Resistor("R1", "in", "0", 1e6),), ()), output_resistance=1e4, probe_resistance=1e6
    )
    assert phasors == pytest.approx([1 / (1 + 3 * 0.01)] * 2, rel=FLOAT32)  # three times 1 Mohm behind 10 kohm


def test_a_probe_moves_no_op_amp_output(measure):
    phasors, _, _ = measure(100.0, network=FOLLOWER, node="out", probe_resistance=1e3, probe_capacitance=1e-9)
    assert phasors[1] == pytest.approx(0.6, rel=FLOAT32)


def test_an_op_amp_far_beyond_its_slew_rate_gives_a_triangle(measure):
    """Peak slew / (4 f); its harmonics fall with the square of their odd orders, the first is 8 / pi^2 of the peak."""
    phasors, records, _ = measure(10e3, network=FOLLOWER, node="out")  # slope of the sine: 3.8e4 V/s, 3.8 times slew
    assert phasors[0] == pytest.approx(1.0, rel=FLOAT32)
    peak = 1e4 / (4 * 10e3)
    assert records[1].max() == pytest.approx(peak, rel=0.021)  # 100 samples a period: up to a 50th of the peak beside
    assert abs(phasors[1]) == pytest.approx(8 / np.pi**2 * peak, rel=1e-3)  # sampled: aliases of 1 / 99^2 and so on
    found = distortion(records, 1 / RATE, 10e3)
    assert found[0] < 1e-6
    assert found[1] == pytest.approx(np.hypot(1 / 9, 1 / 25), rel=5e-3)


def test_an_op_amp_within_its_slew_rate_follows(measure):
    phasors, records, _ = measure(2.6e3, network=FOLLOWER, node="out")  # 2 pi 2.6 kHz 0.6 V = 9.8e3 V/s
    assert abs(phasors[1]) == pytest.approx(0.6, rel=FLOAT32)
    assert distortion(records, 1 / RATE, 2.6e3)[1] < 1e-6


def test_a_slew_rate_can_be_given_to_every_op_amp(measure):
    _, records, _ = measure(10e3, network=FOLLOWER, node="out", slew=2e3)
    assert records[1].max() == pytest.approx(2e3 / (4 * 10e3), rel=0.021)


def test_bandwidth_limits_are_low_passes_while_they_are_on(measure):
    corners = (80e3, 120e3)
    limited, _, _ = measure(50e3, filtered=1, bandwidth_limit=corners)
    assert limited == pytest.approx([1 / (1 + 50j / 80), 1 / (1 + 50j / 120)], rel=FLOAT32)  # common practice
    free, _, _ = measure(50e3, filtered=0, bandwidth_limit=corners)
    assert free == pytest.approx([1.0, 1.0], rel=FLOAT32)


def test_the_channels_corners_are_drawn_around_the_one_declared():
    drawn = [Imperfections.draw(seed, Sizes(bandwidth_limit=20e6, bandwidth_mismatch=0.1)) for seed in range(50)]
    ratios = np.array([bench.bandwidth_limit for bench in drawn]) / 20e6
    assert np.abs(ratios - 1).max() <= 0.1
    assert np.abs(ratios - 1).max(axis=0).min() > 0.09  # of 50 uniform draws, but once in 200
    assert len(np.unique(ratios)) == 100
    with pytest.raises(ValueError, match="bandwidth_mismatch"):
        Sizes(bandwidth_mismatch=1.0)


def test_the_reference_bench_has_neither_probe_load_nor_slew_nor_bandwidth_limit():
    plain = Imperfections.reference(1).as_plain()
    names = ("probe_resistance", "probe_capacitance", "slew", "bandwidth_limit")
    assert [plain[name] for name in names] == [0.0, 0.0, 0.0, (0.0, 0.0)]
