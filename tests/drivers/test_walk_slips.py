"""A walk notices the usual slips of a dialect and names them; right dialects are left in peace (`test_walks`)."""

from __future__ import annotations

from dataclasses import replace

import pytest

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor
from bandproof.drivers.clock import RealClock
from bandproof.drivers.dialect import parse, source
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.session import Session
from bandproof.drivers.slots import Number
from bandproof.drivers.switch import Switch
from bandproof.drivers.trials import limits_of, trials
from bandproof.drivers.walks import walk
from bandproof.simulated_instruments.bench import World
from bandproof.simulated_instruments.imperfections import Imperfections

FOLLOWER = Network(
    resistors=(Resistor("R1", "in", "mid", 1e3),),
    capacitors=(Capacitor("C1", "mid", "0", 1e-9),),
    opamps=(OpAmp("U1", "mid", "out", "out", gbw=3e6),),
)
WORLD = World(  # 8 bits with half a step of noise, 0.1 V of hum at each input
    network=FOLLOWER,
    scope={1: "in", 2: "switch"},
    routes={"101": "out"},
    supply=2e-3,
    imperfections=replace(Imperfections(), adc_bits=8, noise=0.5, hum=(0.1, 0.1)),
)

SLIPS = {  # language, what stands in its scope's dialect, what stands there instead, where it is told, what is told
    "a rate read as an interval": ("orchard", "reciprocal = true\n", "", "interval.query", "reciprocal = true"),
    "an interval read as a rate": (
        *("scpi99", "[interval]", "[interval]\nreciprocal = true"),
        *("interval.query", "reciprocal = false"),
    ),
    "the unit of an interval": ("harbour", "unit = 1e-9", "unit = 1e-6", "interval.query", "unit = 1e-09"),
    "the unit of an interval, doubled": ("harbour", "unit = 1e-9", "unit = 2e-9", "interval.query", "unit = 1e-09"),
    "the place of an interval": ("harbour", "place = 1", "place = 0", "interval.query", "place = 1"),
    "the unit of a rate": (
        *("orchard", "reciprocal = true", "reciprocal = true\nunit = 1000.0"),
        *("interval.query", "unit = 1,"),
    ),
    "the unit of a duration": (
        *("orchard", "unit = 1e-3\nreadback = [0.5, 2.0]", "readback = [0.5, 2.0]"),
        *("interval.query", "[duration] or [points] is wrong by 1000"),
    ),
    "the unit of a duration, doubled": (
        *("orchard", "unit = 1e-3\nreadback = [0.5, 2.0]", "unit = 2e-3\nreadback = [0.5, 2.0]"),
        *("interval.query", "[duration] or [points] is wrong by 2"),
    ),
    "byte order of codes": ("harbour", '"big"', '"little"', "transfer.read", 'byte_order = "big"'),
    "byte order of reals": ("harbour, reals", '"little"', '"big"', "transfer.read", 'byte_order = "little"'),
    "byte order of SCPI reals": ("scpi99", '"big"', '"little"', "transfer.read", 'byte_order = "big"'),
    "signed for unsigned": ("orchard", '"uint8"', '"int8"', "transfer.read", 'encoding = "uint8"'),
    "the place of the scale": ("orchard", "scale_field = 4", "scale_field = 3", "transfer.read", "scale_field = 4"),
    "the place of the offset": (
        "orchard",
        "offset_field = 3",
        "offset_field = 2",
        "transfer.read",
        "offset_field = 3",
    ),
    "the place of the origin": (
        "orchard",
        "origin_field = 0",
        "origin_field = 3",
        "transfer.read",
        "origin_field = 0",
    ),
    "an offset left out": ("orchard", "offset_field = 3\n", "", "transfer.read", "offset_field = 3"),
    "an offset taken away": ("harbour", "offset_sign = -1\n", "", "transfer.read", "offset_sign = -1"),
    "the sign of an offset": ("harbour", "unit = -1.0", "unit = 1.0", "transfer.read", "[offset] unit = -1"),
    "the unit of an offset": (
        *("orchard", "unit = 1e-3\nreadback = [0.9, 1.1]", "readback = [0.9, 1.1]"),
        *("transfer.read", "[offset] unit = 0.001"),
    ),
    "the unit of a range, halved": ("orchard", "unit = 4.0", "unit = 2.0", "transfer.read", "[range] unit = 4"),
    "the unit of a range, doubled": ("harbour", "unit = 0.0005", "unit = 0.001", "transfer.read", "unit = 0.0005"),
    "no newline after a block": ("harbour", "terminated = false\n", "", "transfer.read", "then terminated = false"),
    "no newline after reals": ("harbour, reals", "terminated = false\n", "", "transfer.read", "terminated = false"),
    "a newline after a block": (
        *("orchard", 'framing = "block"', 'framing = "block"\nterminated = false'),
        *("transfer.read", "terminated = true"),
    ),
    "samples of another width": ("harbour", '"int16"', '"int32"', "transfer.read", "2 byte(s) for each of 500"),
    "the unit of points": (
        *("harbour", 'format = "d"', 'format = "d"\nunit = 2.0'),
        *("interval.query", "[points] is wrong by 2"),
    ),
}


