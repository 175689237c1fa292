"""What a link does when the world misbehaves: real sockets, short limits."""

from __future__ import annotations

import select
import socket
import threading
import time
import tracemalloc

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bandproof.drivers.clock import RealClock
from bandproof.drivers.errors import LinkBroken, LinkClosed, NoAnswer, ReplyError
from bandproof.drivers.link import Link
from bandproof.drivers.log import ExchangeLog
from bandproof.drivers.scpi import definite_block
from bandproof.drivers.session import Session, as_text

LIMIT = 0.8  # s, as in conftest
SLACK = 0.5  # s: what a busy machine may add; a hang or a restarted limit is longer


def replying(reply):
    """Behaviour: answer every line received with `reply`."""

    def behave(connection: socket.socket, stop: threading.Event) -> None:
        with connection.makefile("rb") as lines:
            for _ in lines:
                connection.sendall(reply)

    return behave


def fails_in_time(act, kind, *words):
    """Run `act`, demand one error of exactly `kind` that names the words, within limit and slack; return it."""
    start = time.monotonic()
    with pytest.raises(kind) as caught:
        act()
    assert time.monotonic() - start < LIMIT + SLACK
    assert type(caught.value) is kind
    for word in words:
        assert word in str(caught.value)
    return caught.value


@pytest.fixture
def talk(loopback, linked):
    """Return a maker: behaviour in, session and address out."""

    def make(behaviour):
        address = loopback(behaviour)
        return Session(linked(address)), address

    return make


def test_a_silent_instrument_gives_no_answer_at_the_limit(talk):
    session, address = talk(lambda connection, stop: stop.wait() and None)
    start = time.monotonic()
    fails_in_time(lambda: session.ask("A?", as_text), NoAnswer, address, "'A?'", f"{LIMIT:g} s", "0 bytes")
    assert time.monotonic() - start >= LIMIT


def test_a_late_answer_is_never_taken_for_the_next_one(loopback, linked):
    late, came = threading.Event(), threading.Event()

    def behave(connection, stop):
        with connection.makefile("rb") as lines:
            for line in lines:
                if line == b"A?\n":
                    late.wait(10)
                connection.sendall(line)
                came.set()

    session = Session(linked(loopback(behave)))
    fails_in_time(lambda: session.ask("A?", as_text), NoAnswer)
    late.set()
    came.wait(10)
    with pytest.raises(LinkClosed, match=r"'B\?' was not sent.*reopen"):
        session.ask("B?", as_text)
    session.link.reopen()
    assert [session.ask(text, as_text) for text in ("B?", "C?")] == ["B?", "C?"]


def test_an_answer_nobody_asked_for_is_seen_before_the_next_command_is_sent(loopback, linked):
    go, got = threading.Event(), []

    def behave(connection, stop):
        with connection.makefile("rb") as lines:
            for line in lines:
                got.append(line)
                connection.sendall(b"1\n")
                go.wait(10)
                connection.sendall(b"stray\n")

    session = Session(linked(loopback(behave)))
    assert session.ask("A?", as_text) == "1"
    go.set()
    assert select.select([session.link._port._socket], [], [], 10)[0]  # it has come
    fails_in_time(lambda: session.ask("B?", as_text), ReplyError, "stray", "no bytes before the command was sent")
    assert got == [b"A?\n"]


def test_stray_bytes_make_the_link_dirty_and_nothing_is_sent(memory):
    link, port = memory(lambda message: b"1\n2\n")
    with pytest.raises(ReplyError, match="nothing after the reply's end"):
        Session(link).ask("A?", as_text)
    link, port = memory(lambda message: b"")
    link.open()
    port._outgoing = b"old\n"
    with pytest.raises(ReplyError, match=r"old.*no bytes before"):
        Session(link).ask("A?", as_text)
    assert port.messages == []
    assert link.is_dirty


def test_an_endless_reply_ends_with_little_memory(talk):
    def behave(connection, stop):
        connection.recv(100)
        while not stop.is_set():
            connection.sendall(b"x" * 65536)

    session, address = talk(behave)
    session.link.open()
    tracemalloc.start()
    fails_in_time(lambda: session.ask("A?", as_text), ReplyError, address, "'A?'", "at most 65536 bytes")
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 50e6  # bounded whatever is sent; measured 1 to 3 MB


