"""The contract of every kind of instrument: kept by all that are here, and broken by instruments made to break it."""

from __future__ import annotations

from dataclasses import replace

import pytest

from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor
from bandproof.drivers import contract, dialect
from bandproof.drivers.clock import RealClock
from bandproof.drivers.contract import CLAUSES, check
from bandproof.drivers.dialect import source
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.scpi import definite_block
from bandproof.drivers.session import Session
from bandproof.drivers.supply import Supply
from bandproof.drivers.switch import Switch
from bandproof.simulated_instruments.bench import World
from bandproof.simulated_instruments.imperfections import Imperfections

FOLLOWER = Network(
    resistors=(Resistor("R1", "in", "mid", 1e3),),
    capacitors=(Capacitor("C1", "mid", "0", 1e-9),),
    opamps=(OpAmp("U1", "mid", "out", "out", gbw=3e6),),
)
ROUTES = ("101", "102")
WORLD = World(
    network=FOLLOWER,
    scope={1: "in", 2: "switch"},
    routes=dict(zip(ROUTES, ("out", "mid"), strict=True)),
    supply=2e-3,
    imperfections=replace(Imperfections(), adc_bits=8, noise=0.5),
)
LANGUAGES = ["scpi99", "orchard", "orchard, text", "harbour", "harbour, reals"]
KINDS = {"generator": Generator, "scope": Scope, "switch": Switch, "supply": Supply}
NAMES = {"generator": "generator", "scope": "digitizer", "switch": "switch", "supply": "supply"}


@pytest.mark.parametrize("name", LANGUAGES)
@pytest.mark.parametrize("role", KINDS)
def test_every_simulated_instrument_keeps_its_contract_in_every_language(stand, invented, name, role):
    language, texts = invented.get(name, ("", {}))
    bench = stand(replace(WORLD, language=language), **texts)
    outcomes = check(bench.drivers[role], no_board=True, routes=ROUTES)
    assert [outcome for outcome in outcomes if outcome.verdict == "broken"] == []
    not_tried = {outcome.clause for outcome in outcomes if outcome.verdict == "not tried"}
    mute = {"identifies_itself_alike_twice"} if language == "harbour" else set()  # its dialects have no identity query
    deaf = {"reports_an_unknown_command"} if (language, role) == ("harbour", "switch") else set()
    assert not_tried == mute | deaf


class Memory:
    """An instrument in memory that keeps what it is told under SCPI-99's names, and errors for what it is not."""

    def __init__(self, known):
        self.values, self.errors, self.identity = dict(known), [], b"Nobody,Memory,0,0"

    def __call__(self, message):
        head, _, value = message.decode().partition(" ")
        if message in (b"*CLS", b"*RST", b"ABORt", b"INITiate:IMMediate"):
            self.errors.clear()
            return b""
        fixed = {"*OPC?": lambda: b"1", "*IDN?": lambda: self.identity, "SYSTem:ERRor?": self.error}
        if head in fixed:
            return fixed[head]() + b"\n"
        return self.tell(head, value)

    def error(self):
        return self.errors.pop(0) if self.errors else b'0,"none"'

    def tell(self, head, value):
        if head.rstrip("?") not in self.values:
            self.errors.append(b'-113,"Undefined header"')
            return b""
        if head.endswith("?"):
            return self.values[head[:-1]].encode() + b"\n"
        self.values[head] = {"ON": "1", "OFF": "0"}.get(value, value)
        return b""


class MemoryScope(Memory):
    """A scope whose inputs stand at 0 V."""

    def tell(self, head, value):
        if head == "TRACe:DATA?":
            return self.record(value) + b"\n"
        if head == "SENSe:SWEep:TINTerval?":
            values = self.values
            return b"%g\n" % (float(values["SENSe:SWEep:TIME"]) / float(values["SENSe:SWEep:POINts"]))
        return super().tell(head, value)

    def record(self, name):
        import numpy as np

        header = f"SENSe{name[2:]}:VOLTage:DC:RANGe:"
        full, offset = (float(self.values[header + word]) for word in ("UPPer", "OFFSet"))
        volt = min(max(0.0, offset - full), offset + full * (1 - 1 / 128))
        return definite_block(np.full(int(self.values["SENSe:SWEep:POINts"]), volt, ">f4").tobytes())


class MemorySwitch(Memory):
    """A switch with one route closed at a time."""

    def tell(self, head, value):
        routes = {"ROUTe:CLOSe": value, "ROUTe:OPEN:ALL": ""}
        if head in routes:
            self.closed = routes[head]
            return b""
        if head == "ROUTe:CLOSe?":
            return b"1\n" if value == self.closed else b"0\n"
        return super().tell(head, value)


