"""Seeded damage to bytes: what disks, editors, cables and other programs do to a file or a reply."""

from __future__ import annotations

import random

__all__ = ["KINDS", "mutated"]

_EXTREME = (b"1e999", b"-1e999", b"9.91E37", b"9.9E37", b"nan", b"-inf", b"0", b"-0", b"1e-320", b"-1",
            b"18446744073709551616", b"99999999999999999999999999", b"0x7fffffff", b"1_0", b"1,5")  # fmt: skip
_ENCODINGS = ("utf-16", "utf-32", "utf-8-sig", "latin-1", "cp1252", "cp500", "utf-7")


def _flip(data: bytearray, draw: random.Random) -> bytes:
    for _ in range(draw.choice((1, 1, 2, 8))):
        data[draw.randrange(len(data))] ^= 1 << draw.randrange(8)
    return bytes(data)


def _delete(data: bytearray, draw: random.Random) -> bytes:
    start, length = draw.randrange(len(data)), draw.choice((1, 2, 10, 100))
    del data[start : start + length]
    return bytes(data)


def _insert(data: bytearray, draw: random.Random) -> bytes:
    place = draw.randrange(len(data) + 1)
    data[place:place] = draw.randbytes(draw.choice((1, 2, 10, 100)))
    return bytes(data)


def _duplicate(data: bytearray, draw: random.Random) -> bytes:
    start, length = draw.randrange(len(data)), draw.choice((1, 5, 50, 500))
    data[start:start] = data[start : start + length]
    return bytes(data)


def _truncate(data: bytearray, draw: random.Random) -> bytes:
    return bytes(data[: draw.randrange(len(data))])


def _lines(data: bytearray, draw: random.Random) -> bytes:
    """Swap two lines, take one out or write one twice."""
    lines = bytes(data).split(b"\n")
    first, second = draw.randrange(len(lines)), draw.randrange(len(lines))
    match draw.randrange(3):
        case 0:
            lines[first], lines[second] = lines[second], lines[first]
        case 1:
            del lines[first]
        case _:
            lines.insert(second, lines[first])
    return b"\n".join(lines)


def _number(data: bytearray, draw: random.Random) -> bytes:
    """Put an extreme number where one stands; where none stands, anywhere."""
    digits = [i for i, byte in enumerate(data) if 48 <= byte < 58]
    start = end = draw.choice(digits or range(len(data)))
    while end < len(data) and 48 <= data[end] < 58:
        end += 1
    return bytes(data[:start]) + draw.choice(_EXTREME) + bytes(data[end:])


def _long(data: bytearray, draw: random.Random) -> bytes:
    place = draw.randrange(len(data) + 1)
    data[place:place] = draw.choice((b"a", b"1", b"[", b'"', b" ", b"{", b"\xc3\xa9")) * draw.choice((300, 70_000))
    return bytes(data)


def _control(data: bytearray, draw: random.Random) -> bytes:
    place = draw.randrange(len(data) + 1)
    data[place:place] = draw.choice((b"\0", b"\x07", b"\x1b[2J", b"\r", b"\x85", b"\x7f", b"\xe2\x80\xae", b"\n\n"))
    return bytes(data)


def _encode(data: bytearray, draw: random.Random) -> bytes:
    return bytes(data).decode("utf-8", "replace").encode(draw.choice(_ENCODINGS), "replace")


KINDS = {
    "flipped bits": _flip,
    "deleted bytes": _delete,
    "inserted bytes": _insert,
    "duplicated bytes": _duplicate,
    "cut short": _truncate,
    "lines swapped, lost or doubled": _lines,
    "extreme numbers": _number,
    "long strings": _long,
    "control characters": _control,
    "another encoding": _encode,
}


def mutated(data: bytes, draw: random.Random) -> bytes:
    """Return the data with one to three kinds of damage, the kinds drawn."""
    for _ in range(draw.choice((1, 1, 1, 2, 3))):
        data = draw.choice(list(KINDS.values()))(bytearray(data), draw) if data else b"\n"
    return data
