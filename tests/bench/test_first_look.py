"""What the first records of a stage prove before it is driven: each fault names tap, channel and cause."""

import re
from dataclasses import replace

import pytest

from bandproof.analysis.network import Resistor
from bandproof.bench.errors import BenchFault
from bandproof.bench.first_look import check_quiet
from bandproof.bench.instruments import opened
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.resumption import check_again
from bandproof.bench.sweep import Sweep
from bandproof.bench.verbs.rehearse import simulated
from bandproof.simulated_instruments.faults import Fault


def probes(first, second):
    return lambda bench: replace(bench, probe_factors={1: first, 2: second})


def dead_tap(world):
    return replace(world, routes={**world.routes, "101": "0"})


def open_generator(world):
    """Nothing arrives at the board: as good as unplugged."""
    return replace(world, imperfections=replace(world.imperfections, output_resistance=1e9))


def load_50_ohm(world):
    assert world.imperfections.output_resistance == 50.0  # the divider below is then a half
    load = Resistor("load", world.network.input, "0", 50.0)
    return replace(world, network=replace(world.network, resistors=(*world.network.resistors, load)))


def with_gain(gain):
    return lambda world: replace(world, imperfections=replace(world.imperfections, channel_gain=(gain - 1.0, 0.0)))


def stuck_at(volts):
    """An op-amp whose output stands at a direct voltage (a band-pass passes its offset with a gain of one)."""

    def change(world):
        opamps = tuple(replace(amp, offset=volts) for amp in world.network.opamps)
        return replace(world, network=replace(world.network, opamps=opamps))

    return change


def same(anything):
    return anything


# world, bench as the controller believes it, what the sentence must name
FAULTS = {
    "probe factor 10 for a 1:1 probe": (same, probes(10.0, 10.0), r"^input \(channel 1\) .*× \d.*\): probe factor 10"),
    "probe factor 1 for a 10:1 probe": (with_gain(0.1), same, r"^input \(channel 1\) .*probe factor 1 .*probe is × 10"),
    "rms taken for peak to peak": (with_gain(8**0.5), same, r"^input .*counts rms, its dialect says peak to peak"),
    "peak to peak taken for rms": (with_gain(0.125**0.5), same, r"^input .*counts peak to peak, its dialect says rms"),
    "rms taken for peak": (with_gain(2**0.5), same, r"^input \(channel 1\) .*counts rms, its dialect says peak"),
    "peak taken for rms": (with_gain(0.5**0.5), same, r"^input \(channel 1\) .*counts peak, its dialect says rms"),
    "50 ohm load": (load_50_ohm, same, r"^input \(channel 1\) .*0\.\d+\): a 50 Ω load hangs on the generator"),
    "load of 50 ohm assumed": (with_gain(2.0), same, r"^input \(channel 1\) .*assumes a 50 Ω load: set it to high"),
    "level that nothing explains": (with_gain(5.0), same, r"^input \(channel 1\) .*check the generator's dialect"),
    "dead tap": (dead_tap, same, r"^no signal at low_out \(channel 2\) .*check the probe, the route .* supply"),
    "generator unplugged": (open_generator, same, r"^no signal at input \(channel 1\) while the generator gives"),
    "output stuck at 6 V": (stuck_at(6.0), same, r"^low_out \(channel 2\) stands at .*V DC without signal.*powered"),
    "output stuck at -6 V": (stuck_at(-6.0), same, r"^low_out \(channel 2\) stands at -.*V DC without signal"),
}  # fmt: skip


@pytest.mark.parametrize(("change", "rewire", "words"), FAULTS.values(), ids=FAULTS)
def test_a_bench_fault_is_found_before_the_board_is_driven(swept, one_band, change, rewire, words):
    found = swept(1, board=one_band, change=change, rewire=rewire, raises=BenchFault)
    assert found.problem is not None
    with pytest.raises(BenchFault, match=words):
        raise found.problem
    assert [point.purpose for point in found.journal.points] in (["no-signal"], ["no-signal", "low-level"])


