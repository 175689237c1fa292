"""Faults that hold from a step on: what each does to a record, by its definition, while every answer looks right."""

import json

import numpy as np
import pytest

from bandproof.simulated_instruments.bench import instruments
from bandproof.simulated_instruments.faults import CONDITIONS, DESCRIPTIONS, NAMES, PLACES, Fault, FaultPlan
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.timebase import RealTimebase, VirtualTimebase

RATE, POINTS, TONE = 1e5, 10_000, 480.0  # 0.1 s: whole periods of 480 Hz and of 50 Hz
FLOAT32 = 1e-6  # relative: records travel as 32-bit reals
SETTLED = 1.0  # s: the band's slowest mode has 5 ms


class Stand:
    """Instruments in this process, spoken to as the servers do; time is counted here."""

    def __init__(self, world, timebase, faults):
        self.plan, self.t = FaultPlan(faults, timebase), 0.0
        self.devices = instruments(world, timebase, self.plan)
        self.ask("switch", "ROUT:CLOS (@101)")
        self.ask("generator", f"FREQ {TONE};VOLT 0.1;:OUTP ON")
        self.ask("scope", f"SENS1:VOLT:RANG 5;:SENS2:VOLT:RANG 50;:SENS:SWE:POIN {POINTS};TIME {POINTS / RATE}")

    def ask(self, name, message):
        self.plan.look(self.t)
        answer = self.devices[name].message(message.encode(), self.t)
        self.t = max(self.t, answer.ready_at)
        return answer.reply

    def record(self):
        """Return both channels in V, settled."""
        self.ask("scope", "*OPC?")  # by now a condition of this step holds, and its transient can decay
        self.t += SETTLED
        self.ask("scope", "INIT")
        volts = [np.frombuffer(self.ask("scope", f"TRAC? CH{n}")[7:-1], ">f4").astype(float) for n in (1, 2)]
        assert self.ask("scope", "SYST:ERR?") == b'0,"No error"\n'
        return np.array(volts)


@pytest.fixture
def stand(world, clock):
    """Make a stand with one condition from step 3 on, at step 2."""

    def make(name, **imperfections):
        given = world(imperfections=Imperfections(**imperfections))
        made = Stand(given, VirtualTimebase(clock.path), [Fault(name, 3)])
        clock.mark(2, 0)
        return made

    return make


def phasors(records, frequency=TONE):
    """Least squares at a frequency and 0 Hz: (2,) complex, peak V."""
    angle = 2 * np.pi * frequency * np.arange(POINTS) / RATE
    basis = np.stack([np.cos(angle), np.sin(angle), np.ones(POINTS)], axis=1)
    fitted = np.linalg.lstsq(basis, records.T, rcond=None)[0]
    return fitted[0] - 1j * fitted[1]


def before_and_after(stand, clock):
    before = stand.record()
    clock.mark(3, 0)
    return before, stand.record()


def test_wrong_frequency_is_2_percent_off_while_the_asked_one_is_answered(stand, clock):
    bench = stand("wrong-frequency")
    before, after = before_and_after(bench, clock)
    assert bench.ask("generator", "FREQ?") == b"480\n"
    assert np.abs(phasors(before)[0]) == pytest.approx(0.1, rel=FLOAT32)
    assert np.abs(phasors(after, 1.02 * TONE)[0]) == pytest.approx(0.1, rel=FLOAT32)
    bench.ask("generator", "FREQ 1000")
    assert np.abs(phasors(bench.record(), 1020.0)[0]) == pytest.approx(0.1, rel=FLOAT32)


def test_open_output_gives_nothing_and_says_it_is_on(stand, clock):
    bench = stand("open-output")
    before, after = before_and_after(bench, clock)
    assert np.abs(before).max(axis=1).min() > 0.09
    assert np.abs(after).max() < 1e-8
    assert bench.ask("generator", "OUTP?") == b"1\n"
    bench.ask("generator", "OUTP OFF;OUTP ON;:VOLT 1")
    assert np.abs(bench.record()).max() < 1e-8


