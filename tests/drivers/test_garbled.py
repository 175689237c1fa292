"""Replies garbled into other values that can still be read: what damaged replies by the thousand found."""

import pytest

from bandproof.drivers.dialect import load, parse
from bandproof.drivers.errors import InstrumentError, SettingRefused
from bandproof.drivers.generator import Generator
from bandproof.drivers.schema import DialectMistakes
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session


def instrument(kind, memory, answers):
    dialect = load({Generator: "scpi99-generator", Scope: "scpi99-digitizer"}[kind])
    link, _ = memory(answers)
    return kind(Session(link, dialect.habits), dialect)


@pytest.mark.parametrize("interval", [b"-1E-5", b"0", b"1E-3", b"1E-8"])
def test_a_sample_interval_no_scope_would_take_for_this_record_is_refused(memory, registers, interval):
    scope = instrument(Scope, memory, registers({"SENSe:SWEep:TINTerval?": interval}))
    with pytest.raises(SettingRefused, match="2000 points"):
        scope.set_record(0.02, 2000)


@pytest.mark.parametrize("points", [b"-2000", b"1", b"1E9"])
def test_points_changed_by_the_duration_are_refused_beyond_the_dialects_limits(memory, registers, points):
    answers = {"SENSe:SWEep:TINTerval?": b"1E-5", "SENSe:SWEep:POINts?": [b"2000", points]}
    scope = instrument(Scope, memory, registers(answers))
    with pytest.raises(SettingRefused, match="2000 points"):
        scope.set_record(0.02, 2000)


def test_an_old_entry_in_the_error_queue_says_nothing_of_the_kind_of_instrument(memory, registers):
    entries = [b'-113,"Undefined header"', b'0,"No error"', b'0,"No error"']
    generator = instrument(Generator, memory, registers({"SYSTem:ERRor?": entries}))
    assert generator.is_understood() is None


def test_an_error_of_the_question_itself_does(memory, registers):
    entries = [b'0,"No error"', b'-113,"Undefined header"', b'0,"No error"']
    generator = instrument(Generator, memory, registers({"SYSTem:ERRor?": entries}))
    assert isinstance(generator.is_understood(), InstrumentError)


@pytest.mark.parametrize(
    "entry", ["unit = 1" + "0" * 400, "unit = 1" + "0" * 5000, '"a\\u001b[2J" = 1', "b" * 9000 + " = 1"]
)
def test_a_dialects_mistake_is_told_short_and_plain_whatever_the_file_holds(entry):
    text = f'title = "x"\nkind = "generator"\n[frequency]\n{entry}\n'
    with pytest.raises(DialectMistakes) as told:
        parse(text, "a dialect")
    assert len(str(told.value)) < 3000
    assert "\x1b" not in str(told.value)
