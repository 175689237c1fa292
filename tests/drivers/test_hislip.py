"""The link over HiSLIP, against small servers whose every byte the test decides: each thing that went wrong once."""

from __future__ import annotations

import random
import re
import socket
import struct
import time
import tracemalloc

import pytest

from bandproof.drivers.errors import InstrumentProblem, LinkBroken, LinkClosed, NoAnswer, ReplyError
from bandproof.drivers.session import Session, as_text

HEADER = struct.Struct("!2sBBIQ")  # IVI-6.1; see tests/outside/hislip_golden.csv
INITIALIZE, INITIALIZED, FATAL, ERROR, DATA, END, INTERRUPTED = 0, 1, 2, 3, 6, 7, 13
SIZE, SIZE_TOLD, ASYNC, ASYNC_DONE = 15, 16, 17, 18
LIMIT = 0.8  # s, the fixture's patience
FIRST = 0xFFFFFF00


def packed(kind, control=0, parameter=0, payload=b""):
    return HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload


def receive(file):
    """Return the next message of a client, or None when it hung up."""
    head = file.read(HEADER.size)
    if len(head) < HEADER.size:
        return None
    _, kind, control, parameter, length = HEADER.unpack(head)
    return kind, control, parameter, file.read(length)


OPENING = {
    INITIALIZE: packed(INITIALIZED, 0, 0x01000001),
    ASYNC: packed(ASYNC_DONE),
    SIZE: packed(SIZE_TOLD, payload=struct.pack("!Q", 1 << 20)),
}


def hislip(reply, opening=OPENING):
    """Return an instrument that opens as `opening` says; `reply(id, payload)` makes the bytes for each message.

    A reply may be an iterable of bytes, sent one after the other until the test ends.
    """

    def behave(connection, stop):
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        with connection.makefile("rb") as file:
            while (message := receive(file)) is not None:
                kind, control, parameter, payload = message
                found = opening[kind] if kind in opening else reply(control, parameter, payload)
                for part in [found] if isinstance(found, bytes) else found:
                    if stop.is_set():
                        return
                    connection.sendall(part)

    return behave


@pytest.fixture
def talk(loopback, linked):
    """Return a session with an instrument that answers so."""

    def make(reply, **options):
        port = re.search(r"::(\d+)::", loopback(hislip(reply, **options)))[1]
        return Session(linked(f"TCPIP::127.0.0.1::hislip0,{port}::INSTR"))

    return make


def answer(text):
    return lambda control, number, payload: packed(END, 0, number, text)


def test_a_query_is_answered(talk):
    assert talk(answer(b"words\n")).ask("*IDN?", as_text) == "words"


def test_a_reply_may_end_without_a_newline(talk):
    """The message's end is an end too (IEEE 488.2 section 7.5.2: newline, END, or both)."""
    session = talk(answer(b"words"))
    assert [session.ask("*IDN?", as_text) for _ in range(2)] == ["words", "words"]


def test_a_block_without_a_newline_is_whole_and_one_cut_short_is_not_filled_up(talk):
    assert talk(answer(b"#14abcd")).ask_block("READ?", 4) == b"abcd"
    with pytest.raises(NoAnswer):
        talk(answer(b"#14abc")).ask_block("READ?", 4, terminated=False)


def test_a_reply_in_several_messages_is_one_reply(talk):
    def reply(control, number, payload):
        return packed(DATA, 0, number, b"#14a") + packed(DATA, 0, number) + packed(END, 0, number, b"bcd\n")

    assert talk(reply).ask_block("READ?", 4) == b"abcd"


def test_each_message_says_whether_the_reply_before_it_was_taken(talk):
    """RMT-delivered of IVI-6.1: set once after a reply came whole; ids go up by two."""
    heard = []

    def reply(control, number, payload):
        heard.append((control, number))
        return packed(END, 0, number, b"1\n") if payload.endswith(b"?\n") else b""

    session = talk(reply)
    session.command("SET 1")
    session.command("SET 2")
    assert heard == [(0, FIRST), (0, FIRST + 2), (1, FIRST + 4), (0, FIRST + 6)]