def test_wrong_load_assumption_doubles_level_and_offset(stand, clock):
    bench = stand("wrong-load-assumption")
    bench.ask("generator", "VOLT:OFFS 0.2")
    before, after = before_and_after(bench, clock)
    assert np.abs(phasors(after)) == pytest.approx(2 * np.abs(phasors(before)), rel=FLOAT32)
    assert after.mean(axis=1)[0] == pytest.approx(0.4, rel=FLOAT32)
    assert bench.ask("generator", "VOLT?;VOLT:OFFS?") == b"0.1;0.2\n"


def test_swapped_channels_turn_the_ratio_upside_down(stand, clock):
    before, after = (phasors(records) for records in before_and_after(stand("swapped-channels"), clock))
    assert abs(before[1] / before[0]) > 2
    assert after[1] / after[0] == pytest.approx(before[0] / before[1], rel=FLOAT32)


def test_swapped_channels_follow_the_switch(stand, clock):
    bench = stand("swapped-channels")
    bench.ask("switch", "ROUT:CLOS (@102)")
    at_a = phasors(bench.record())[1]
    bench.ask("switch", "ROUT:CLOS (@101)")
    clock.mark(3, 0)
    bench.record()
    bench.ask("switch", "ROUT:CLOS (@102)")
    assert np.abs(phasors(bench.record())[0]) == pytest.approx(np.abs(at_a), rel=FLOAT32)


def test_wrong_probe_factor_leaves_a_tenth_on_channel_2(stand, clock):
    before, after = before_and_after(stand("wrong-probe-factor"), clock)
    assert np.abs(phasors(after)) == pytest.approx(np.abs(phasors(before)) * [1, 0.1], rel=FLOAT32)


def test_strong_hum_is_50_mV_of_mains_on_both_channels(stand, clock):
    bench = stand("strong-hum")
    bench.ask("generator", "OUTP OFF")
    before, after = before_and_after(bench, clock)
    assert np.abs(before).max() < 1e-8
    assert np.abs(phasors(after, 50.0)) == pytest.approx([0.05, 0.05], rel=FLOAT32)


def test_strong_hum_adds_to_what_the_bench_has(stand, clock):
    bench = stand("strong-hum", hum=(1e-3, 2e-3))
    bench.ask("generator", "OUTP OFF")
    before, after = (np.abs(phasors(records, 50.0)) for records in before_and_after(bench, clock))
    assert before == pytest.approx([1e-3, 2e-3], rel=FLOAT32)
    assert after == pytest.approx([0.051, 0.052], rel=FLOAT32)


def test_unpowered_board_is_silent_at_op_amp_outputs_and_alive_at_its_input(stand, clock):
    bench = stand("unpowered-board", probe_compensation=(0.01, 0.01))
    before, after = before_and_after(bench, clock)
    assert np.abs(before[1]).max() > 0.2
    assert np.abs(after[1]).max() < 1e-8
    assert np.abs(phasors(after)[0]) == pytest.approx(np.abs(phasors(before)[0]), rel=FLOAT32)


def test_unpowered_board_leaves_noise_of_the_converter(stand, clock):
    _, after = before_and_after(stand("unpowered-board", adc_bits=8, noise=2.0), clock)
    # 2 LSB rms and the rounding's 1/12 LSB^2; 10000 samples: 4 standard errors of a standard deviation
    assert after[1].std() / (50 / 128) == pytest.approx(np.sqrt(4 + 1 / 12), rel=4 / np.sqrt(2e4))


def test_clipped_stage_reaches_600_mV_and_its_input_is_whole(stand, clock):
    bench = stand("clipped-stage")
    bench.ask("generator", "VOLT 1")
    before, after = before_and_after(bench, clock)
    assert np.abs(before[1]).max() > 2
    assert np.abs(after[1]).max() == pytest.approx(0.6, rel=FLOAT32)
    assert np.abs(phasors(after)[0]) == pytest.approx(1.0, rel=FLOAT32)