def with_last(amp):
    """The board's last stage has another op-amp."""

    def change(world):
        *others, last = world.network.opamps
        return replace(world, network=replace(world.network, opamps=(*others, amp(last))))

    return change


@pytest.mark.parametrize("volts", [13.5, -13.5])
def test_an_output_stuck_at_a_rail_in_the_last_stage_is_refused_before_any_signal(swept, tmp_path, volts):
    """A band-pass passes its op-amp's offset with a gain of one, so the offset is the output's direct voltage."""
    log = tmp_path / "exchange.log"
    stuck = with_last(lambda amp: replace(amp, offset=volts, swing=abs(volts)))
    found = swept(1, change=stuck, raises=BenchFault, log=log)
    assert re.match(
        rf"breath_out \(channel 2\) stands at {'-' * (volts < 0)}\d.* V DC without signal", str(found.problem)
    )
    assert [point.stage for point in found.journal.points] == [stage.name for stage in found.board.stages]
    assert {point.purpose for point in found.journal.points} == {"no-signal"}
    sent = log.read_text()
    assert "OUTPut:STATe OFF" in sent
    assert "OUTPut:STATe ON" not in sent


def test_a_resume_does_not_go_past_a_direct_voltage_that_is_still_there(swept, tmp_path):
    log = tmp_path / "exchange.log"
    stuck = with_last(lambda amp: replace(amp, offset=13.5, swing=13.5))
    found = swept(1, change=stuck, raises=BenchFault)
    journal, bench = found.journal, rehearsal_bench(found.board)
    with (
        simulated(found.world, bench) as (reachable, clock),
        pytest.raises(BenchFault, match=r"^breath_out .* DC"),
        opened(reachable, clock, log) as devices,
    ):
        check_again(Sweep(found.board, reachable, devices, clock, Absent(), journal), journal)
    assert "OUTPut:STATe ON" not in log.read_text()


def test_a_direct_voltage_beyond_half_the_swing_is_refused_though_the_range_would_hold_it(swept, one_band):
    """The sweep may use the other half of the swing (DEVELOPERS.md), so an output there would clip."""
    board = replace(one_band, op_amp=replace(one_band.op_amp, swing=4.0))
    quiet = next(point for point in swept(1, board=one_band).journal.points if point.purpose == "no-signal")
    bench, stage = rehearsal_bench(board), board.stages[0]
    check_quiet(board, bench, stage, replace(quiet, offsets=(0.0, 1.9), ranges=(2.0, 5.0)))
    with pytest.raises(BenchFault, match=r"^low_out \(channel 2\) .* more than half of the 4 V an op-amp gives"):
        check_quiet(board, bench, stage, replace(quiet, offsets=(0.0, 2.2), ranges=(2.0, 5.0)))


def test_hum_without_signal_is_told(swept, one_band):
    found = swept(1, board=one_band, change=lambda world: replace(world, faults=(Fault("strong-hum", 0),)))
    assert any("input has" in alarm and "hum or noise without signal" in alarm for alarm in found.journal.alarms)


# What no bench fault is: 8 % is what 50 Ω into 600 Ω take (a voltage divider).
HEALTHY = {
    "8 % less": with_gain(0.92),
    "15 % more": with_gain(1.15),
    "offset of 50 mV": stuck_at(0.05),
    "3 % of the bench's own": same,
}


@pytest.mark.parametrize("change", HEALTHY.values(), ids=HEALTHY)
def test_what_loading_and_tolerances_explain_is_no_fault(swept, one_band, change):
    found = swept(1, board=one_band, change=change)
    assert found.problem is None
    assert not found.journal.alarms
    assert found.journal.points[-1].purpose == "thru"  # what comes last


def test_a_probe_factor_wrong_on_the_output_only_is_told_and_measured(swept, one_band):
    """It may as well be a wrong part: the sweep goes on, and the reader of the result knows."""
    found = swept(1, board=one_band, rewire=probes(1.0, 10.0))
    (alarm,) = found.journal.alarms
    assert alarm.startswith("low: the low-level point at 160 Hz is × ")
    assert "a probe factor set wrong by ten" in alarm
