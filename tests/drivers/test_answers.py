"""Answers that wrap what they say are read by a template; the answers are those of an invented bench's manual."""

from __future__ import annotations

import pytest

from bandproof.drivers.answers import is_like, number_in

READ = {  # template, answer, the number's text
    "a word and a unit": ("TONE {value} kHz", "TONE 1.25000 kHz", "1.25000"),
    "a name and an equals sign": ("PACE={value}", "PACE=10.00", "10.00"),
    "blanks that are more": ("PACE={value}", "  PACE=  10.00 ", "10.00"),
    "blanks that are fewer": ("LEVEL {value} mV RMS", "LEVEL -250.0mV RMS", "-250.0"),
    "small letters": ("SHIFT {value} mV", "shift +0 MV", "+0"),
    "a fault and its words": ("FAULT {value} {any}", "FAULT 13 LEVEL OUT OF LIMITS", "13"),
    "a fault without words": ("FAULT {value} {any}", "FAULT 00", "00"),
    "a number after a letter": ("E{value} {any}", "E0 CONTENT", "0"),
    "a named value at the front": ("{any}POINTS {value};{any}", "POINTS 1024; STEP 4.883", "1024"),
    "a named value inside": ("{any}STEP {value};{any}", "ZERO 32768; SUBSTEP 2; STEP 4.883e-6; END 1", "4.883e-6"),
    "a named value at the end": ("{any}STEP {value}", "ZERO 32768; STEP -4.883", "-4.883"),
    "a word with a number before it": ("{any} {value} V", "CH1 5 V", "5"),
    "a negative number after whatever": ("{any}{value}", "AT-02", "-02"),
    "the channel": ("WINDOW{channel}={value}", "WINDOW1=4000.0", "4000.0"),
    "no template": ("", "5", "5"),
    "braces": ("tide{{{value}}}", "tide{5}", "5"),
}


@pytest.mark.parametrize(("template", "answer", "number"), READ.values(), ids=READ.keys())
def test_the_number_is_found_where_the_template_has_it(template, answer, number):
    assert number_in(template, answer.encode(), channel="1") == number.encode()


OTHERS = {
    "another unit": ("TONE {value} kHz", "TONE 1.25000 MHz"),
    "another word": ("TONE {value} kHz", "LEVEL 1.25000 kHz"),
    "the other channel": ("WINDOW{channel}={value}", "WINDOW2=4000.0"),
    "more behind it": ("PACE={value}", "PACE=10.00 us"),
    "a part of a number": ("PACE={value}0", "PACE=10"),
    "no number": ("SCALE={value}", "SCALE=NONE"),
    "two points": ("PACE={value}", "PACE=1.2.3"),
}


@pytest.mark.parametrize(("template", "answer"), OTHERS.values(), ids=OTHERS.keys())
def test_an_answer_that_is_not_like_the_template_names_it(template, answer):
    with pytest.raises(ValueError, match="an answer like '") as caught:
        number_in(template, answer.encode(), channel="1")
    assert template in str(caught.value)


@pytest.mark.parametrize(
    ("template", "answer", "same"),
    [
        ("UP", '"up"', True),
        ("RELAY CLOSED", "RELAY OPEN", False),
        ("AT 0{route}", "AT 02", True),
        ("AT 0{route}", "AT 01", False),
        ("COUPLE{route}={value}", "COUPLE2=DC", True),
        ("COUPLE{route}={value}", "COUPLE2=AC", False),
        ("1", "1.", False),
        ("SINE{any}", "SINE, 50 %", True),
    ],
)
def test_a_word_is_compared_with_what_stands_for_its_placeholders(template, answer, same):
    assert is_like(template, answer, route="2", value="DC") is same