def test_drift_grows_by_5_percent_a_minute_from_its_step_on(stand, clock):
    bench = stand("drift")
    bench.t = 1000.0
    before, at_once = (np.abs(phasors(records)) for records in before_and_after(bench, clock))
    begun = bench.plan.conditions["drift"]
    seconds = SETTLED + 0.2e-3 + 0.2e-3 + 10e-3  # *OPC? and INIT and arming: from the beginning to the record
    assert at_once == pytest.approx(before * [1, 1 + 0.05 * seconds / 60], rel=FLOAT32)
    bench.t = begun + 60.0 - seconds + 0.2e-3
    assert np.abs(phasors(bench.record())) == pytest.approx(before * [1, 1.05], rel=FLOAT32)


@pytest.mark.parametrize("name", sorted(CONDITIONS))
def test_condition_holds_whatever_is_reset_or_done_later(stand, clock, name):
    bench = stand(name)
    clock.mark(3, 0)
    bench.ask("switch", "*IDN?")
    begun = bench.t
    for step, attempt in ((3, 1), (4, 0), (0, 0)):
        clock.mark(step, attempt)
        for device in bench.devices:
            bench.ask(device, "*RST")
    assert list(bench.plan.conditions) == [name]
    assert bench.plan.conditions[name] <= begun


def test_condition_begins_with_the_first_exchange_of_its_step(stand, clock):
    bench = stand("open-output")
    bench.record()
    clock.mark(3, 0)
    bench.t += 5.0
    assert not bench.plan.conditions
    bench.ask("scope", "*IDN?")
    assert bench.plan.conditions == {"open-output": pytest.approx(bench.t - 0.2e-3)}


def test_condition_of_a_skipped_step_holds_all_the_same(stand, clock):
    bench = stand("open-output")
    clock.mark(7, 0)
    assert np.abs(bench.record()).max() < 1e-8


def test_what_does_not_concern_the_generator_leaves_its_phase(world, clock):
    records = []
    for faults in ([], [Fault("wrong-probe-factor", 3)]):
        timebase = VirtualTimebase(clock.path)
        clock.mark(2, 0)
        bench = Stand(world(), timebase, faults)
        clock.mark(3, 0)
        records.append(bench.record())
    assert np.array_equal(records[0][0], records[1][0])


def test_in_real_time_records_are_the_steps(world):
    timebase = RealTimebase()
    bench = Stand(world(), timebase, [Fault("strong-hum", 2)])
    bench.ask("generator", "OUTP OFF")
    found = [np.abs(phasors(bench.record(), 50.0))[0] for _ in range(3)]
    assert found == pytest.approx([0.0, 0.05, 0.05], abs=1e-7)


def test_condition_reaches_the_board_over_tcp(bench, connect, clock, record):
    clients = {name: connect(port) for name, port in bench(faults=(Fault("open-output", 3),)).ports.items()}
    assert clients["generator"].ask("FREQ 480;VOLT 1;:OUTP ON;*OPC?") == "1"
    assert clients["switch"].ask("ROUT:CLOS (@101);*OPC?") == "1"
    found = []
    for step in (2, 3):
        clock.mark(step, 0)
        assert clients["switch"].ask("*OPC?") == "1", "begins here; when armed, the record would see its transient"
        clock.wait(SETTLED)
        found.append(np.abs(record(clients["scope"])[1]).max())
    assert found[0] > 1.0
    assert found[1] < 1e-8


@pytest.mark.parametrize("name", NAMES)
def test_each_fault_has_a_place_and_one_line_of_description(name):
    fault = Fault(name, 1)
    assert fault.instrument == PLACES[name][0]
    assert Fault.from_plain(json.loads(json.dumps(fault.as_plain()))) == fault
    assert 20 < len(DESCRIPTIONS[name]) <= 80
    assert "\n" not in DESCRIPTIONS[name]
    assert DESCRIPTIONS[name][-1] != "."


@pytest.mark.parametrize(("name", "place"), [("open-output", "scope"), ("drift", "wiring"), ("late-answer", "board")])
def test_fault_at_the_wrong_place_is_refused(name, place):
    with pytest.raises(ValueError, match=f"{name} is a fault of the .*, not of the {place}"):
        Fault(name, 1, place)
