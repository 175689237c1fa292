"""Instruments whose answers wrap the number, that are told an interval, that only say which route is closed.

The instruments are in memory; their words are invented and follow one page each of an invented manual.
"""

from __future__ import annotations

import math
import re
from typing import ClassVar

import numpy as np
import pytest

from bandproof.drivers import dialect
from bandproof.drivers.clock import RealClock
from bandproof.drivers.contract import check
from bandproof.drivers.dialect import DialectMistakes
from bandproof.drivers.errors import BeyondLimits, InstrumentError, ReplyError
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.scope import Scope
from bandproof.drivers.scpi import definite_block
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch
from bandproof.drivers.walks import walk

GENERATOR = """
title = "answers with words"
kind = "generator"
[identity]
query = ""
reset = ""
clear = ""
[habits]
confirm = "FINISH"
confirmed = "FINISHED"
errors = "FAULT"
errors_answer = "FAULT {value} {any}"
[shape]
sine = ["SHAPE SINE"]
query = "TELL SHAPE"
is_sine = "SHAPE SINE"
[frequency]
set = "TONE {value} kHz"
query = "TELL TONE"
answer = "TONE {value} kHz"
format = ".5f"
unit = 1000.0
absolute = 0.03
[amplitude]
set = "LEVEL {value} mV"
query = "TELL LEVEL"
answer = "LEVEL {value} mV RMS"
format = ".1f"
unit = 1e-3
meaning = "rms"
[offset]
set = "SHIFT {value} mV"
query = "TELL SHIFT"
answer = "SHIFT {value} mV"
format = ".0f"
unit = 1e-3
[output]
on = "RELAY CLOSED"
off = "RELAY OPEN"
query = "TELL RELAY"
is_on = "RELAY CLOSED"
is_off = "RELAY OPEN"
"""
SCOPE = """
title = "answers with names"
kind = "scope"
[identity]
query = "?NAME"
pattern = "recorder"
reset = "FRESH"
clear = ""
[habits]
confirm = "?IDLE"
confirmed = "IDLE=YES"
errors = "?TROUBLE"
errors_answer = "TROUBLE={value} {any}"
[range]
set = "WINDOW{channel}={value}"
query = "?WINDOW{channel}"
answer = "WINDOW{channel}={value}"
unit = 0.0005
limits = [0.05, 20.0]
[offset]
set = "CENTRE{channel}={value}"
query = "?CENTRE{channel}"
answer = "CENTRE{channel}={value}"
unit = 1e-3
absolute = 0.1
[coupling]
set = "COUPLE{channel}={value}"
query = "?COUPLE{channel}"
answer = "COUPLE{channel}={value}"
[bandwidth_limit]
on = "SOFT{channel}=YES"
off = "SOFT{channel}=NO"
query = "?SOFT{channel}"
is_on = "SOFT{channel}=YES"
is_off = "SOFT{channel}=NO"
[duration]
[points]
set = "POINTS={value}"
query = "?POINTS"
answer = "POINTS={value}"
limits = [64, 65536]
[interval]
set = "PACE={value}"
query = "?PACE"
answer = "PACE={value}"
unit = 1e-6
format = ".2f"
limits = [0.5e-6, 1e-3]
[acquisition]
prepare = ["DEPTH=FULL"]
start = "START"
complete = "?STATE"
completes = "polled"
is_complete = "STATE=FULL"
[transfer]
read = "?DATA{channel}"
encoding = "uint16"
byte_order = "little"
scaling = "preamble"
preamble = "?SCALE{channel}"
scale_answer = "SCALE{channel}={any}STEP {value};{any}"
scale_unit = 1e-6
offset_answer = "SCALE{channel}={any}CENTRE {value}"
offset_unit = 1e-3
origin_answer = "SCALE{channel}={any}ZERO {value};{any}"
[overload]
low = 0
high = 65520
bits = 12
"""
SWITCH = """
title = "answers which"
kind = "switch"
close = "GO {route}"
query = "WHERE"
is_closed = "AT 0{route}"
open_all = "PARK"
[identity]
query = ""
reset = ""
clear = ""
[habits]
confirm = "STEADY"
confirmed = "STEADY"
errors = "COMPLAINT"
errors_answer = "E{value} {any}"
"""


