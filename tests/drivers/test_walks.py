"""A walk tries every slot of a dialect, says what came back, and leaves the instrument as it was."""

from __future__ import annotations

from dataclasses import replace

import pytest

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor
from bandproof.drivers.errors import LinkBroken
from bandproof.drivers.walks import walk
from bandproof.simulated_instruments.bench import World

FOLLOWER = Network(
    resistors=(Resistor("R1", "in", "mid", 1e3),),
    capacitors=(Capacitor("C1", "mid", "0", 1e-9),),
    opamps=(OpAmp("U1", "mid", "out", "out", gbw=3e6),),
)
ROUTES = ("101", "102")
WORLD = World(
    network=FOLLOWER, scope={1: "in", 2: "switch"}, routes=dict(zip(ROUTES, ("out", "mid"), strict=True)), supply=2e-3
)
LANGUAGES = ["scpi99", "orchard", "orchard, text", "harbour", "harbour, reals"]
ROLES = ["generator", "scope", "switch", "supply"]


@pytest.fixture
def speaking(stand, invented):
    """Return a maker of stands that speak a language; changes of dialect texts by role."""

    def make(name, changes=None):
        if name == "scpi99":
            return stand(WORLD, changes)
        language, texts = invented[name]
        return stand(replace(WORLD, language=language), changes, **texts)

    return make


@pytest.mark.parametrize("name", LANGUAGES)
def test_every_slot_of_a_right_dialect_is_accepted_missing_or_skipped(speaking, name):
    bench = speaking(name)
    for role in ROLES:
        lines = walk(bench.drivers[role], no_board=True, routes=ROUTES)
        assert all(line.works for line in lines)
        assert {line.verdict for line in lines} <= {"accepted", "missing", "skipped"}, role
        assert {line.slot for line in lines if line.verdict == "skipped"} <= {"identity.reset"}


@pytest.mark.parametrize("role", ["scope", "switch", "supply", "generator"])
def test_settings_are_after_the_walk_what_they_were_before(speaking, role):
    bench = speaking("scpi99")
    bench.scope.set_channel(1, range=0.5, offset=0.2, coupling="AC", bandwidth_limit=True)
    bench.scope.set_record(0.02, 500)
    bench.switch.close("102")
    bench.supply.set_voltage(2, 12.0)
    bench.generator.set_frequency(321.0)
    bench.generator.set_offset(0.25)
    queries = {
        "scope": [
            *("SENS1:VOLT:RANG?", "SENS1:VOLT:RANG:OFFS?", "INP1:COUP?"),
            *("INP1:FILT?", "SENS:SWE:POIN?", "SENS:SWE:TIME?"),
        ],
        "switch": ["ROUT:CLOS? (@101,102)"],
        "supply": ["SOUR1:VOLT?", "SOUR2:VOLT?", "SOUR1:CURR?"],
        "generator": ["FREQ?", "VOLT?", "VOLT:OFFS?"],
    }[role]
    driver = bench.drivers[role]
    before = [driver.session.ask(query, bytes) for query in queries]
    lines = walk(driver, routes=ROUTES)
    assert [driver.session.ask(query, bytes) for query in queries] == before
    assert len({line.sent for line in lines}) > 5  # something was changed in between


@pytest.mark.parametrize("name", ["scpi99", "orchard", "harbour"])
@pytest.mark.parametrize("role", ["generator", "supply"])
def test_an_output_is_never_switched_on_unless_somebody_says_that_no_board_is_there(speaking, name, role):
    bench = speaking(name)
    driver = bench.drivers[role]
    channel = driver.dialect.channels[0] if role == "supply" else ""
    on, off = (text.format(channel=channel) for text in (driver.dialect.output.on, driver.dialect.output.off))
    lines = walk(driver)
    assert on not in bench.sent(role)
    skipped = [line for line in lines if line.slot.startswith("output.on")]
    assert skipped
    assert all(line.verdict == "skipped" and "no board" in line.came for line in skipped)
    walk(driver, no_board=True)
    assert on in bench.sent(role)
    assert bench.sent(role)[0] == off


def test_an_output_is_off_before_anything_else_and_at_the_end(speaking):
    bench = speaking("scpi99")
    bench.generator.output(True)
    before = len(bench.sent("generator"))
    walk(bench.generator, no_board=True)
    assert bench.sent("generator")[before] == "OUTPut:STATe OFF"
    assert bench.generator.session.ask("OUTP?", bytes) == b"0"


UNKNOWN = "no answer, then error -113"
NO_SUCH_WORD = "then answers DC, not ALT, then error -141"
WRONG = {  # role, text of the dialect, what stands there instead, the slot, what is told
    "a query it does not know": ("generator", "SOURce:FREQuency:CW?", "FRQ?", "frequency.query", UNKNOWN),
    "a command it does not know": ("generator", "OFFSet {value}", "OFST {value}", "offset.set", "then error -113"),
    "a word it does not know": ("scope", 'AC = "AC"', 'AC = "ALT"', "coupling AC 1", NO_SUCH_WORD),
    "another answer": ("generator", 'is_off = "0"', 'is_off = "OFF"', "output.off", "then answers 0, not OFF"),
    "samples of another width": ("scope", '"real32"', '"real64"', "transfer.read 1", "a block of 4000 bytes"),
    "a field that is not there": ("supply", 'CURRent:DC?"', 'CURRent:VC?"', "current.query 1", UNKNOWN),
}


@pytest.mark.parametrize(("role", "old", "new", "slot", "words"), WRONG.values(), ids=WRONG.keys())
def test_a_wrong_slot_is_refused_with_what_the_instrument_said_and_no_other(speaking, role, old, new, slot, words):
    def wrong(text):
        assert old in text
        return text.replace(old, new, 1)

    bench = speaking("scpi99", {role: wrong})
    lines = walk(bench.drivers[role], routes=ROUTES)
    (line,) = [line for line in lines if line.slot == slot]
    assert line.verdict == "refused"
    assert words in line.came
    assert line.works == (slot == "coupling AC 1")  # a sweep measures DC coupled
    also = {"transfer.read 2", "current.query 2", "coupling AC 2", f"{slot} back"}  # the same slot again
    assert {line.slot for line in lines if line.verdict == "refused"} <= {slot} | also


def test_where_nobody_is_the_walk_ends(speaking):
    bench = speaking("scpi99")
    bench.bench.stop()
    with pytest.raises(LinkBroken):
        walk(bench.generator)