def test_a_long_message_goes_in_parts_no_longer_than_the_server_takes(talk):
    lengths = []

    def reply(control, number, payload):
        lengths.append(len(payload))
        return packed(END, 0, number, b"1\n") if payload.endswith(b"\n") else b""

    talk(reply, opening=OPENING | {SIZE: packed(SIZE_TOLD, payload=struct.pack("!Q", 300))}).ask("x" * 1000, as_text)
    assert sum(lengths) == 1001
    assert max(lengths) == 300 - HEADER.size


def test_no_byte_is_lost_when_a_payload_comes_in_pieces(talk):
    """PyVISA-py drops what it has when its time-out falls inside a payload."""

    def reply(control, number, payload):
        whole = packed(END, 0, number, b"#3500" + bytes(range(250)) * 2 + b"\n")
        for byte in whole:
            yield bytes([byte])

    assert talk(reply).ask_block("READ?", 500) == bytes(range(250)) * 2


def test_an_answer_to_an_earlier_message_is_thrown_away(talk):
    def reply(control, number, payload):
        stale = packed(INTERRUPTED, 0, number) + packed(END, 0, number - 2, b"stale\n")
        return stale + packed(END, 0, number, b"fresh\n")

    assert talk(reply).ask("*IDN?", as_text) == "fresh"


def pieces(data, pause):
    for byte in data:
        time.sleep(pause)  # in the instrument's thread: it is what a dripping instrument does
        yield bytes([byte])


def for_ever(part):
    while True:
        yield part


LIES = {
    "silent": (lambda c, n, p: b"", NoAnswer),
    "dripping": (lambda c, n, p: pieces(packed(END, 0, n, b"words\n"), LIMIT / 3), NoAnswer),
    "header cut short": (lambda c, n, p: packed(END, 0, n)[:9], NoAnswer),
    "payload cut short": (lambda c, n, p: packed(END, 0, n, b"words\n")[:-3], NoAnswer),
    "length of 2**63": (lambda c, n, p: HEADER.pack(b"HS", END, 0, n, 2**63) + b"words", NoAnswer),
    "endless payload": (lambda c, n, p: for_ever(packed(DATA, 0, n, b"1" * 65536)), ReplyError),
    "endless stale replies": (lambda c, n, p: for_ever(packed(DATA, 0, 4, b"1" * 65536)), NoAnswer),
    "endless empty messages": (lambda c, n, p: for_ever(packed(DATA, 0, n)), NoAnswer),
    "stale length of 2**63": (lambda c, n, p: HEADER.pack(b"HS", END, 0, 4, 2**63), NoAnswer),
    "two replies": (lambda c, n, p: packed(END, 0, n, b"a\n") + packed(END, 0, n, b"b\n"), LinkBroken),
    "garbage": (lambda c, n, p: b"garbage that is no header\n", LinkBroken),
    "garbage in a message": (lambda c, n, p: packed(END, 0, n, bytes(range(128, 160)) + b"\n"), ReplyError),
    "fatal error": (lambda c, n, p: packed(FATAL, 1, 0, b"poor header"), LinkBroken),
    "error": (lambda c, n, p: packed(ERROR, 4, 0, b"too large"), LinkBroken),
    "unknown type": (lambda c, n, p: packed(99, 0, n, b"words\n"), LinkBroken),
}


def asked_twice(session):
    for _ in range(2):
        session.ask("*IDN?", as_text)


@pytest.mark.parametrize(("reply", "kind"), LIES.values(), ids=LIES.keys())
def test_a_bad_reply_is_one_of_our_errors_in_bounded_time_and_memory_and_reopening_helps(talk, capfd, reply, kind):
    is_bad = [True]
    session = talk(lambda *message: reply(*message) if is_bad[0] else answer(b"words\n")(*message))
    session.link.open()
    tracemalloc.start()
    try:
        began = time.monotonic()
        with pytest.raises(InstrumentProblem) as caught:
            asked_twice(session)  # what comes too much is seen at the next message
        took, (_, peak) = time.monotonic() - began, tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert type(caught.value) is kind
    assert took < LIMIT + 2.0  # the 2 s are for a busy machine; without our own deadline it is minutes
    assert peak < 3e6
    with pytest.raises(LinkClosed):
        session.ask("*IDN?", as_text)
    is_bad[0] = False
    session.link.reopen()
    assert session.ask("*IDN?", as_text) == "words"
    assert capfd.readouterr() == ("", "")