class Talker:
    """An instrument in memory: `tell` returns an answer, "" for none, None for a message it does not know."""

    none, unknown = "", ""
    start: ClassVar = {}

    def __init__(self):
        self.errors, self.values, self.heard = [], dict(self.start), []

    def __call__(self, message):
        text = message.decode()
        self.heard.append(text)
        found = self.tell(text)
        if found is None:
            self.errors.append(self.unknown)
        return found + b"\n" if isinstance(found, bytes) else f"{found}\n".encode() if found else b""

    def next_error(self):
        return self.errors.pop(0) if self.errors else self.none


class MemoryGenerator(Talker):
    none, unknown = "FAULT 00 NONE", "FAULT 10 NOT UNDERSTOOD"
    start: ClassVar = {
        "TONE": "1.00000 kHz",
        "LEVEL": "100.0 mV RMS",
        "SHIFT": "+0 mV",
        "SHAPE": "SINE",
        "RELAY": "OPEN",
    }

    def tell(self, text):
        head, _, rest = text.partition(" ")
        if text == "FINISH":
            return "FINISHED"
        if text == "FAULT":
            return self.next_error()
        if head == "TELL" and rest in self.values:
            return f"{rest} {self.values[rest]}"
        return self.put(head, rest) if head in self.values else None

    def put(self, head, rest):
        spelling = {"TONE": "{:.5f} kHz", "LEVEL": "{:.1f} mV RMS", "SHIFT": "{:+.0f} mV"}
        if head in spelling:
            number, _, unit = rest.partition(" ")
            if unit not in spelling[head]:
                return None
            self.values[head] = spelling[head].format(round(float(number) * 20e3) / 20e3)
        else:
            self.values[head] = rest
        return ""


class MemoryRecorder(Talker):
    """Its inputs stand at 0 V; the centre of a window may be moved by one window."""

    none, unknown = "TROUBLE=0 none", "TROUBLE=20 unknown command"
    windows = (100, 200, 400, 1000, 2000, 4000, 10000, 20000, 40000)
    start: ClassVar = {"PACE": 10.0, "POINTS": 1024} | {
        f"{word}{n}": value
        for n in "12"
        for word, value in {"WINDOW": 10000.0, "CENTRE": 0.0, "COUPLE": "DC", "SOFT": "NO"}.items()
    }

    def tell(self, text):
        fixed = {"?NAME": "NAME=recorder", "?IDLE": "IDLE=YES", "?STATE": "STATE=FULL", "START": ""}
        if text in fixed:
            return fixed[text]
        if text == "?TROUBLE":
            return self.next_error()
        if text == "FRESH":
            self.values = dict(self.start)
            return ""
        if text == "DEPTH=FULL":
            return self.deepen()
        if found := re.fullmatch(r"\?(DATA|SCALE)([12])", text):
            return getattr(self, found[1].lower())(found[2])
        if text.startswith("?"):
            name = text[1:]
            return f"{name}={self.values[name]}" if name in self.values else None
        name, _, value = text.partition("=")
        return self.put(name, value) if name in self.values else None

    def deepen(self):
        return ""

    def put(self, name, value):
        if name in ("PACE", "POINTS"):
            number = float(value)
            self.values[name] = round(number * 20) / 20 if name == "PACE" else math.ceil(number / 64) * 64
        elif name.startswith("WINDOW"):
            self.values[name] = float(next(w for w in self.windows if w >= float(value) * (1 - 1e-9)))
            self.values[f"CENTRE{name[-1]}"] = 0.0
        elif name.startswith("CENTRE"):
            reach = self.values[f"WINDOW{name[-1]}"]
            if abs(float(value)) > reach:
                self.errors.append("TROUBLE=23 out of limits")
            else:
                self.values[name] = round(float(value) / reach * 200) * reach / 200
        else:
            self.values[name] = value
        return ""

    def step(self, n):  # uV a code
        return self.values[f"WINDOW{n}"] * 1000 / 65536

    def scale(self, n):
        v = self.values
        head = f"SCALE{n}=POINTS {v['POINTS']}; PACE {v['PACE']:.2f}; "
        return head + f"ZERO 32768; STEP {self.step(n):.6f}; CENTRE {v[f'CENTRE{n}']:.2f}"

    def data(self, n):
        code = np.clip(round(-self.values[f"CENTRE{n}"] * 1000 / self.step(n) / 16) * 16 + 32768, 0, 65520)
        return definite_block(np.full(self.values["POINTS"], code).astype("<u2").tobytes())