@pytest.fixture
def scope_of(stand, invented):
    """Return a maker of scopes that speak a language, with a changed dialect."""

    def make(name, old="", new="", *, world=WORLD):
        def slipped(text):
            assert text.count(old) >= 1
            return text.replace(old, new, 1)

        language, texts = invented.get(name, ("", {}))
        return stand(replace(world, language=language), {"scope": slipped}, **texts).scope

    return make


@pytest.mark.parametrize(("name", "old", "new", "slot", "words"), SLIPS.values(), ids=SLIPS.keys())
def test_a_slip_is_refused_and_named(scope_of, name, old, new, slot, words):
    lines = walk(scope_of(name, old, new))
    refused = [line for line in lines if line.verdict == "refused" and line.slot.startswith(slot)]
    assert refused, lines
    assert words in refused[0].came


LIVE = replace(  # a powered board: 4.5 V under the second input, 2 V of hum at both, so that a shifted range overloads
    WORLD,
    network=replace(FOLLOWER, opamps=(replace(FOLLOWER.opamps[0], offset=-4.5),)),
    scope={1: "in", 2: "out"},
    routes={},
    imperfections=replace(WORLD.imperfections, hum=(2.0, 2.0)),
)


@pytest.mark.parametrize("world", [WORLD, LIVE], ids=["quiet", "live"])
@pytest.mark.parametrize("name", ["scpi99", "orchard", "orchard, text", "harbour", "harbour, reals"])
def test_a_right_dialect_is_not_doubted_whatever_its_inputs_carry(scope_of, name, world):
    lines = walk(scope_of(name, world=world))
    assert [line for line in lines if line.verdict == "refused"] == []
    assert len([line for line in lines if line.slot.startswith("transfer.read")]) == 4


def test_several_slips_are_told_at_once_and_the_settings_are_what_they_were(scope_of):
    scope = scope_of("harbour", "place = 1", "place = 0")
    slots = [("range", "P"), ("range", "S"), ("offset", "S"), ("points", ""), ("duration", "")]
    scope.dialect = replace(scope.dialect, transfer=replace(scope.dialect.transfer, byte_order="little"))
    before = [scope.read_number(getattr(scope.dialect, slot), channel) for slot, channel in slots]
    refused = {line.slot: line.came for line in walk(scope) if line.verdict == "refused"}
    assert set(refused) == {"interval.query", "transfer.read shifted P", "transfer.read shifted S"}
    assert "place = 1" in refused["interval.query"]
    assert "byte_order" in refused["transfer.read shifted S"]
    assert [scope.read_number(getattr(scope.dialect, slot), channel) for slot, channel in slots] == before


def test_trial_values_are_the_same_wherever_the_instrument_stands(scope_of):
    scope = scope_of("scpi99")
    first = [line.sent for line in walk(scope) if line.slot.split()[0].endswith(".set") and "back" not in line.slot]
    scope.set_channel(1, range=0.1, offset=0.02)
    scope.set_record(0.001, 100)
    again = [line.sent for line in walk(scope) if line.slot.split()[0].endswith(".set") and "back" not in line.slot]
    assert first == again
    assert "SENSe:SWEep:POINts 1000, then 500" in first


def test_limits_that_a_dialect_declares_are_shown(scope_of):
    (line,) = [line for line in walk(scope_of("scpi99")) if line.slot == "points.set"]
    assert line.came == "1000, 500 (limits 2 to 100000)"


@pytest.mark.parametrize(
    ("limits", "expected"),
    [
        ((-float("inf"), float("inf")), (0.5, 5.0)),
        ((0.01, 2.0), (0.5, 2.0)),
        ((10.0, 1000.0), (100.0, 10.0)),
        ((0.001, 0.1), (0.01, 0.1)),
        ((8.0, float("inf")), (12.0, 8.0)),
        ((-4.0, -2.0), (-3.0, -2.0)),
        ((3.0, 3.0), (3.0,)),
    ],
    ids=str,
)
def test_trial_values_lie_within_the_limits(limits, expected):
    number = Number(set="R {value}", limits=limits)
    assert trials(number, (0.5, 5.0)) == pytest.approx(expected)