KNOWN = {
    "generator": dict.fromkeys(
        (
            *("SOURce:FUNCtion:SHAPe", "SOURce:FREQuency:CW", "SOURce:VOLTage:AMPLitude"),
            *("SOURce:VOLTage:OFFSet", "OUTPut:STATe"),
        ),
        "0",
    ),
    "scope": {
        **{f"SENSe{n}:VOLTage:DC:RANGe:{word}": "1" for n in "12" for word in ("UPPer", "OFFSet")},
        **{f"INPut{n}:{word}": "1" for n in "12" for word in ("COUPling", "FILTer:LPASs:STATe")},
        **dict.fromkeys(("SENSe:SWEep:TIME", "SENSe:SWEep:POINts"), "1"),
        **dict.fromkeys(("TRIGger:SOURce", "FORMat:DATA", "FORMat:BORDer"), ""),
    },
    "switch": {},
    "supply": {
        **{f"SOURce{n}:{w}:LEVel:IMMediate:AMPLitude": "0" for n in "12" for w in ("VOLTage", "CURRent")},
        **{f"OUTPut{n}:STATe": "0" for n in "12"},
        **{f"MEASure{n}:SCALar:CURRent:DC": "0" for n in "12"},
    },
}
MEMORIES = {"generator": Memory, "scope": MemoryScope, "switch": MemorySwitch, "supply": Memory}


def in_memory(memory_port, role, *, kind=None, text=None):
    """Return a driver on an instrument in memory."""
    entry = dialect.parse(text or source(f"scpi99-{NAMES[role]}"), role)
    port = memory_port((kind or MEMORIES[role])(KNOWN[role]))
    return KINDS[role](Session(Link("MEMORY", RealClock(), opener=lambda *_: port), entry.habits), entry)


@pytest.mark.parametrize("role", KINDS)
def test_an_instrument_in_memory_keeps_every_clause(memory_port, role):
    outcomes = check(in_memory(memory_port, role), no_board=True, routes=ROUTES)
    assert [outcome for outcome in outcomes if outcome.verdict != "kept"] == []
    assert [outcome.clause for outcome in outcomes] == [clause.__name__ for clause in CLAUSES[KINDS[role]]]


def other(role, tell):
    """Return a kind of instrument in memory that treats messages otherwise; `tell` may return None for the usual."""

    class Other(MEMORIES[role]):
        def tell(self, head, value):
            found = tell(self, head, value)
            return super().tell(head, value) if found is None else found

    return Other


def never_off(self, head, value):
    return b"" if (head, value) == ("OUTPut:STATe", "OFF") else b"1\n" if head == "OUTPut:STATe?" else None


def never_on(self, head, value):
    return b"" if head.startswith("OUTPut") and value == "ON" else None


def deaf(self, head, value):
    return b"" if head.rstrip("?") not in self.values else None


def half_level(self, head, value):
    return b"0.1\n" if head == "SOURce:VOLTage:AMPLitude?" else None


def frequency_moves(self, head, value):
    if (head, value) == ("SOURce:VOLTage:AMPLitude", "0.1"):
        self.values["SOURce:FREQuency:CW"] = "1000.1"
    return


def range_too_small(self, head, value):
    return b"0.19998\n" if head == "SENSe1:VOLTage:DC:RANGe:UPPer?" and self.values[head[:-1]] == "0.2" else None


def always_a_second(self, head, value):
    return b"0.00001\n" if head == "SENSe:SWEep:TINTerval?" else None


def one_sample_short(self, head, value):
    return definite_block(b"\0" * 3996) + b"\n" if head == "TRACe:DATA?" else None


def always_at_the_end(self, head, value):
    import numpy as np

    return definite_block(np.full(1000, -100.0, ">f4").tobytes()) + b"\n" if head == "TRACe:DATA?" else None


def never_at_the_end(self, head, value):
    import numpy as np

    header = f"SENSe{value[2:]}:VOLTage:DC:RANGe:OFFSet"
    middle = float(self.values.get(header, 0))
    return definite_block(np.full(1000, middle, ">f4").tobytes()) + b"\n" if head == "TRACe:DATA?" else None


def stays_closed(self, head, value):
    return b"1\n" if head == "ROUTe:CLOSe?" else None


def never_opens(self, head, value):
    return b"" if head == "ROUTe:OPEN:ALL" else None


def one_voltage_for_all(self, head, value):
    if head == "SOURce2:VOLTage:LEVel:IMMediate:AMPLitude":
        self.values["SOURce1:VOLTage:LEVel:IMMediate:AMPLitude"] = value
    return


