"""What the first records of a stage prove before it is driven: each fault names tap, channel and cause."""

from dataclasses import replace

import pytest

from bandproof.analysis.network import Resistor
from bandproof.bench.errors import BenchFault


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
    assert found.journal.points[-1].purpose == "closing"


def test_a_probe_factor_wrong_on_the_output_only_is_told_and_measured(swept, one_band):
    """It may as well be a wrong part: the sweep goes on, and the reader of the result knows."""
    found = swept(1, board=one_band, rewire=probes(1.0, 10.0))
    (alarm,) = found.journal.alarms
    assert alarm.startswith("low: the low-level point at 160 Hz is × ")
    assert "a probe factor set wrong by ten" in alarm
