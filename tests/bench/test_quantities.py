"""Quantities as people write them.

Sources: IEC 60062 (resistor and capacitor codes, from memory), SI prefixes (BIPM SI brochure, table 7, from memory),
GUM (JCGM 100:2008) 7.2.6 on digits of an uncertainty (from memory).
"""

import math
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bandproof.bench.quantities import (
    QuantityError,
    decimals,
    engineering,
    read_quantity,
    read_tolerance,
    shown,
    with_uncertainty,
)

# Where engineering prefixes stay inside what each kind reads: decades and unit.
RANGES = {
    "frequency": (-3, 12, "Hz"),
    "resistance": (-3, 12, "Ω"),
    "capacitance": (-13, 2, "F"),
    "voltage": (-12, 5, "V"),
    "time": (-12, 2, "s"),
}
magnitudes = st.tuples(st.floats(1.0, 9.99), st.floats(0.0, 1.0))


@pytest.mark.parametrize("kind", RANGES)
@pytest.mark.parametrize("digits", [4, 9, 17])
@settings(max_examples=60, derandomize=True, deadline=None)
@given(draw=magnitudes)
def test_a_quantity_printed_is_read_back_to_its_printed_digits(kind, digits, draw):
    low, high, unit = RANGES[kind]
    value = draw[0] * 10.0 ** (low + draw[1] * (high - low))
    read = read_quantity(engineering(value, unit, digits), kind)
    # Half a unit of the last printed digit at worst (a mantissa of 1.000), and three roundings of a double.
    assert math.isclose(read, value, rel_tol=0.5 * 10.0 ** (1 - digits) + 3 * 2**-53)


@settings(max_examples=100, derandomize=True, deadline=None)
@given(st.floats(min_value=1e-29, max_value=1e29) | st.floats(min_value=-1e29, max_value=-1e-29) | st.just(0.0))
def test_a_plain_number_is_read_as_itself(value):
    assert read_quantity(value, "number") == value
    assert read_quantity(repr(value), "number") == value


PREFIXES = {
    "2 mHz": ("frequency", 2e-3),
    "2 Hz": ("frequency", 2.0),
    "2 kHz": ("frequency", 2e3),
    "2 MHz": ("frequency", 2e6),
    "2 GHz": ("frequency", 2e9),
    "2 mΩ": ("resistance", 2e-3),
    "2 Ω": ("resistance", 2.0),
    "2 kΩ": ("resistance", 2e3),
    "2 MΩ": ("resistance", 2e6),
    "2 GΩ": ("resistance", 2e9),
    "2 ohm": ("resistance", 2.0),
    "2 kohm": ("resistance", 2e3),
    "2 k\u2126": ("resistance", 2e3),  # the ohm sign, beside the Greek letter
    "2 pF": ("capacitance", 2e-12),
    "2 nF": ("capacitance", 2e-9),
    "2 uF": ("capacitance", 2e-6),
    "2 \u00b5F": ("capacitance", 2e-6),  # the micro sign
    "2 \u03bcF": ("capacitance", 2e-6),  # the Greek letter
    "2 mF": ("capacitance", 2e-3),
    "2 F": ("capacitance", 2.0),
    "2 uV": ("voltage", 2e-6),
    "2 mV": ("voltage", 2e-3),
    "2 V": ("voltage", 2.0),
    "2 kV": ("voltage", 2e3),
    "2 ns": ("time", 2e-9),
    "2 ms": ("time", 2e-3),
    "2 V/us": ("slew", 2e6),
    "2 V/µs": ("slew", 2e6),
    "2 V/ms": ("slew", 2e3),
    "2 V/s": ("slew", 2.0),
    "2 %": ("relative", 0.02),
    "20 ppm": ("relative", 20e-6),
    "20 dB": ("gain", 10.0),  # 20 lg of a voltage ratio
    "-20 dB": ("gain", 0.1),
    "3 V/V": ("gain", 3.0),
    "4.7kΩ": ("resistance", 4.7e3),
    "4.7\u00a0kΩ": ("resistance", 4.7e3),  # a space that does not break, as documents have it
    " 4.7  kΩ ": ("resistance", 4.7e3),
    "4.7 nF": ("capacitance", 4.7e-9),
    "1e3 Hz": ("frequency", 1e3),
    "+5 V": ("voltage", 5.0),
}