def test_an_endless_block_is_no_longer_than_expected(talk):
    def behave(connection, stop):
        connection.recv(100)
        connection.sendall(b"#41000")
        while not stop.is_set():
            connection.sendall(b"x" * 65536)

    session, address = talk(behave)
    fails_in_time(lambda: session.ask_block("A?", 1000), ReplyError, address, "'A?'")


@pytest.mark.parametrize("pause", [0.3, 0.01, 0.0005], ids=["0.3 s", "10 ms", "0.5 ms"])
def test_a_dripping_reply_ends_at_the_limit(talk, pause):
    def behave(connection, stop):
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        connection.recv(100)
        while not stop.wait(pause):
            connection.sendall(b"x")

    session, address = talk(behave)
    fails_in_time(lambda: session.ask("A?", as_text), NoAnswer, address, "'A?'", f"{LIMIT:g} s", "bytes came")


def test_a_flood_of_newlines_is_one_reply_error(talk):
    session, address = talk(replying(b"\n" * 200_000))
    fails_in_time(lambda: session.command("SET 1"), ReplyError, address, "'SET 1'", "'1' as confirmation")


def test_a_truncated_block_gives_no_answer(talk):
    session, address = talk(replying(b"#41000" + b"x" * 600))
    error = fails_in_time(lambda: session.ask_block("A?", 1000), NoAnswer, address, "'A?'", "606 bytes")
    assert error.received == 606


@pytest.mark.parametrize("stated", [999, 1001, 999_999_999], ids=["short", "long", "huge"])
def test_a_lying_block_length_is_seen_before_the_block_is_read(talk, stated):
    header = b"#%d%d" % (len(str(stated)), stated)
    session, address = talk(replying(header + b"x" * 1000 + b"\n"))
    fails_in_time(lambda: session.ask_block("A?", 1000), ReplyError, address, "'A?'", "a block of 1000 bytes")


@pytest.mark.parametrize("sent", [999, 1001], ids=["fewer", "more"])
def test_a_block_that_holds_other_than_it_states_is_an_error(talk, sent):
    session, address = talk(replying(b"#41000" + b"x" * sent + b"\n"))
    error = NoAnswer if sent < 1000 else ReplyError
    fails_in_time(lambda: session.ask_block("A?", 1000), error, address, "'A?'")


def test_garbage_instead_of_a_block_is_a_reply_error(talk):
    session, address = talk(replying(b"\x00\xff garbage"))
    fails_in_time(lambda: session.ask_block("A?", 1000), ReplyError, address, r"\x00\xff", "'#' and a digit")


def test_a_refused_port_is_a_broken_link_when_opened(linked):
    with socket.create_server(("127.0.0.1", 0)) as closed:
        port = closed.getsockname()[1]
    link = linked(f"TCPIP::127.0.0.1::{port}::SOCKET")
    fails_in_time(link.open, LinkBroken, f"{port}", "'open'", "refused")
    fails_in_time(lambda: Session(link).ask("A?", as_text), LinkBroken, f"{port}")


@pytest.mark.parametrize("address", ["nonsense", "GPIB0::99::INSTR"])
def test_an_address_that_cannot_be_opened_is_a_broken_link(linked, address):
    fails_in_time(linked(address).open, LinkBroken, address)


def test_a_dropped_connection_is_a_broken_link(talk):
    session, address = talk(lambda connection, stop: connection.recv(100) and None)
    error = fails_in_time(lambda: session.ask("A?", as_text), LinkBroken, address, "'A?'", "closed the connection")
    assert error.received == 0
    assert session.link.is_dirty


def test_an_instrument_that_does_not_read_ends_the_write_at_the_limit(talk):
    session, address = talk(lambda connection, stop: stop.wait() and None)
    long = "SET " + "x" * 20_000_000  # more than all buffers of a loopback connection hold
    fails_in_time(lambda: session.command(long), NoAnswer, address, "'SET xxx", f"{LIMIT:g} s")