def test_a_connection_that_ends_in_a_reply_is_a_broken_link(loopback, linked):
    """PyVISA-py spins for ever when it ends in a message to be dropped."""

    def behave(connection, stop):
        with connection.makefile("rb") as file:
            while (message := receive(file)) is not None:
                if message[0] not in OPENING:
                    connection.sendall(HEADER.pack(b"HS", END, 0, 4, 1000) + b"stale")
                    return
                connection.sendall(OPENING[message[0]])

    port = re.search(r"::(\d+)::", loopback(behave))[1]
    with pytest.raises(LinkBroken, match="closed the connection"):
        Session(linked(f"TCPIP::127.0.0.1::hislip0,{port}::INSTR")).ask("*IDN?", as_text)


OPENINGS = {
    "silent": ({INITIALIZE: b""}, "nothing came"),
    "silent on the second channel": ({ASYNC: b""}, "nothing came"),
    "garbage": ({INITIALIZE: b"HTTP/1.1 400 Bad Request\r\n\r\n"}, "does not speak HiSLIP"),
    "fatal error": ({INITIALIZE: packed(FATAL, 4, 0, b"too many clients")}, "too many clients"),
    "endless words": ({INITIALIZE: HEADER.pack(b"HS", FATAL, 0, 0, 2**63) + b"w" * 1000}, "complains"),
    "dripping": ({INITIALIZE: lambda: pieces(packed(INITIALIZED, 0, 0x01000001), LIMIT / 3)}, "nothing came|limit"),
    "no size": ({SIZE: packed(SIZE_TOLD)}, "takes messages of"),
    "size 0": ({SIZE: packed(SIZE_TOLD, payload=bytes(8))}, "takes messages of"),
}


class Opening(dict):
    """Openings of which some are made anew each time."""

    def __getitem__(self, key):
        value = super().__getitem__(key)
        return value() if callable(value) else value


@pytest.mark.parametrize(("change", "words"), OPENINGS.values(), ids=OPENINGS.keys())
def test_an_opening_that_goes_wrong_is_a_broken_link_that_says_why(talk, capfd, change, words):
    session = talk(answer(b"words\n"), opening=Opening(OPENING | change))
    began = time.monotonic()
    with pytest.raises(LinkBroken, match=words):
        session.ask("*IDN?", as_text)
    assert time.monotonic() - began < LIMIT + 2.0
    assert capfd.readouterr() == ("", "")


def test_a_server_that_prefers_overlap_is_used_without_a_word(talk, capfd):
    """PyVISA-py prints to standard output here."""
    session = talk(answer(b"words\n"), opening=OPENING | {INITIALIZE: packed(INITIALIZED, 1, 0x01000001)})
    assert session.ask("*IDN?", as_text) == "words"
    assert capfd.readouterr() == ("", "")


def test_an_instrument_that_does_not_read_ends_the_write_at_the_limit(loopback, linked):
    def behave(connection, stop):
        with connection.makefile("rb") as file:
            while (message := receive(file)) is not None:
                connection.sendall(OPENING[message[0]])
                if message[0] == INITIALIZE:
                    stop.wait()
                    return

    port = re.search(r"::(\d+)::", loopback(behave))[1]
    session = Session(linked(f"TCPIP::127.0.0.1::hislip0,{port}::INSTR"))
    session.link.open()
    with pytest.raises(NoAnswer):
        session.ask("x" * 30_000_000, as_text)


@pytest.mark.parametrize("seed", range(10))
def test_mutated_replies_are_right_or_one_of_our_errors(talk, seed):
    """A sample; `python -m tests.benchmarks transports` sends more."""
    draw = random.Random(seed)
    session = talk(lambda control, number, payload: damaged(packed(END, 0, number, b"#15abcde\n"), draw))
    for _ in range(5):
        found = outcome(session)
        assert len(found) == 5 or found.isprintable()


def outcome(session):
    """Return the block, or the words of one of our errors after reopening."""
    try:
        return session.ask_block("READ?", 5)
    except InstrumentProblem as problem:
        session.link.reopen()
        return str(problem)


def damaged(data, draw):
    data = bytearray(data)
    for _ in range(draw.randint(0, 3)):
        place = draw.randrange(len(data))
        match draw.randrange(3):
            case 0:
                data[place] ^= 1 << draw.randrange(8)
            case 1:
                del data[place : place + draw.randint(1, 20)]
            case _:
                data[place:place] = draw.randbytes(draw.randint(1, 40))
        data = data or bytearray(b"H")
    return bytes(data)
