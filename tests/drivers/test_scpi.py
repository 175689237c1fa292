"""Words and numbers of IEEE 488.2 and SCPI-99."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bandproof.drivers import scpi

# Forms of <NRf>: IEEE 488.2 section 7.7.2.2; special numbers: SCPI-99 volume 1, 7.2.1.4 and 7.2.1.5 (from memory)
NUMBERS = {
    b"1": 1.0,
    b"+1": 1.0,
    b"-.5": -0.5,
    b"2.": 2.0,
    b" 1.5E+03 ": 1500.0,
    b"1.5e -3": 0.0015,
    b"9.9E37": math.inf,
    b"+9.900000E+37": math.inf,
    b"-9.9E37": -math.inf,
}
NO_NUMBERS = [b"", b"nan", b"inf", b"1_000", b"0x10", b"1,5", b"1 2", b"E3", b".", b"--1", b"1.5V", b"\xff", b"1\n2"]


@pytest.mark.parametrize(("text", "value"), NUMBERS.items())
def test_a_number_is_what_the_standard_says(text, value):
    assert scpi.parse_number(text) == value


def test_not_a_number_has_a_number():
    assert math.isnan(scpi.parse_number(b"9.91E37"))
    assert math.isnan(scpi.parse_number(b"+9.910000E+37"))


@pytest.mark.parametrize("text", NO_NUMBERS)
def test_what_is_no_number_is_refused(text):
    with pytest.raises(ValueError, match="decimal number"):
        scpi.parse_number(text)


@given(st.floats(min_value=-1e37, max_value=1e37))
def test_a_number_is_read_as_it_was_written(value):
    assert scpi.parse_number(repr(value).encode()) == value


@given(st.text(st.characters(codec="latin-1")))
def test_a_text_in_quotes_is_read_as_it_was_written(text):
    quoted = '"' + text.replace('"', '""') + '"'
    assert scpi.parse_string(quoted.encode("latin-1")) == text


@pytest.mark.parametrize("text", [b"", b'"', b'"a', b"a", b'"a"b"', b"'a\""])
def test_a_text_without_its_quotes_is_refused(text):
    with pytest.raises(ValueError, match="quotes"):
        scpi.parse_string(text)


ENTRIES = {
    b'0,"No error"': (0, "No error"),
    b'+0,"No error"': (0, "No error"),
    b'-113,"Undefined header;FOO, BAR"': (-113, "Undefined header;FOO, BAR"),
    b"-222": (-222, ""),
}


@pytest.mark.parametrize(("reply", "entry"), ENTRIES.items())
def test_an_error_entry_is_its_number_and_its_words(reply, entry):
    found = scpi.parse_error_entry(reply)
    assert (found.number, found.words) == entry


@given(st.binary(max_size=2000))
def test_a_definite_block_states_its_length(data):
    block = scpi.definite_block(data)
    digits = int(block[1:2])
    assert block[:1] == b"#"
    assert int(block[2 : 2 + digits]) == len(data)
    assert block[2 + digits :] == data


KINDS = {
    "real32": "f4", "real64": "f8", "int8": "i1", "int16": "i2", "int32": "i4",
    "uint8": "u1", "uint16": "u2", "uint32": "u4",
}  # fmt: skip


@pytest.mark.parametrize("order", ["big", "little"])
@pytest.mark.parametrize("encoding", KINDS)
def test_samples_are_read_as_they_were_written(encoding, order):
    rng = np.random.default_rng(1)
    kind = np.dtype((">" if order == "big" else "<") + KINDS[encoding])
    low, high = (-100, 100) if kind.kind == "f" else (np.iinfo(kind).min, np.iinfo(kind).max)
    samples = rng.uniform(low, high, 500).astype(kind)
    assert (scpi.parse_samples(samples.tobytes(), encoding, order) == samples.astype(float)).all()
    assert scpi.sample_size(encoding) == kind.itemsize


def test_samples_as_text_are_read_as_they_were_written():
    samples = np.random.default_rng(1).standard_normal(500)
    text = b",".join(repr(value).encode() for value in samples.tolist())
    assert (scpi.parse_samples(text, "ascii") == samples).all()


def test_a_missing_sample_is_no_number():
    data = np.array([1.0, 9.91e37], dtype=">f4").tobytes()
    assert np.isnan(scpi.parse_samples(data, "real32")).tolist() == [False, True]
    assert np.isnan(scpi.parse_samples(b"1,9.91E37", "ascii")).tolist() == [False, True]


def test_half_a_sample_is_refused():
    with pytest.raises(ValueError, match="whole number of int16 samples"):
        scpi.parse_samples(b"abc", "int16")
