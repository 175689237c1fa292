"""A supply's settings are read back, its outputs feed the simulated board, and its current tells what is powered."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor
from bandproof.drivers.errors import BeyondLimits, InstrumentError, SettingRefused
from bandproof.simulated_instruments.bench import World

INVERTER = Network(
    resistors=(Resistor("R1", "in", "sum", 1e3), Resistor("R2", "sum", "out", 1e3)),
    capacitors=(Capacitor("C1", "sum", "out", 1e-9),),
    opamps=(OpAmp("U1", "0", "sum", "out", gbw=3e6), OpAmp("U2", "out", "buffered", "buffered", gbw=3e6)),
)
QUIESCENT = 2e-3
WORLD = World(network=INVERTER, scope={1: "in", 2: "out"}, supply=QUIESCENT)


@pytest.fixture
def bench(stand):
    made = stand(WORLD)
    made.supply.be_safe()
    for rail in (1, 2):
        made.supply.set_voltage(rail, 12.0)
        made.supply.set_current_limit(rail, 0.05)
    return made


def currents(bench):
    return [bench.supply.read_current(rail) for rail in (1, 2)]


def test_the_measured_current_is_what_the_op_amps_draw_and_nothing_while_off(bench):
    assert currents(bench) == [0.0, 0.0]
    bench.supply.output(True)
    assert currents(bench) == pytest.approx([2 * QUIESCENT] * 2)
    bench.supply.be_safe()
    assert currents(bench) == [0.0, 0.0]


def level_out(bench):
    bench.generator.set_sine()
    bench.generator.set_frequency(1000.0)
    bench.generator.set_amplitude(1.0)
    bench.generator.output(True)
    for channel in (1, 2):
        bench.scope.set_channel(channel, range=2.0)
    bench.scope.set_record(0.01, 1000)
    bench.clock.wait(0.1)
    return float(np.std(bench.scope.acquire().volts[1]))


def test_a_board_without_its_supply_gives_no_signal_at_an_op_amps_output(bench):
    assert level_out(bench) == 0.0
    bench.supply.output(True)
    assert level_out(bench) == pytest.approx(1 / np.sqrt(2), rel=0.01)  # rms of a sine of 1 V peak, gain 1


def test_a_limit_below_what_the_board_draws_holds_the_current_and_starves_the_board(bench):
    bench.supply.output(True)
    bench.supply.set_current_limit(2, 0.003)
    assert currents(bench) == pytest.approx([2 * QUIESCENT, 0.003])
    assert level_out(bench) == 0.0


def test_a_reopened_supply_is_restored_without_taking_the_supply_away(bench):
    bench.supply.output(True)
    before = len(bench.sent("supply"))
    bench.supply.reopen()
    bench.supply.restore()
    told = bench.sent("supply")[before:]
    set_last = max(place for place, text in enumerate(told) if text.startswith("SOURce"))
    assert {text[:15] for text in told if text.startswith("SOURce")} >= {"SOURce1:VOLTage", "SOURce2:VOLTage"}
    assert told.index("OUTPut1:STATe ON") > set_last
    assert not [text for text in told if text.endswith("OFF")]
    assert currents(bench) == pytest.approx([2 * QUIESCENT] * 2)


def test_a_voltage_beyond_the_dialects_limits_is_never_sent(bench):
    before = bench.sent("supply")
    with pytest.raises(BeyondLimits, match="voltage must be from 0 to 30"):
        bench.supply.set_voltage(1, 31.0)
    assert bench.sent("supply") == before


def test_a_supply_without_limits_in_its_dialect_names_its_own_refusal(stand):
    bench = stand(WORLD, {"supply": lambda text: text.replace("limits = [0.0, 30.0]", "")})
    with pytest.raises((InstrumentError, SettingRefused), match="-222"):
        bench.supply.set_voltage(1, 31.0)


def test_one_command_for_all_outputs_is_sent_once(stand):
    def joined(text):
        return text.replace("OUTPut{channel}", "OUTPut1")

    bench = stand(WORLD, {"supply": joined})
    bench.supply.output(True)
    assert [text for text in bench.sent("supply") if "OUTPut" in text] == ["OUTPut1:STATe ON", "OUTPut1:STATe?"]


def test_a_world_without_a_supply_has_no_port_for_one(stand):
    assert "supply" not in stand(replace(WORLD, supply=None)).bench.ports
