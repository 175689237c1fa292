"""Records of every kind a dialect can describe come back as the volts they were made from.

The instrument of these tests writes samples with Python's own struct module (its format characters are documented
there), the driver reads them with another library. Source of the formula: the dialect's promise, volts =
(code - origin) * scale + sign * offset.
"""

from __future__ import annotations

import struct
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bandproof.drivers import dialect
from bandproof.drivers.clock import RealClock
from bandproof.drivers.errors import ReplyError
from bandproof.drivers.link import Link
from bandproof.drivers.record import read_channel
from bandproof.drivers.session import Session

HEAD = """
title = "one record"
kind = "scope"
channels = ["left", "right"]
[habits]
confirm = ""
errors = ""
[range]
set = "R{channel} {value}"
[duration]
[points]
fixed = 64
[interval]
query = "I?"
[acquisition]
start = "GO"
[overload]
by = "query"
query = "over {channel}"
[transfer]
"""
LETTERS = {"int8": "b", "uint8": "B", "int16": "h", "uint16": "H", "int32": "i", "uint32": "I"}
REALS = {"real32": "f", "real64": "d"}
NUMBERS = st.floats(-1e6, 1e6, allow_nan=False).map(lambda x: float(f"{x:.6g}"))
SCALES = st.floats(1e-9, 1e3).map(lambda x: float(f"{x:.6g}"))
PROBES = st.sampled_from([1.0, 10.0])


def block(data, form):
    """Return data as a definite or indefinite block (IEEE 488.2 section 8.7.9 and 8.7.10), its end as asked."""
    if form == "indefinite":
        return b"#0" + data + b"\n"
    length = str(len(data)).encode()
    return b"#%d%s" % (len(length), length) + data + (b"\n" if form == "terminated" else b"")


def read(memory_port, transfer, answers, points, *, probe=1.0, sizes=(1 << 20,)):
    """Return volts and messages of one channel's record; `answers` are the instrument's, by message."""
    table = "\n".join(f"{key} = {value}" for key, value in transfer.items())
    entry = dialect.parse(HEAD + table, "mine.toml")
    port = memory_port(lambda message: {"over right": b"0\n", **answers}[message.decode()], sizes)
    session = Session(Link("MEMORY", RealClock(), opener=lambda *_: port), entry.habits)
    setting = SimpleNamespace(range=1.0, offset=0.0, probe_factor=probe)
    volts, _, lsb = read_channel(session, entry, "right", points, setting)
    return volts, lsb


@st.composite
def codes(draw):
    """Return an encoding, a byte order, samples inside the encoding's span, and their bytes."""
    encoding, order = draw(st.sampled_from(sorted(LETTERS))), draw(st.sampled_from(["big", "little"]))
    letter = LETTERS[encoding]
    bits = 8 * struct.calcsize("<" + letter)
    low, high = (0, 2**bits - 1) if letter.isupper() else (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1)
    samples = draw(st.lists(st.integers(low, high), min_size=1, max_size=50))
    return encoding, order, samples, struct.pack(f"{'>' if order == 'big' else '<'}{len(samples)}{letter}", *samples)


def expected(samples, scale, offset, origin, sign, probe):
    return np.array([((code - origin) * scale + sign * offset) * probe for code in samples])


