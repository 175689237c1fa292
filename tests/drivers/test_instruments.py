"""Generator, scope and switch do what their dialect says, and nothing else; the dialects here are invented."""

from __future__ import annotations

import math

import numpy as np
import pytest

from bandproof.drivers import dialect
from bandproof.drivers.errors import InstrumentError, LinkClosed, NoAnswer, ReplyError, SettingRefused
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.scpi import definite_block
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch

GENERATOR = """
title = "counts in kHz and rms"
kind = "generator"
[habits]
harmless = [17]
[shape]
sine = ["WAVE 0"]
query = "WAVE?"
is_sine = "0"
[frequency]
set = "KHZ {value}"
query = "KHZ?"
unit = 1000.0
format = ".6f"
limits = [1, 1e6]
[amplitude]
set = "LEVEL {value}"
query = "LEVEL?"
meaning = "MEANING"
[offset]
set = "MIDDLE {value}"
query = "MIDDLE?"
[load]
set = "TERM {value}"
query = "TERM?"
high = "OPEN"
[output]
on = "RUN 1"
off = "RUN 0"
query = "RUN?"
"""


class ManualClock:
    """A clock that only counts."""

    def __init__(self):
        self.t = 0.0

    def now(self):
        return self.t

    def wait(self, duration):
        self.t += duration

    def patience(self, expected):
        return 5.0

    def expired(self, expected):
        return 5.0

    def utc(self):
        raise AssertionError("nothing is logged here")

    def mark(self, step, attempt):
        pass


@pytest.fixture
def build(memory_port, monkeypatch):
    """Return a maker: kind, dialect text and instrument in; driver and port out."""

    def make(kind, text, answer, **options):
        entry = dialect.parse(text, "mine.toml")
        port = memory_port(answer)
        link = Link("MEMORY", ManualClock(), opener=lambda *_: port)
        monkeypatch.setattr(link, "log", lambda outgoing, head, length: 0)
        return kind(Session(link, entry.habits), entry, **options), port

    return make


@pytest.mark.parametrize(
    ("meaning", "told"), [("peak", 1.5), ("peak-to-peak", 3.0), ("rms", 1.5 / math.sqrt(2))], ids=str
)
def test_amplitude_is_told_as_the_dialect_means_it_and_read_back_as_peak(build, registers, meaning, told):
    instrument = registers()
    generator, _ = build(Generator, GENERATOR.replace("MEANING", meaning), instrument)
    assert generator.set_amplitude(1.5) == pytest.approx(1.5, rel=1e-8)  # nine digits are sent
    assert float(instrument.values["LEVEL"]) == pytest.approx(told, rel=1e-8)


@pytest.fixture
def generator(build, registers):
    instrument = registers()
    made, port = build(Generator, GENERATOR.replace("MEANING", "peak"), instrument, ceiling=5.0)
    return made, port, instrument


def test_units_and_formats_come_from_the_dialect(generator):
    made, port, _ = generator
    assert made.set_frequency(1234.5) == pytest.approx(1234.5)
    assert port.messages == [b"KHZ 1.234500", b"*OPC?", b"KHZ?", b"SYSTem:ERRor?"]


def test_a_setting_made_again_alike_costs_no_message(generator):
    made, port, _ = generator
    first = made.set_frequency(1234.5)
    before = len(port.messages)
    assert made.set_frequency(1234.5) == first
    assert len(port.messages) == before
    made.set_frequency(1234.6)
    assert len(port.messages) == before + 4


def test_the_value_read_back_is_used_and_refused_beyond_the_limit(generator):
    made, _, instrument = generator
    instrument.fixed["KHZ?"] = b"1.0000005"
    assert made.set_frequency(1000.0) == pytest.approx(1000.0005, abs=1e-9)
    instrument.fixed["KHZ?"] = b"2.00001"
    with pytest.raises(SettingRefused, match=r"MEMORY was given 2000 by 'KHZ 2.000000' and reads back 2000.01") as told:
        made.set_frequency(2000.0)
    assert "or within 0; `readback` and `absolute` of [frequency])" in str(told.value)
    assert made.set_offset(0.0) == 0.0  # the link is still in step


def test_a_refused_setting_does_not_count_as_made(generator):
    made, port, instrument = generator
    instrument.fixed["KHZ?"] = b"2"
    for _ in range(2):
        with pytest.raises(SettingRefused):
            made.set_frequency(1000.0)
    assert port.messages.count(b"KHZ 1.000000") == 2