def test_the_error_names_the_line_of_the_exchange_log(loopback, linked, tmp_path):
    log = ExchangeLog(tmp_path / "exchange.log")
    address = loopback(replying(b"7\n"))
    session = Session(linked(address, log))
    session.ask("A?", as_text)
    error = fails_in_time(lambda: session.command("SET 1"), ReplyError, "exchange log line 4")
    log.close()
    lines = (tmp_path / "exchange.log").read_text().splitlines()
    assert lines[error.line - 1].endswith(f"{address} > 6 *OPC?\\n")
    assert [line.split(" ", 2)[2] for line in lines[:2]] == ["> 3 A?\\n", "< 2 7\\n"]


@given(cuts=st.lists(st.integers(1, 50), min_size=1, max_size=20), size=st.integers(0, 300))
@settings(max_examples=200, deadline=None)
def test_a_reply_cut_at_any_byte_is_the_same_reply(memory_port, cuts, size):
    block = bytes(range(256)) * 2
    replies = {b"B?": definite_block(block[:size]) + b"\n", b"A?": b"+1.5E3\r\n", b"*OPC?": b"1\n"}
    port = memory_port(lambda message: replies.get(message, b""), tuple(cuts))
    session = Session(Link("MEMORY", RealClock(), opener=lambda *_: port))
    for _ in range(2):
        assert session.ask("A?", as_text) == "+1.5E3"
        assert session.ask_block("B?", size) == block[:size]
        session.command("SET 1")


def test_a_failure_inside_a_transaction_even_ctrl_c_makes_the_link_dirty(memory):
    link, _ = memory(lambda message: b"")
    with pytest.raises(KeyboardInterrupt), link.transaction("A?"):
        raise KeyboardInterrupt
    with pytest.raises(LinkClosed):
        Session(link).ask("A?", as_text)


def test_a_closed_link_says_so(memory):
    link, _ = memory(lambda message: b"")
    link.open()
    link.close()
    with pytest.raises(LinkClosed, match="MEMORY: 'A\\?' was not sent, the link was closed"):
        Session(link).ask("A?", as_text)


def test_setting_and_query_do_not_wait_for_the_network(talk):
    session, _ = talk(replying_to_queries())
    session.command("SET 1")
    start = time.monotonic()
    for _ in range(20):
        session.command("SET 1")
    assert time.monotonic() - start < 20 * 0.020  # with the network's delay it is 41 ms each (measured)


def replying_to_queries():
    def behave(connection, stop):
        with connection.makefile("rb") as lines:
            for line in lines:
                if b"?" in line:
                    connection.sendall(b"1\n")

    return behave


@pytest.mark.parametrize("is_reached", [True, False], ids=["socket", "VISA alone"])
def test_replies_come_whole_whether_or_not_the_socket_can_be_reached(loopback, linked, monkeypatch, is_reached):
    if not is_reached:
        monkeypatch.setattr("bandproof.drivers.visa._socket_of", lambda resource: None)
    block = bytes(range(256)) * 400

    def behave(connection, stop):
        with connection.makefile("rb") as lines:
            for line in lines:
                connection.sendall(definite_block(block) + b"\n" if line == b"B?\n" else line)

    session = Session(linked(loopback(behave), limit=5.0))
    for _ in range(2):
        assert session.ask("A?", as_text) == "A?"
        assert session.ask_block("B?", len(block)) == block


def test_silence_ends_at_the_limit_where_the_socket_cannot_be_reached(talk, monkeypatch):
    monkeypatch.setattr("bandproof.drivers.visa._socket_of", lambda resource: None)
    session, address = talk(lambda connection, stop: stop.wait() and None)
    fails_in_time(lambda: session.ask("A?", as_text), NoAnswer, address, "'A?'", f"{LIMIT:g} s")


def test_a_visa_library_that_is_not_installed_is_a_broken_link():
    link = Link("TCPIP::127.0.0.1::5025::SOCKET", RealClock(), visa_library="@absent")
    with pytest.raises(LinkBroken, match=r"'open'.*absent"):
        link.open()