def close(found, wanted, scale, samples, origin):
    """Compare to rounding: a few parts in 1e15 of the largest term, since the sum may cancel."""
    size = max(abs(scale) * (max(map(abs, samples)) + abs(origin)), float(np.abs(wanted).max()), 1e-30)
    return np.abs(found - wanted).max() <= 1e-14 * size * 10


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_codes_scaled_by_queries_round_trip(memory_port, data):
    encoding, order, samples, raw = data.draw(codes())
    scale, offset, origin, probe = (data.draw(kind) for kind in (SCALES, NUMBERS, NUMBERS, PROBES))
    sign, form = data.draw(st.sampled_from([1, -1])), data.draw(st.sampled_from(["terminated", "bare", "indefinite"]))
    has_offset, has_origin = data.draw(st.booleans()), data.draw(st.booleans())
    transfer = {
        "read": '"give {channel}"',
        "encoding": f'"{encoding}"',
        "byte_order": f'"{order}"',
        "scaling": '"query"',
        "scale": '"step {channel}"',
        "offset_sign": sign,
        "terminated": "false" if form == "bare" else "true",
    }
    transfer |= {"offset": '"middle {channel}"'} if has_offset else {}
    transfer |= {"origin": '"zero {channel}"'} if has_origin else {}
    answers = {
        "give right": block(raw, form),
        "step right": f"{scale!r}\n".encode(),
        "middle right": f"{offset!r}\n".encode(),
        "zero right": f"{origin!r}\n".encode(),
    }
    sizes = data.draw(st.sampled_from([(1 << 20,), (1, 2, 3), (7,)]))
    volts, lsb = read(memory_port, transfer, answers, len(samples), probe=probe, sizes=sizes)
    offset, origin = offset if has_offset else 0.0, origin if has_origin else 0.0
    assert close(volts, expected(samples, scale, offset, origin, sign, probe), scale * probe, samples, origin)
    assert lsb == pytest.approx(scale * probe)


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_codes_scaled_by_a_preamble_round_trip_wherever_its_fields_stand(memory_port, data):
    encoding, order, samples, raw = data.draw(codes())
    scale, offset, origin = (data.draw(kind) for kind in (SCALES, NUMBERS, NUMBERS))
    sign, separator = data.draw(st.sampled_from([1, -1])), data.draw(st.sampled_from([",", ";", "|"]))
    names = ["scale", "offset", "origin", '"a name, with commas; and | bars"', "12", "text"]
    layout = data.draw(st.permutations(names))
    left_out = data.draw(st.sets(st.sampled_from(["offset", "origin"])))
    values = {"scale": repr(scale), "offset": repr(offset), "origin": repr(origin)}
    line = separator.join(values.get(name, name) for name in layout)
    transfer = {
        "read": '"give {channel}"',
        "encoding": f'"{encoding}"',
        "byte_order": f'"{order}"',
        "scaling": '"preamble"',
        "preamble": '"about {channel}"',
        "separator": f'"{separator}"',
        "offset_sign": sign,
    }
    transfer |= {f"{name}_field": layout.index(name) for name in values if name not in left_out}
    answers = {"give right": block(raw, "terminated"), "about right": f"{line}\n".encode()}
    volts, _ = read(memory_port, transfer, answers, len(samples))
    offset, origin = 0.0 if "offset" in left_out else offset, 0.0 if "origin" in left_out else origin
    assert close(volts, expected(samples, scale, offset, origin, sign, 1.0), scale, samples, origin)


@settings(max_examples=100, deadline=None)
@given(data=st.data())
def test_reals_in_volts_round_trip_to_the_last_bit(memory_port, data):
    encoding, order = data.draw(st.sampled_from(sorted(REALS))), data.draw(st.sampled_from(["big", "little"]))
    width = 32 if encoding == "real32" else 64
    samples = data.draw(st.lists(st.floats(-1e6, 1e6, width=width), min_size=1, max_size=50))
    raw = struct.pack(f"{'>' if order == 'big' else '<'}{len(samples)}{REALS[encoding]}", *samples)
    transfer = {"read": '"give {channel}"', "encoding": f'"{encoding}"', "byte_order": f'"{order}"'}
    volts, _ = read(memory_port, transfer, {"give right": block(raw, "terminated")}, len(samples))
    assert volts.tolist() == samples


@settings(max_examples=100, deadline=None)
@given(data=st.data())
def test_numbers_as_text_round_trip_in_a_line_and_in_a_block(memory_port, data):
    samples = data.draw(st.lists(NUMBERS, min_size=1, max_size=50))
    spec = data.draw(st.sampled_from(["{:.9e}", "{:+.9E}", "{!r}", " {:.9g}"]))
    text = ",".join(spec.format(sample) for sample in samples).encode()
    framing = data.draw(st.sampled_from(["line", "block"]))
    transfer = {"read": '"give {channel}"', "encoding": '"ascii"', "framing": f'"{framing}"'}
    reply = text + b"\n" if framing == "line" else block(text, "terminated")
    volts, _ = read(memory_port, transfer, {"give right": reply}, len(samples))
    assert volts == pytest.approx(samples, rel=1e-8)


def test_a_record_in_the_other_byte_order_is_not_taken_for_the_right_one(memory_port):
    """The round trips can fail: two bytes exchanged are another number."""
    transfer = {"read": '"give {channel}"', "encoding": '"int16"', "scaling": '"query"', "scale": '"step {channel}"'}
    answers = {"give right": block(struct.pack("<2h", 1, 2), "terminated"), "step right": b"1\n"}
    assert read(memory_port, transfer, answers, 2)[0].tolist() == [256.0, 512.0]


def test_a_preamble_too_short_for_its_places_is_not_understood(memory_port):
    transfer = {"read": '"give {channel}"', "encoding": '"int8"', "scaling": '"preamble"', "preamble": '"about"'}
    with pytest.raises(ReplyError, match="a preamble of at least 5 fields, 2 came"):
        read(memory_port, transfer | {"scale_field": 4}, {"about": b"1,2\n"}, 1)