def draws_while_off(self, head, value):
    return b"0.1\n" if head.startswith("MEASure") else None


BREAKERS = {
    ("generator", "is_off_when_safe"): never_off,
    ("generator", "switches_its_output"): never_on,
    ("generator", "reports_an_unknown_command"): deaf,
    ("generator", "reads_back_frequency_amplitude_and_offset"): half_level,
    ("generator", "keeps_its_frequency_when_the_amplitude_changes"): frequency_moves,
    ("scope", "reads_back_a_range_no_smaller"): range_too_small,
    ("scope", "takes_the_duration_asked"): always_a_second,
    ("scope", "takes_the_record_it_says"): one_sample_short,
    ("scope", "records_as_before_after_reopening"): one_sample_short,
    ("scope", "sees_no_overload_inside_its_range"): always_at_the_end,
    ("scope", "tells_an_overload"): never_at_the_end,
    ("scope", "shifts_its_range_without_shifting_the_input"): never_at_the_end,
    ("switch", "closes_one_route_and_opens_the_others"): stays_closed,
    ("switch", "opens_every_route"): never_opens,
    ("supply", "reads_back_voltages_and_limits"): one_voltage_for_all,
    ("supply", "has_its_voltages_after_reopening"): one_voltage_for_all,
    ("supply", "gives_nothing_when_safe"): draws_while_off,
    ("supply", "switches_its_outputs"): never_on,
}


@pytest.mark.parametrize(("role", "clause"), BREAKERS, ids=[clause for _, clause in BREAKERS])
def test_an_instrument_that_does_otherwise_breaks_the_clause(memory_port, role, clause):
    driver = in_memory(memory_port, role, kind=other(role, BREAKERS[role, clause]))
    verdicts = {outcome.clause: outcome for outcome in check(driver, no_board=True, routes=ROUTES)}
    assert verdicts[clause].verdict == "broken"
    assert verdicts[clause].found


def test_a_frequency_that_is_rounded_breaks_the_clause_though_round_ones_are_kept(memory_port):
    def whole_hertz(self, head, value):
        self.values.update({head: f"{float(value):.0f}"} if head == "SOURce:FREQuency:CW" else {})
        return b"" if head == "SOURce:FREQuency:CW" else None

    outcomes = check(in_memory(memory_port, "generator", kind=other("generator", whole_hertz)), no_board=True)
    broken = {outcome.clause: outcome.found for outcome in outcomes if outcome.verdict == "broken"}
    assert list(broken) == ["reads_back_frequency_amplitude_and_offset"]
    assert "reads back 1235" in broken["reads_back_frequency_amplitude_and_offset"]


def test_an_identity_that_changes_breaks_its_clause(memory_port):
    driver = in_memory(memory_port, "generator")
    names = iter(("one", "two"))
    driver.identify = lambda: next(names)
    with pytest.raises(contract.Broken, match="'one', then 'two'"):
        contract.identifies_itself_alike_twice(driver)


@pytest.mark.parametrize(
    ("role", "clause"),
    [
        ("generator", "repeats_nothing"),
        ("scope", "repeats_no_channel_setting"),
        ("switch", "closes_again_after_reopening"),
    ],
)
def test_a_driver_that_repeats_itself_breaks_the_clause(memory_port, monkeypatch, role, clause):
    driver = in_memory(memory_port, role)
    monkeypatch.setattr(driver, "_once", lambda slot, text, make: make())
    outcomes = {outcome.clause: outcome for outcome in check(driver, no_board=True, routes=ROUTES)}
    assert outcomes[clause].verdict == "broken"
    assert "messages were sent" in outcomes[clause].found


def test_a_driver_that_restores_something_else_breaks_the_clause(memory_port, monkeypatch):
    driver = in_memory(memory_port, "generator")
    monkeypatch.setattr(driver, "restore", lambda: driver.set_frequency(5.0))
    outcomes = {outcome.clause: outcome for outcome in check(driver, no_board=True)}
    assert outcomes["is_as_before_after_reopening"].verdict == "broken"


@pytest.mark.parametrize("role", ["generator", "supply"])
def test_without_the_word_that_no_board_is_there_no_output_goes_on(stand, role):
    bench = stand(WORLD)
    outcomes = check(bench.drivers[role], routes=ROUTES)
    assert not [text for text in bench.sent(role) if text.endswith("ON")]
    assert [outcome.verdict for outcome in outcomes if outcome.clause.startswith("switches")] == ["not tried"]
    check(bench.drivers[role], routes=ROUTES, no_board=True)
    assert [text for text in bench.sent(role) if text.endswith("ON")]