def test_two_trial_values_are_one_where_the_format_does_not_tell_them_apart():
    assert trials(Number(set="P {value}", format="d", limits=(2, 2.5)), (1000.0, 500.0)) == (2.5,)
    assert limits_of(Number()) == ""


def test_an_answer_that_never_changes_is_refused(memory_port, registers):
    """A frequency whose query is another one's, with a readback wide enough to let it pass."""
    text = source("scpi99-generator").replace("[frequency]", "[frequency]\nabsolute = 1e9")
    dialect = parse(text, "generator")
    port = memory_port(registers({"SOURce:FREQuency:CW?": b"777"}))
    lines = walk(Generator(Session(Link("MEMORY", RealClock(), opener=lambda *_: port), dialect.habits), dialect))
    (line,) = [line for line in lines if line.slot == "frequency.set"]
    assert line.verdict == "refused"
    assert "answers 777 to more than one" in line.came


class Rounding:
    """Turns a memory instrument's frequency into the nearest twentieth of a hertz."""

    def __init__(self, inner):
        self.inner = inner

    def __call__(self, message):
        head, _, value = message.partition(b" ")
        return self.inner(
            b"%s %.2f" % (head, round(float(value) * 20) / 20) if head == b"SOURce:FREQuency:CW" else message
        )


def test_a_frequency_that_is_rounded_unsaid_is_refused(memory_port, registers):
    """Round values read back as they were set."""
    for line, told in (("", "`absolute`"), ("\nabsolute = 0.03", "")):
        dialect = parse(source("scpi99-generator").replace("[frequency]", f"[frequency]{line}"), "generator")
        port = memory_port(Rounding(registers()))
        lines = walk(
            Generator(Session(Link("MEMORY", RealClock(), opener=lambda *_, p=port: p), dialect.habits), dialect)
        )
        refused = [line.came for line in lines if line.slot == "frequency.set" and line.verdict == "refused"]
        assert len(refused) == bool(told)
        assert all(told in came and "1234.55, 0.018 away" in came for came in refused)


def test_a_value_between_the_two_is_tried_where_the_limits_have_it():
    assert trials(Number(set="R {value}"), (1000.0, 1234.5, 2500.0)) == (1000.0, 1234.5, 2500.0)
    assert trials(Number(set="R {value}", limits=(1300.0, 1e6)), (1000.0, 1234.5, 2500.0)) == (1300.0, 2500.0)


NAMED = {  # route in the bench file, what the switch answers, whether that is another spelling
    "zeros": ("1", b"AT 01", True),
    "blanks": ("B1", b"AT B 1", True),
    "another route": ("1", b"AT 10", False),
    "none": ("1", b"AT 00", False),
}


@pytest.mark.parametrize(("route", "answer", "alike"), NAMED.values(), ids=NAMED.keys())
def test_a_route_that_the_switch_spells_otherwise_is_told(memory_port, registers, route, answer, alike):
    dialect = replace(parse(source("scpi99-switch"), "switch"), query="WHERE?", is_closed="AT {route}")
    port = memory_port(registers({"WHERE?": answer}))
    switch = Switch(Session(Link("MEMORY", RealClock(), opener=lambda *_: port), dialect.habits), dialect)
    (line,) = [line for line in walk(switch, routes=(route,)) if line.verdict == "refused"]
    assert f"then answers {answer.decode()}, not AT {route}" in line.came
    assert ("[wiring]" in line.came) == alike


def test_every_wired_route_is_closed_and_opened_again(memory_port, registers):
    dialect = replace(parse(source("scpi99-switch"), "switch"), query="")
    port = memory_port(registers())
    switch = Switch(Session(Link("MEMORY", RealClock(), opener=lambda *_: port), dialect.habits), dialect)
    walk(switch, routes=("101", "102"))
    told = [message for message in port.messages if message.startswith((b"ROUTe:CLOS", b"ROUTe:OPEN"))]
    opened = dialect.open_all.encode()
    assert told == [opened, b"ROUTe:CLOSe (@101)", opened, b"ROUTe:CLOSe (@102)", opened]


def test_a_route_that_always_answers_closed_is_refused(memory_port, registers):
    dialect = parse(source("scpi99-switch"), "switch")
    port = memory_port(registers({"ROUTe:CLOSe? (@101)": b"1"}))
    switch = Switch(Session(Link("MEMORY", RealClock(), opener=lambda *_: port), dialect.habits), dialect)
    refused = [line for line in walk(switch, routes=("101",)) if line.verdict == "refused"]
    assert [line.slot for line in refused] == ["open_all"]
    assert "101 answers 1, as when it was closed" in refused[0].came