def test_after_a_refused_setting_the_one_before_it_is_sent_again(generator):
    made, port, instrument = generator
    made.set_frequency(1000.0)
    instrument.fixed["KHZ?"] = b"1"
    with pytest.raises(SettingRefused):
        made.set_frequency(2000.0)
    made.set_frequency(1000.0)
    assert port.messages.count(b"KHZ 1.000000") == 2


def test_a_value_outside_the_dialects_limits_is_not_sent(generator):
    made, port, _ = generator
    with pytest.raises(ValueError, match="frequency must be from 1 to 1e\\+06"):
        made.set_frequency(2e6)
    assert port.messages == []


def test_the_load_is_told_and_makes_amplitude_and_offset_unset(generator):
    made, port, instrument = generator
    made.set_amplitude(1.0)
    assert made.set_load(math.inf) == math.inf
    assert instrument.values["TERM"] == "OPEN"
    assert made.set_load(600.0) == 600.0
    made.set_amplitude(1.0)
    assert port.messages.count(b"LEVEL 1") == 2


def test_a_load_that_cannot_be_told_is_refused_unless_it_is_the_fixed_one(build, registers):
    text = GENERATOR.replace("MEANING", "peak").replace('set = "TERM {value}"', "fixed = 50.0")
    made, port = build(Generator, text, registers())
    assert made.set_load(50.0) == 50.0
    with pytest.raises(ValueError, match="load must be 50 ohm"):
        made.set_load(math.inf)
    assert port.messages == []


def test_offset_and_peak_together_never_pass_the_ceiling(generator):
    made, port, _ = generator
    made.set_amplitude(3.0)
    before = len(port.messages)
    with pytest.raises(ValueError, match=r"must not exceed 5 V, got 5\.5 V"):
        made.set_offset(-2.5)
    with pytest.raises(ValueError, match="must not exceed"):
        made.set_amplitude(float("nan"))
    assert len(port.messages) == before


def test_be_safe_turns_the_output_off_even_with_errors_in_the_queue(generator):
    made, port, instrument = generator
    made.output(True)
    instrument.fixed["SYSTem:ERRor?"] = b'-100,"Old"'
    made.be_safe()
    assert instrument.values["RUN"] == "0"
    assert port.messages[-3:] == [b"RUN 0", b"*OPC?", b"RUN?"]


def test_be_safe_reopens_a_link_that_is_dirty_or_closed(generator):
    made, _, instrument = generator
    made.output(True)
    for spoil in (made.disconnect, lambda: setattr(made.session.link, "is_dirty", True)):
        instrument.values["RUN"] = "1"
        spoil()
        made.be_safe()
        assert instrument.values["RUN"] == "0"


def test_an_amplitude_that_was_not_confirmed_still_counts_against_the_ceiling(generator):
    made, _, instrument = generator
    made.set_amplitude(4.0)
    instrument.fixed["LEVEL?"] = b"4"
    with pytest.raises(SettingRefused):
        made.set_amplitude(1.0)
    with pytest.raises(ValueError, match="must not exceed"):
        made.set_offset(2.0)


def test_be_safe_demands_that_the_output_says_it_is_off(generator):
    made, _, instrument = generator
    instrument.fixed["RUN?"] = b"1"
    with pytest.raises(SettingRefused, match="'RUN 0' and reads back 1"):
        made.be_safe()


def test_restore_makes_all_settings_again_between_output_off_and_on(generator):
    made, port, instrument = generator
    made.set_sine()
    made.output(True)
    made.set_frequency(1000.0)
    made.set_amplitude(1.0)
    made.set_frequency(2000.0)
    instrument.values.clear()
    port.messages.clear()
    made.reopen()
    made.restore()
    assert [message for message in port.messages if b"?" not in message] == [
        b"*CLS",
        b"RUN 0",
        b"WAVE 0",
        b"KHZ 2.000000",
        b"LEVEL 1",
        b"RUN 1",
    ]


def test_an_error_of_the_queue_is_raised_with_its_number_words_and_command(generator):
    made, _, instrument = generator
    instrument.fixed["SYSTem:ERRor?"] = [b'17,"Harmless"', b'-221,"Settings conflict"', b'0,"No error"']
    with pytest.raises(InstrumentError, match="-221 'Settings conflict' after 'MIDDLE 1'"):
        made.set_offset(1.0)
    instrument.fixed["SYSTem:ERRor?"] = [b'17,"Harmless"', b'0,"No error"']
    assert [entry.number for entry in made.check_errors()] == [17]


def test_a_queue_that_never_empties_is_read_to_a_bound(generator):
    made, port, instrument = generator
    instrument.fixed["SYSTem:ERRor?"] = b'17,"Harmless"'
    assert len(made.check_errors()) == len(port.messages) == 100