class MemorySwitch(Talker):
    none, unknown = "E0 CONTENT", "E1 WHAT"
    start: ClassVar = {"path": "0"}

    def tell(self, text):
        if text.startswith("GO ") or text == "PARK":
            self.values["path"] = text[3:] if text != "PARK" else "0"
            return ""
        known = {"STEADY": "STEADY", "WHERE": f"AT {int(self.values['path']):02d}"}
        return self.next_error() if text == "COMPLAINT" else known.get(text)


KINDS = {
    "generator": (Generator, GENERATOR, MemoryGenerator),
    "scope": (Scope, SCOPE, MemoryRecorder),
    "switch": (Switch, SWITCH, MemorySwitch),
}


@pytest.fixture
def build(memory_port):
    """Return a maker: role, change of the dialect, another kind of instrument; driver and instrument out."""

    def make(role, old="", new="", *, kind=None):
        driver, text, memory = KINDS[role]
        assert old in text
        entry = dialect.parse(text.replace(old, new, 1) if old else text, role)
        instrument = (kind or memory)()
        port = memory_port(instrument)
        return driver(Session(Link("MEMORY", RealClock(), opener=lambda *_: port), entry.habits), entry), instrument

    return make


@pytest.mark.parametrize("role", KINDS)
def test_every_slot_of_an_instrument_that_wraps_its_answers_works(build, role):
    driver, _ = build(role)
    lines = walk(driver, no_board=True, routes=("1", "2"))
    assert [line for line in lines if line.verdict == "refused"] == []
    assert len([line for line in lines if line.verdict == "accepted"]) > 5


@pytest.mark.parametrize("role", KINDS)
def test_an_instrument_that_wraps_its_answers_keeps_its_contract(build, role):
    outcomes = check(build(role)[0], no_board=True, routes=("1", "2"))
    assert [outcome for outcome in outcomes if outcome.verdict == "broken"] == []
    mute = {"identifies_itself_alike_twice"} if role != "scope" else set()
    assert {outcome.clause for outcome in outcomes if outcome.verdict == "not tried"} == mute


def test_what_a_generator_reads_back_is_the_number_inside_its_answer(build):
    generator, instrument = build("generator")
    assert generator.set_frequency(1234.567) == pytest.approx(1234.55)
    assert instrument.values["TONE"] == "1.23455 kHz"
    assert generator.set_amplitude(0.5) == pytest.approx(0.5, rel=1e-3)


def test_an_error_inside_words_is_raised_with_them(build):
    generator, instrument = build("generator")
    instrument.errors.append("FAULT 14 PEAK OVER 5 V")
    with pytest.raises(InstrumentError, match="reported error 14 'FAULT 14 PEAK OVER 5 V'"):
        generator.set_offset(0.0)


def test_an_answer_unlike_its_template_shows_both(build):
    generator, _ = build("generator", 'TONE {value} kHz"\nformat', 'TONE {value} MHz"\nformat')
    with pytest.raises(ReplyError, match=r"b'TONE 1.00000 kHz'.*expected an answer like 'TONE {value} MHz'"):
        generator.set_frequency(1000.0)


def test_a_walk_names_an_answer_unlike_its_template(build):
    driver, _ = build("generator", 'TONE {value} kHz"\nformat', 'TONE {value} MHz"\nformat')
    refused = [line for line in walk(driver) if line.verdict == "refused"]
    assert [line.slot for line in refused] == ["frequency.query"]
    assert refused[0].came == "answers TONE 1.00000 kHz, not an answer like 'TONE {value} MHz'"