@pytest.mark.parametrize("text", PREFIXES)
def test_every_prefix_and_spelling_is_its_power_of_ten(text):
    kind, value = PREFIXES[text]
    assert math.isclose(read_quantity(text, kind), value, rel_tol=1e-15)


# IEC 60062, its examples and their kin, from memory.
CODES = {
    "R10": ("resistance", 0.1),
    "R47": ("resistance", 0.47),
    "1R0": ("resistance", 1.0),
    "4R7": ("resistance", 4.7),
    "59R04": ("resistance", 59.04),
    "590R": ("resistance", 590.0),
    "4k7": ("resistance", 4700.0),
    "4K7": ("resistance", 4700.0),
    "5k90": ("resistance", 5900.0),
    "100k": ("resistance", 100e3),
    "1M0": ("resistance", 1e6),
    "10M": ("resistance", 10e6),
    "1G0": ("resistance", 1e9),
    "p10": ("capacitance", 0.1e-12),
    "4p7": ("capacitance", 4.7e-12),
    "100p": ("capacitance", 100e-12),
    "3n32": ("capacitance", 3.32e-9),
    "33n": ("capacitance", 33e-9),
    "1.76n": ("capacitance", 1.76e-9),  # as people write it, beside the code
    "n15": ("capacitance", 0.15e-9),
    "4u7": ("capacitance", 4.7e-6),
    "4µ7": ("capacitance", 4.7e-6),
}


@pytest.mark.parametrize("text", CODES)
def test_a_code_of_iec_60062_is_its_value(text):
    kind, value = CODES[text]
    assert math.isclose(read_quantity(text, kind), value, rel_tol=1e-15)


REFUSED = {
    "decimal comma": ("4,7 kΩ", "resistance", "decimal comma"),
    "decimal comma in a capacitor": ("3,3 nF", "capacitance", "decimal comma"),
    "no unit": ("4700", "resistance", "no unit in '4700'"),
    "a bare number": (4700, "resistance", "no unit in '4700'"),
    "unknown unit": ("4.7 kOhms", "resistance", "unknown unit 'kOhms'"),
    "another kind's unit": ("4.7 kHz", "resistance", "unknown unit 'kHz'"),
    "wrong case of hertz": ("2 khz", "frequency", "unknown unit 'khz'"),
    "mega for milli": ("2 MF", "capacitance", "unknown unit 'MF'"),
    "decibel where a frequency is": ("2 dB", "frequency", "unknown unit 'dB'"),
    "unit where none is": ("1.5 Q", "number", "unknown unit 'Q'"),
    "code of a resistor for a capacitor": ("4k7", "capacitance", "unknown unit 'k7'"),
    "code without a digit": ("k", "resistance", "found 'k'"),
    "code and unit": ("4k7 Ω", "resistance", "found '4k7 Ω'"),
    "two numbers": ("4 7 kΩ", "resistance", "found"),
    "thousands separator": ("1'000 Hz", "frequency", "found"),
    "underscore": ("1_000 Hz", "frequency", "found"),
    "hexadecimal": ("0x10 Hz", "frequency", "found"),
    "digits of another script": ("٤ kHz", "frequency", "found"),
    "NaN text": ("nan Hz", "frequency", "found 'nan Hz'"),
    "infinite text": ("inf Hz", "frequency", "found 'inf Hz'"),
    "NaN": (math.nan, "number", "found 'nan'"),
    "infinity": (math.inf, "number", "found 'inf'"),
    "huge exponent": ("1e999 Hz", "frequency", "out of range"),
    "huge with its prefix": ("1e300 GHz", "frequency", "out of range"),
    "huge code": ("9" * 400 + "k", "resistance", "out of range"),
    "huge decibels": ("1e6 dB", "gain", "out of range"),
    "huge whole number": (10**400, "number", "out of range"),
    "whole number beyond Python's printing": (16**6000, "number", "found"),
    "true": (True, "number", "found True"),
    "false": (False, "number", "found False"),
    "nothing": ("", "frequency", "found ''"),
    "a list": ([1.0], "number", r"found \[1.0\]"),
    "a table": ({}, "number", "found {}"),
}