def test_a_wrong_kind_of_instrument_is_noticed(build, registers):
    text = GENERATOR.replace("MEANING", "peak") + '[identity]\npattern = "Oscillator"\n'
    made, _ = build(Generator, text, registers())
    with pytest.raises(ReplyError, match=r"answered '\*IDN\?'.*fits 'Oscillator'"):
        made.identify()
    with pytest.raises(LinkClosed):
        made.output(True)


SCOPE = """
title = "an invented scope"
kind = "scope"
channels = ["LEFT", "RIGHT"]
[range]
set = "SPAN {channel} {value}"
query = "SPAN? {channel}"
unit = 4.0
readback = [0.999, 3]
[duration]
set = "LAST {value}"
query = "LAST?"
[points]
set = "COUNT {value}"
query = "COUNT?"
format = "d"
readback = [0.5, 2]
[interval]
query = "RATE?"
reciprocal = true
[acquisition]
start = "GO"
complete = "READY?"
completes = "polled"
is_complete = "YES"
"""
VOLTS = np.random.default_rng(3).uniform(-1, 1, (2, 64))
CODES = np.rint(VOLTS * 100).astype(int)  # volts = 0.01 * code, peak code 100


def scope_instrument(registers, **more):
    fixed = {"SPAN? LEFT": b"0.5", "SPAN? RIGHT": b"0.5", "COUNT?": b"64", "LAST?": b"0.00064", "RATE?": b"1e5"}
    return registers(fixed | {"READY?": b"YES"} | {key.replace("_", " "): value for key, value in more.items()})


def record_by(build, registers, text, fixed):
    scope, port = build(Scope, SCOPE + text, scope_instrument(registers))
    port._answer.fixed.update(fixed)
    scope.set_channel(1, range=2.0)
    assert scope.set_channel(2, range=20.0, probe_factor=10.0).range == 20.0
    setting = scope.set_record(640e-6, 64)
    assert (setting.sample_interval, setting.points) == (1e-5, 64)
    return scope.acquire(), port


def block(array, kind):
    return definite_block(array.astype(kind).tobytes())


BY_QUERY = """
[transfer]
read = "DUMP {channel}"
encoding = "uint8"
scaling = "query"
scale = "STEP? {channel}"
offset = "MID? {channel}"
origin = "ZERO? {channel}"
before = ["LOOK {channel}"]
[overload]
low = 0
high = 255
"""
BY_PREAMBLE = """
[transfer]
read = "DUMP? {channel}"
encoding = "int16"
byte_order = "little"
terminated = true
scaling = "preamble"
preamble = "HEAD? {channel}"
separator = ";"
scale_field = 2
offset_field = 0
offset_sign = -1
[overload]
low = -128
high = 127
"""
AS_TEXT = """
[transfer]
read = "DUMP? {channel}"
framing = "line"
encoding = "ascii"
[overload]
bits = 8
"""
AS_REALS = """
[transfer]
read = "DUMP? {channel}"
encoding = "real64"
byte_order = "little"
[overload]
bits = 8
"""


def as_text(array):
    return ",".join(f"{value:.2f}" for value in array).encode()


def channels(make):
    return {name: make(row) for name, row in zip(("LEFT", "RIGHT"), (0, 1), strict=True)}


SCALINGS = {
    "codes by query": (
        BY_QUERY.replace("DUMP", "DUMP?"),
        lambda: {
            **{f"DUMP? {n}": v for n, v in channels(lambda row: block(CODES[row] + 110, "u1")).items()},
            **{f"STEP? {n}": b"0.01" for n in ("LEFT", "RIGHT")},
            **{f"MID? {n}": b"0.1" for n in ("LEFT", "RIGHT")},
            **{f"ZERO? {n}": b"120" for n in ("LEFT", "RIGHT")},
        },
        0.01,
    ),
    "codes by preamble": (
        BY_PREAMBLE,
        lambda: {
            **{f"DUMP? {n}": v for n, v in channels(lambda row: block(CODES[row] + 20, "<i2")).items()},
            **{f"HEAD? {n}": b'0.2;"a;b";1E-2' for n in ("LEFT", "RIGHT")},
        },
        0.01,
    ),
    "volts as text": (
        AS_TEXT,
        lambda: {f"DUMP? {n}": v for n, v in channels(lambda row: as_text(CODES[row] / 100)).items()},
        2.0 / 128,
    ),
    "volts as reals": (
        AS_REALS,
        lambda: {f"DUMP? {n}": v for n, v in channels(lambda row: block(CODES[row] / 100, "<f8")).items()},
        2.0 / 128,
    ),
}