def test_a_record_is_scaled_by_named_values_in_their_own_units(build):
    scope, _ = build("scope")
    scope.set_channel(1, range=0.5, offset=0.25)
    scope.set_channel(2, range=2.0, offset=-0.5)
    scope.set_record(0.01, 1000)
    volts = scope.acquire().volts
    assert np.abs(volts[0]).max() <= 0.5 / 2048 * 1.01  # within a step of the converter
    assert np.abs(volts[1]).max() <= 2.0 / 2048 * 1.01


SCALES = {  # what stands in the dialect, what stands there instead, what is told
    "the unit of the scale": ("scale_unit = 1e-6", "", "scale_unit = 1e-06"),
    "the unit of the offset": ("offset_unit = 1e-3", "", "offset_unit = 0.001"),
}


@pytest.mark.parametrize(("old", "new", "words"), SCALES.values(), ids=SCALES.keys())
def test_a_unit_left_out_of_the_scaling_is_named(build, old, new, words):
    refused = [line for line in walk(build("scope", old, new)[0]) if line.verdict == "refused"]
    assert refused
    assert all(line.slot.startswith("transfer.read") for line in refused)
    assert words in refused[0].came


def test_a_wrong_template_of_the_preamble_is_named_where_the_preamble_is_asked(build):
    refused = [
        line for line in walk(build("scope", "}STEP {value}", "}STRIDE {value}")[0]) if line.verdict == "refused"
    ]
    assert refused[0].slot == "transfer.preamble 1"
    assert "scale_answer: an answer like 'SCALE{channel}={any}STRIDE {value};{any}'" in refused[0].came


def test_a_recorder_told_an_interval_takes_the_duration_asked(build):
    scope, instrument = build("scope")
    found = scope.set_record(0.02, 1000)
    assert (found.points, instrument.values["POINTS"]) == (1024, 1024)
    assert instrument.values["PACE"] == 19.55
    assert found.sample_interval == pytest.approx(19.55e-6)
    assert found.duration == pytest.approx(1024 * 19.55e-6)


def test_an_interval_that_would_be_too_short_makes_the_record_longer_and_too_long_is_refused(build):
    scope, _ = build("scope")
    assert scope.set_record(1e-4, 1000).sample_interval == pytest.approx(0.5e-6)
    with pytest.raises(BeyondLimits, match=r"interval must be from 5e-07 to 0.001 by the dialect, got 0.0019"):
        scope.set_record(2.0, 1024)


def test_a_recorder_of_a_fixed_number_of_points_says_so(build):
    points = SCOPE.partition("[points]\n")[2].partition("[interval]")[0]
    scope, instrument = build("scope", points, "fixed = 1024\n")
    found = scope.set_record(0.02, 2000)
    assert (found.points, found.sample_interval) == (1024, pytest.approx(19.55e-6))
    assert "?POINTS" not in instrument.heard
    assert [line for line in walk(scope) if line.verdict == "refused"] == []


def test_what_the_limits_of_a_dialect_leave_out_is_not_tried(build):
    outcomes = check(build("scope", "limits = [0.05, 20.0]", "limits = [0.05, 2.0]")[0])
    assert {outcome.clause for outcome in outcomes if outcome.verdict != "kept"} == {
        "reads_back_a_range_no_smaller",
        "sees_no_overload_inside_its_range",
    }
    assert {outcome.verdict for outcome in outcomes} == {"kept", "not tried"}


class Deep(MemoryRecorder):
    """Takes as many points as it is prepared for."""

    def deepen(self):
        self.values["POINTS"] = 4096
        return ""


def test_what_prepares_records_is_sent_before_their_points_are_asked(build):
    scope, instrument = build("scope", 'set = "POINTS={value}"\n', "", kind=Deep)
    scope.reset()
    assert scope.set_record(0.02, 4000).points == 4096
    for channel in (1, 2):
        scope.set_channel(channel, range=1.0)
    assert scope.acquire().volts.shape == (2, 4096)
    scope.reset()
    del instrument.heard[:]
    scope.set_channel(1, range=1.0)
    assert instrument.heard[0] == "DEPTH=FULL"  # before anything is set


def test_a_switch_that_says_which_route_is_closed_is_believed(build):
    switch, instrument = build("switch")
    switch.close("2")
    assert switch.is_closed("2")
    assert not switch.is_closed("1")
    switch.be_safe()
    assert not switch.is_closed("2")
    assert instrument.heard.count("WHERE") == 4