@pytest.mark.parametrize(("found", "kind", "words"), REFUSED.values(), ids=REFUSED)
def test_what_is_no_such_quantity_is_refused_with_an_example(found, kind, words):
    with pytest.raises(QuantityError, match=words) as caught:
        read_quantity(found, kind)
    assert re.search(rf"expected a {kind} such as \S", str(caught.value))
    assert len(str(caught.value)) < 250


def test_a_tolerance_is_symmetric_as_the_trade_means_it():
    """Percent about the value, decibels about its level (common practice)."""
    assert read_tolerance("6 %") == pytest.approx((0.94, 1.06), rel=1e-15)
    assert read_tolerance("1 dB") == pytest.approx((10 ** (-1 / 20), 10 ** (1 / 20)), rel=1e-15)


@pytest.mark.parametrize("text", ["0 %", "100 %", "-6 %", "0 dB", "-1 dB", "61 dB", "6", "6 Hz", True, 0.06])
def test_a_tolerance_of_no_usable_width_is_refused(text):
    with pytest.raises(QuantityError, match="tolerance"):
        read_tolerance(text)


# value, U, unit, text: GUM 7.2.6, two significant digits in U, the value to the same place.
PRINTED = {
    "plain": (1.50423, 0.0123, "", "1.504 ± 0.012"),
    "prefixed": (2501.234, 0.567, "Hz", "2.50123 ± 0.00057 kHz"),
    "0.0996 rounds up to two digits": (1.5, 0.0996, "", "1.50 ± 0.10"),
    "0.00995 rounds up to two digits": (1.5, 0.00995, "", "1.500 ± 0.010"),
    "9.96 rounds up to two digits": (160.0, 9.96, "Hz", "160 ± 10 Hz"),
    "0.0994 stays": (1.5, 0.0994, "", "1.500 ± 0.099"),
    "U of three figures": (950.3, 123.0, "Hz", "950 ± 120 Hz"),
    "U above the value": (3.0, 47.0, "V", "3 ± 47 V"),
    "small": (3.3e-8, 1.234e-10, "F", "33.00 ± 0.12 nF"),
    "U of nothing": (160.0, 0.0, "Hz", "160 Hz ± unknown"),
    "U not known": (160.0, math.nan, "Hz", "160 Hz ± unknown"),
    "not found": (math.nan, 1.0, "Hz", "not found"),
}


@pytest.mark.parametrize(("value", "expanded", "unit", "text"), PRINTED.values(), ids=PRINTED)
def test_an_uncertainty_has_two_digits_and_the_value_ends_at_its_place(value, expanded, unit, text):
    assert with_uncertainty(value, expanded, unit) == text


@settings(max_examples=200, derandomize=True, deadline=None)
@given(st.floats(1e-9, 1e9))
def test_an_uncertainty_is_printed_within_one_part_in_twenty(expanded):
    """Two significant digits: half a unit of the second, of 10 at worst."""
    places = decimals(expanded)
    assert math.isclose(round(expanded, places), expanded, rel_tol=0.05 * (1 + 1e-9))
    digits = f"{round(expanded, places) * 10.0**places:.0f}"
    assert len(digits) == 2


def test_what_is_shown_of_a_find_is_short():
    assert shown("x" * 1000) == "'" + "x" * 59 + "..."
    assert shown(16**6000) == "a number of thousands of digits"