@pytest.mark.parametrize(("text", "fixed", "lsb"), SCALINGS.values(), ids=SCALINGS.keys())
def test_every_scaling_gives_the_same_volts_at_the_probe_tips(build, registers, text, fixed, lsb):
    record, _ = record_by(build, registers, text, fixed())
    assert record.volts == pytest.approx(CODES / 100 * np.array([[1.0], [10.0]]), abs=1e-12)
    assert record.sample_interval == 1e-5
    assert record.lsb == pytest.approx(np.array([1.0, 10.0]) * lsb)
    assert not record.overload.any()


@pytest.mark.parametrize("end", [0, 255])
def test_a_code_at_the_end_of_the_converter_is_an_overload(build, registers, end):
    text, fixed, _ = SCALINGS["codes by query"]
    answers = fixed()
    codes = CODES[1] + 110
    codes[7] = end
    answers["DUMP? RIGHT"] = block(codes, "u1")
    record, _ = record_by(build, registers, text, answers)
    assert record.overload.tolist() == [False, True]


def test_a_sample_that_is_no_number_is_an_overload(build, registers):
    text, fixed, _ = SCALINGS["volts as text"]
    answers = fixed()
    answers["DUMP? LEFT"] = answers["DUMP? LEFT"].replace(b",", b",9.91E37,", 1).rsplit(b",", 1)[0]
    record, _ = record_by(build, registers, text, answers)
    assert record.overload.tolist() == [True, False]


def test_the_instruments_own_word_on_overload_is_taken(build, registers):
    text, fixed, _ = SCALINGS["volts as reals"]
    answers = fixed() | {"OVER? LEFT": b"FINE", "OVER? RIGHT": b"OVER"}
    text = text.replace("bits = 8", 'by = "query"\nquery = "OVER? {channel}"\nis_overloaded = "OVER"')
    record, _ = record_by(build, registers, text, answers)
    assert record.overload.tolist() == [False, True]


def test_range_is_told_per_division_and_divided_by_the_probe(build, registers):
    _, port = record_by(build, registers, AS_REALS, SCALINGS["volts as reals"][1]())
    assert b"SPAN LEFT 0.5" in port.messages
    assert b"SPAN RIGHT 0.5" in port.messages


@pytest.mark.parametrize(
    ("table", "has", "other"),
    [("", "DC", "AC"), ("[coupling]\n", "DC", "AC"), ('[coupling]\nwords = { AC = "AC" }\n', "AC", "DC")],
    ids=["nothing said", "the blank's words", "AC only"],
)
def test_a_coupling_that_cannot_be_told_is_dc_unless_the_dialect_has_one_word(build, registers, table, has, other):
    scope, _ = build(Scope, SCOPE + table + AS_REALS, scope_instrument(registers))
    assert scope.set_channel(1, range=2.0, coupling=has).coupling == has
    with pytest.raises(ValueError, match="coupling"):
        scope.set_channel(1, range=2.0, coupling=other)


def test_a_text_record_of_another_length_is_not_understood(build, registers):
    text, fixed, _ = SCALINGS["volts as text"]
    answers = fixed()
    answers["DUMP? LEFT"] += b",0.0"
    with pytest.raises(ReplyError, match=r"'DUMP\? LEFT'.*64 samples, 65 came"):
        record_by(build, registers, text, answers)


def test_a_record_that_never_completes_is_given_up_and_the_link_is_dirty(build, registers):
    text, fixed, _ = SCALINGS["volts as reals"]
    with pytest.raises(NoAnswer, match=r"'READY\?' within 2\.15"):
        record_by(build, registers, text, fixed() | {"READY?": b"NO"})


def test_acquiring_before_setting_is_our_mistake(build, registers):
    scope, port = build(Scope, SCOPE + AS_REALS, scope_instrument(registers))
    with pytest.raises(ValueError, match="must come before acquire"):
        scope.acquire()
    assert port.messages == []


SWITCH = """
title = "an invented switch"
kind = "switch"
close = "JOIN {route}"
query = "JOINED? {route}"
is_closed = "YES"
open_all = "PART"
exclusive = false
"""


def test_a_switch_that_joins_several_parts_all_before_it_joins_one(build, registers):
    switch, port = build(Switch, SWITCH, registers({"JOINED? A": b"YES", "JOINED? B": b"NO"}))
    switch.close("A")
    switch.close("A")
    assert [message for message in port.messages if b"?" not in message] == [b"PART", b"JOIN A"]
    with pytest.raises(SettingRefused, match="'JOIN B' and reads back NO"):
        switch.close("B")