MISTAKES = {  # role, what stands there, what stands there instead, where it is told, what is told
    "no {value}": ("generator", '"TONE {value} kHz"\nformat', '"TONE kHz"\nformat', "frequency.answer", "{value}"),
    "a slip in a name": (*("generator", "{value} mV RMS", "{valve} mV RMS"), "amplitude.answer", "nearest: {value}"),
    "errors without {value}": ("generator", "FAULT {value} {any}", "FAULT {any}", "habits.errors_answer", "{value}"),
    "a preamble without {value}": ("scope", "}STEP {value}", "}STEP {any}", "transfer.scale_answer", "{value}"),
    "a template and a place": ("scope", "scale_unit", "scale_field = 3\nscale_unit", "transfer.scale_field", "-1"),
    "a template and a place of a number": ("generator", "unit = 1000.0", "place = 1", "frequency.place", "0"),
    "duration and interval both told": ("scope", "[duration]", '[duration]\nset = "T {value}"', "interval.set", "dur"),
    "points nobody knows": ("scope", 'set = "POINTS={value}"\nquery = "?POINTS"', "", "points.query", "fixed"),
    "an interval nobody reads": ("scope", 'query = "?PACE"', "", "interval.query", "rounded"),
    "no route in query or answer": ("switch", "AT 0{route}", "AT 02", "query", "{route}"),
}  # fmt: skip


@pytest.mark.parametrize(("role", "old", "new", "path", "words"), MISTAKES.values(), ids=MISTAKES.keys())
def test_a_mistake_of_a_template_is_named_when_the_dialect_is_read(role, old, new, path, words):
    text = KINDS[role][1]
    assert old in text
    with pytest.raises(DialectMistakes) as caught:
        dialect.parse(text.replace(old, new, 1), "mine.toml")
    assert {finding.path for finding in caught.value.findings} == {path}
    assert words in str(caught.value)


# --- the walk goes on ---


def test_errors_from_before_are_told_apart_from_those_of_the_first_slot(build):
    driver, instrument = build("generator")
    instrument.errors += ["FAULT 12 TONE NUMBER OR UNIT", "FAULT 13 LEVEL OUT OF LIMITS"]
    lines = walk(driver)
    assert [line for line in lines if line.verdict == "refused"] == []
    assert "error 12" in next(line.came for line in lines if line.slot == "habits.errors before")
    assert instrument.heard[0] == "RELAY OPEN"  # still the first of all


def test_an_answer_to_the_error_query_that_is_not_understood_is_filed_there_and_once(build):
    driver, _ = build("generator", 'errors_answer = "FAULT {value} {any}"\n', "")
    habits = driver.session.habits
    refused = [line for line in walk(driver) if line.verdict == "refused"]
    assert [line.slot for line in refused] == ["habits.errors"]
    hint = "has it to have a template, `errors_answer`?"
    assert refused[0].came == f"answers FAULT 00 NONE, not a decimal number: {hint}"
    assert driver.session.habits == habits


def test_an_error_that_is_not_understood_later_is_filed_with_the_error_query(build):
    lines = walk(build("generator", '"FAULT {value} {any}"', '"FAULT {value} NONE"', kind=Stubborn)[0])
    refused = {line.slot: line.came for line in lines if line.verdict == "refused"}
    assert set(refused) == {"habits.errors"}
    assert "FAULT 55 TIRED" in refused["habits.errors"]


class Stubborn(MemoryGenerator):
    """Reports an error of its own once, at the first level it is given."""

    def put(self, head, rest):
        if head == "LEVEL" and "FAULT" not in self.values:
            self.values["FAULT"] = ""
            self.errors.append("FAULT 55 TIRED")
        return super().put(head, rest)


def test_after_a_transaction_that_failed_the_next_slots_are_sent(build):
    driver, _ = build("generator", "TELL SHAPE", "TEL SHAPE")
    lines = walk(driver)
    assert [line.slot for line in lines if line.verdict == "refused"] == ["shape.query"]
    assert not [line for line in lines if "was not sent" in line.came]
