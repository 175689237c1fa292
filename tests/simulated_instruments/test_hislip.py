"""HiSLIP (IVI-6.1) as a client sees it, byte by byte; the recorded messages of an independent client come first."""

import csv
import random
import socket
import struct
from contextlib import ExitStack
from itertools import pairwise

import pytest

from bandproof.analysis.network import Capacitor, Network, Resistor
from bandproof.simulated_instruments.bench import World, start
from bandproof.simulated_instruments.faults import Fault
from bandproof.simulated_instruments.hislip_locks import Locks
from bandproof.simulated_instruments.hislip_messages import PAYLOAD_LIMIT, Malformed, Message, Parser, TooLarge
from bandproof.simulated_instruments.hislip_session import Session

HEADER = struct.Struct("!2sBBIQ")  # reference: two independent readers of the protocol
PATIENCE = 5.0  # s, a reply on loopback takes well under 1 ms
FIRST = 0xFFFFFF00
INITIALIZE, INITIALIZED, FATAL, ERROR, LOCK, LOCKED, DATA, END, CLEARED, CLEAR_DONE = range(10)
REMOTE, REMOTE_DONE, TRIGGER, INTERRUPTED, ASYNC_INTERRUPTED, SIZE, SIZE_TOLD, ASYNC, ASYNC_DONE, CLEAR = range(10, 20)
SERVICE, STATUS, STATUS_TOLD, CLEARING, LOCKS, LOCKS_TOLD = range(20, 26)


def packed(kind, control=0, parameter=0, payload=b""):
    return HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload


class Channel:
    """One connection, in messages."""

    def __init__(self, port):
        self.socket = socket.create_connection(("127.0.0.1", port), PATIENCE)
        self.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self.file = self.socket.makefile("rb")

    def send(self, *message, **fields):
        self.socket.sendall(packed(*message, **fields))

    def receive(self):
        _, kind, control, parameter, length = HEADER.unpack(self.file.read(HEADER.size))
        return kind, control, parameter, self.file.read(length)

    def ask(self, *message, **fields):
        self.send(*message, **fields)
        return self.receive()

    def ended(self):
        """Whether the server has closed this connection."""
        try:
            return self.file.read(1) == b""
        except ConnectionResetError:
            return True

    def close(self):
        self.file.close()
        self.socket.close()


class Client:
    """Both connections, opened."""

    def __init__(self, port, make=Channel):
        self.sync = make(port)
        kind, _, parameter, _ = self.sync.ask(INITIALIZE, 0, 0x01007878, b"hislip0")
        assert kind == INITIALIZED
        self.session = parameter & 0xFFFF
        self.asynchronous = make(port)
        assert self.asynchronous.ask(ASYNC, 0, self.session)[0] == ASYNC_DONE
        self.number = FIRST

    def send(self, text, *, delivered=0, kind=END):
        number, self.number = self.number, (self.number + 2) & 0xFFFFFFFF
        self.sync.send(kind, delivered, number, text.encode("latin-1"))
        return number

    def ask(self, text, *, delivered=0):
        number = self.send(text + "\n", delivered=delivered)
        kind, control, parameter, payload = self.sync.receive()
        assert (kind, control, parameter) == (END, 0, number)
        return payload.decode("latin-1").rstrip("\n")

    def errors(self):
        """Return the numbers in the error queue, read as a client that says each reply came."""
        found = []
        while (entry := self.ask("SYST:ERR?", delivered=1)) != '0,"No error"':
            found.append(int(entry.split(",")[0]))
        return found


@pytest.fixture
def channel():
    """Make single connections, and close them in the end."""
    with ExitStack() as stack:

        def make(port):
            one = Channel(port)
            stack.callback(one.close)
            return one

        yield make


@pytest.fixture(scope="module")
def standing(tmp_path_factory):
    """One bench for all tests that leave it working; returns the scope's port."""
    network = Network((Resistor("R1", "in", "out", 1e3),), (Capacitor("C1", "out", "0", 1e-7),), ())
    clock = tmp_path_factory.mktemp("hislip") / "time"
    with start(World(network=network, scope={1: "in", 2: "out"}, clock=str(clock))) as handle:
        yield handle.hislip_ports["scope"]


@pytest.fixture
def port(standing, channel):
    """The scope's port, its error queue empty."""
    assert Client(standing, channel).ask("*CLS;*OPC?") == "1"
    return standing


@pytest.fixture
def client(port, channel):
    """Make clients of one scope."""
    return lambda: Client(port, channel)


def golden(outside):
    """Return the recorded messages as (direction, channel, type, control, parameter, bytes)."""
    with (outside / "hislip_golden.csv").open(newline="") as file:
        for row in csv.DictReader(file):
            direction, where = row["direction_channel"].split()
            fields = (int(row["type"]), int(row["control_code"]), int(row["parameter_hex"], 16))
            yield direction, where, *fields, bytes.fromhex(row["bytes_hex"])


def test_recorded_client_messages_are_read_as_they_were_meant(outside):
    """Source: tests/outside/hislip_golden.csv."""
    rows = [row for row in golden(outside) if row[0] == "C->S"]
    assert len(rows) == 13
    for _, _, kind, control, parameter, data in rows:
        assert list(Parser().feed(data)) == [Message(kind, control, parameter, data[16:])]
    whole, expected = b"".join(row[-1] for row in rows), [row[2] for row in rows]
    one_by_one = Parser()
    found = [message for byte in whole for message in one_by_one.feed(bytes([byte]))]
    assert [message.type for message in found] == expected, "bytes one by one are the same messages"


def test_recorded_dialogue_is_answered_with_the_recorded_types_and_fields(outside, port, channel):
    """Source: tests/outside/hislip_golden.csv; its replies are compared in type, control code and id.

    Free choices of a server are the session id, the vendor, the identity and the message-available bit; it asks for
    status after its reply came, so that bit is off here and on in the recording.
    """
    channels, session = {"sync": channel(port), "async": None}, 0
    for direction, where, kind, control, parameter, data in golden(outside):
        if direction == "C->S":
            channels[where] = channels[where] or channel(port)
            if kind == ASYNC:
                data = packed(ASYNC, 0, session)
            channels[where].socket.sendall(data)
            continue
        found = channels[where].receive()
        if kind == INITIALIZED:
            session = found[2] & 0xFFFF
            assert found[0] == INITIALIZED
            assert found[2] >> 16 == 0x0100, "version 1.0"
        elif kind in (ASYNC_DONE, STATUS_TOLD):
            assert (found[0], found[3]) == (kind, b"")
        elif kind == END:
            assert found[:3] == (END, 0, parameter)
            assert found[3].endswith(b"\n")
        elif kind == SIZE_TOLD:
            assert found == (SIZE_TOLD, 0, 0, struct.pack("!Q", PAYLOAD_LIMIT))
        else:
            assert found == (kind, control, parameter, b"")


def test_both_kinds_of_connection_lead_to_one_instrument(bench, connect, channel):
    handle = bench()
    client = Client(handle.hislip_ports["scope"], channel)
    raw = connect(handle.ports["scope"])
    client.send("SENS:SWE:POIN 1234")
    assert client.ask("*OPC?") == "1"
    assert raw.ask("SENS:SWE:POIN?") == "1234"
    assert client.ask("*IDN?", delivered=1) == raw.ask("*IDN?")


def test_a_reply_moves_virtual_time_as_over_the_raw_socket(bench, connect, channel, clock):
    handle = bench()
    client, raw = Client(handle.hislip_ports["scope"], channel), connect(handle.ports["scope"])
    stamps = [clock.now()]
    for ask in (raw.ask, client.ask):
        assert ask("SENS:SWE:POIN 100;*OPC?") == "1"
        stamps.append(clock.now())
    raw_took, hislip_took = (later - earlier for earlier, later in pairwise(stamps))
    assert hislip_took == pytest.approx(raw_took, abs=1e-9)
    assert raw_took > 1e-3


def test_a_message_in_parts_ends_with_its_data_end_and_needs_no_newline(client):
    one = client()
    one.send("SENS:SWE:", kind=DATA)
    number = one.send("POIN 77;POIN?")
    assert one.sync.receive() == (END, 0, number, b"77\n")


def test_the_end_of_a_message_ends_an_unfinished_block_too(client):
    one = client()
    one.send("DATA:BLOC #9000000999abc")
    assert one.ask("*OPC?") == "1"
    assert one.errors()


def test_a_long_reply_comes_in_messages_no_larger_than_the_client_takes(client):
    one = client()
    assert one.asynchronous.ask(SIZE, payload=struct.pack("!Q", 1000))[0] == SIZE_TOLD
    one.send("FORM REAL,32;:SENS:SWE:POIN 1000;:INIT;*OPC?")
    assert one.sync.receive()[3] == b"1\n"
    number = one.send("TRAC? CH1\n", delivered=1)
    parts = [one.sync.receive()]
    while parts[-1][0] == DATA:
        parts.append(one.sync.receive())
    assert {part[2] for part in parts} == {number}
    assert max(len(part[3]) for part in parts) + HEADER.size <= 1000
    whole = b"".join(part[3] for part in parts)
    assert whole.startswith(b"#44000")
    assert len(whole) == 6 + 4000 + 1


def test_a_reply_nobody_took_is_interrupted_by_the_next_message(client):
    """IEEE 488.2 section 6.3.2.3: error -410; HiSLIP tells it on both channels with the newer message's id."""
    one = client()
    one.send("*IDN?\n")
    second = one.send("*OPC?\n")
    assert one.sync.receive()[0] == END
    assert one.sync.receive() == (INTERRUPTED, 0, second, b"")
    assert one.asynchronous.receive() == (ASYNC_INTERRUPTED, 0, second, b"")
    assert one.sync.receive() == (END, 0, second, b"1\n")
    assert one.errors() == [-410]


def test_a_reply_the_client_says_it_took_interrupts_nothing(client):
    one = client()
    for _ in range(3):
        assert one.ask("*OPC?", delivered=1) == "1"
    one.send("SENS:SWE:POIN 10", delivered=1)
    assert one.ask("*OPC?") == "1"
    assert one.errors() == []


def test_message_available_is_told_until_the_client_took_the_reply(client):
    """Status byte bit 4, IEEE 488.2 section 11.2; the id in the query is not looked at."""
    one = client()
    assert one.asynchronous.ask(STATUS, 0, one.number)[:2] == (STATUS_TOLD, 0)
    assert one.ask("*IDN?")
    assert one.asynchronous.ask(STATUS, 0, 12345)[:2] == (STATUS_TOLD, 0x10)
    assert one.asynchronous.ask(STATUS, 1, one.number)[:2] == (STATUS_TOLD, 0)
    assert one.ask("*OPC?") == "1"
    assert one.errors() == []


def test_device_clear_forgets_what_was_said_and_begins_the_ids_anew(client):
    one = client()
    assert one.ask("*IDN?")
    one.send("NONSENSE", kind=DATA)
    assert one.asynchronous.ask(CLEAR) == (CLEARING, 0, 0, b"")
    one.send("NONSENSE\n")  # what comes while the channel is cleared is dropped
    assert one.sync.ask(CLEARED) == (CLEAR_DONE, 0, 0, b"")
    one.number = FIRST
    assert one.ask("*OPC?") == "1"
    assert one.errors() == []


def test_an_exclusive_lock_holds_others_back_until_it_is_given_back(client):
    holder, other = client(), client()
    assert holder.asynchronous.ask(LOCK, 1, 0) == (LOCKED, 1, 0, b"")
    assert other.asynchronous.ask(LOCKS) == (LOCKS_TOLD, 1, 1, b"")
    assert other.asynchronous.ask(LOCK, 1, 0) == (LOCKED, 0, 0, b"")
    number = other.send("SENS:SWE:POIN?\n")
    assert other.asynchronous.ask(STATUS)[0] == STATUS_TOLD, "its message has come by now"
    assert holder.ask("SENS:SWE:POIN 321;*OPC?") == "1"
    assert holder.asynchronous.ask(LOCK, 0, holder.number) == (LOCKED, 1, 0, b"")
    assert other.sync.receive() == (END, 0, number, b"321\n")
    assert holder.asynchronous.ask(LOCK, 0, holder.number) == (LOCKED, 3, 0, b""), "there is nothing to give back"


def test_a_lock_is_waited_for_and_free_when_its_holder_is_gone(client):
    holder, other = client(), client()
    assert holder.asynchronous.ask(LOCK, 1, 0)[1] == 1
    other.asynchronous.send(LOCK, 1, 60_000)
    assert other.asynchronous.ask(LOCKS) == (LOCKS_TOLD, 1, 1, b""), "the request waits"
    holder.sync.close()
    assert other.asynchronous.receive() == (LOCKED, 1, 0, b"")
    assert other.ask("*OPC?") == "1"


def test_a_client_that_was_ended_gets_no_lock_any_more():
    """Its second connection may still speak in the same turn; a lock granted then would be nobody's for ever."""
    locks = Locks(lambda: None)
    session = Session(1, "scope", None, None, None, locks, sync=None)
    session.end()
    session.on_async(Message(LOCK, 1))
    assert locks.holders == 0


def test_a_lock_request_ends_at_its_time_limit(client):
    holder, other = client(), client()
    assert holder.asynchronous.ask(LOCK, 1, 0)[1] == 1
    assert other.asynchronous.ask(LOCK, 1, 50) == (LOCKED, 0, 0, b"")


def test_a_shared_lock_is_shared_by_those_who_know_its_word(client):
    one, two, stranger = client(), client(), client()
    for holder in (one, two):
        assert holder.asynchronous.ask(LOCK, 1, 0, b"word") == (LOCKED, 1, 0, b"")
    assert stranger.asynchronous.ask(LOCK, 1, 0, b"other") == (LOCKED, 0, 0, b"")
    assert stranger.asynchronous.ask(LOCKS) == (LOCKS_TOLD, 0, 2, b"")
    assert two.ask("*OPC?") == "1"
    assert one.asynchronous.ask(LOCK, 0, one.number) == (LOCKED, 2, 0, b"")


@pytest.mark.parametrize("control", range(7))
def test_remote_and_local_are_answered(client, control):
    assert client().asynchronous.ask(REMOTE, control) == (REMOTE_DONE, 0, 0, b"")


def test_a_trigger_is_refused_by_an_instrument_without_that_function(client):
    """Error -211, SCPI-99: trigger ignored."""
    one = client()
    one.send("", kind=TRIGGER)
    assert one.errors() == [-211]


@pytest.mark.parametrize(
    ("message", "code"),
    [
        pytest.param((30,), 1, id="message type of a later version"),
        pytest.param((200,), 3, id="vendor's message type"),
        pytest.param((LOCK, 1), 1, id="message of the other channel"),
    ],
)
def test_a_message_that_has_no_place_is_an_error_and_the_session_goes_on(client, message, code):
    """Error codes 1 and 3, IVI-6.1."""
    one = client()
    assert one.sync.ask(*message)[:2] == (ERROR, code)
    assert one.ask("*OPC?") == "1"


@pytest.mark.parametrize("message", [(LOCK, 7), (REMOTE, 7)], ids=["lock", "remote"])
def test_an_unknown_control_code_is_an_error(client, message):
    one = client()
    assert one.asynchronous.ask(*message)[:2] == (ERROR, 2)
    assert one.asynchronous.ask(LOCKS)[0] == LOCKS_TOLD


def test_a_payload_that_is_too_large_is_passed_over(client):
    one = client()
    one.sync.socket.sendall(HEADER.pack(b"HS", END, 0, FIRST, PAYLOAD_LIMIT + 1))
    assert one.sync.receive()[:2] == (ERROR, 4)
    one.sync.socket.sendall(bytes(PAYLOAD_LIMIT + 1))
    assert one.ask("*OPC?") == "1"


def test_no_payload_is_kept_longer_than_the_limit():
    parser = Parser()
    assert list(parser.feed(HEADER.pack(b"HS", END, 0, 0, 2**64 - 1))) == [TooLarge(END, 2**64 - 1)]
    for _ in range(10):
        assert list(parser.feed(bytes(1 << 20))) == []
        assert len(parser._buffer) == 0


def test_no_header_is_told_at_its_first_wrong_byte_and_for_ever():
    parser = Parser()
    assert list(parser.feed(b"H")) == []
    for _ in range(2):
        with pytest.raises(Malformed):
            list(parser.feed(b"X"))


@pytest.mark.parametrize(
    ("sent", "code"),
    [
        pytest.param(b"*IDN?\n", 1, id="a raw socket's message"),
        pytest.param(packed(END, 0, FIRST, b"*IDN?\n"), 3, id="data first"),
        pytest.param(packed(ASYNC, 0, 0xFFFF), 3, id="an unknown session"),
        pytest.param(packed(INITIALIZE, 0, 0x01007878, b"hislip9"), 3, id="an unknown sub-address"),
    ],
)
def test_a_wrong_beginning_is_a_fatal_error_and_the_end(port, channel, sent, code):
    """Fatal error codes 1 and 3, IVI-6.1."""
    one = channel(port)
    one.socket.sendall(sent)
    assert one.receive()[:2] == (FATAL, code)
    assert one.ended()
    assert Client(port, channel).ask("*OPC?") == "1"


def test_data_before_the_second_channel_is_a_fatal_error(port, channel):
    """Fatal error code 2, IVI-6.1."""
    one = channel(port)
    assert one.ask(INITIALIZE, 0, 0x01007878, b"hislip0")[0] == INITIALIZED
    assert one.ask(END, 0, FIRST, b"*IDN?\n")[:2] == (FATAL, 2)
    assert one.ended()


def test_when_one_channel_ends_the_other_does(client):
    one = client()
    one.sync.close()
    assert one.asynchronous.ended()
    two = client()
    two.asynchronous.close()
    assert two.sync.ended()


def test_a_client_that_does_not_read_costs_bounded_memory_and_nobody_else(client):
    greedy, other = client(), client()
    greedy.sync.socket.settimeout(0.5)
    record = packed(END, 1, FIRST, b"SENS:SWE:POIN 100000;:INIT;:TRAC? CH1\n")
    with pytest.raises(TimeoutError):  # the server takes no more
        send_for_ever(greedy.sync.socket, record)
    assert other.ask("*OPC?") == "1"


def send_for_ever(connection, data):
    while True:
        connection.sendall(data)


def test_faults_strike_hislip_clients_too(bench, channel, clock):
    port = bench(faults=(Fault("garbage-bytes", 3), Fault("dropped-connection", 4))).hislip_ports["scope"]
    one = Client(port, channel)
    clock.mark(3, 0)
    assert not one.ask("*OPC?").isascii()
    clock.mark(4, 0)
    one.send("*OPC?\n", delivered=1)
    assert one.sync.ended()
    assert Client(port, channel).ask("*OPC?") == "1"


CONVERSATION = [
    packed(INITIALIZE, 0, 0x01007878, b"hislip0"),
    packed(END, 0, FIRST, b"*IDN?\n"),
    packed(DATA, 1, FIRST + 2, b"SENS:SWE:POIN 100"),
    packed(END, 0, FIRST + 4, b";*OPC?\n"),
    packed(TRIGGER, 1, FIRST + 6),
    packed(CLEARED),
    packed(END, 0, FIRST, b"DATA:BLOC #15abcde\n"),
]
ASIDE = [packed(SIZE, payload=bytes(6) + b"\x10\0"), packed(STATUS), packed(LOCK, 1, 5), packed(LOCKS), packed(CLEAR)]


@pytest.mark.parametrize("seed", range(10))
def test_mutated_streams_neither_kill_nor_hang_the_server(port, channel, seed):
    """A sample; `python -m tests.benchmarks transports` sends more."""
    draw = random.Random(seed)
    for _ in range(5):
        assault(port, draw, channel)
        assert Client(port, channel).ask("*OPC?") == "1"


def assault(port, draw, channel):
    """Open a session, or try to, and send damaged messages on both channels without reading."""
    sync, other = channel(port), channel(port)
    begin = [CONVERSATION[0]]
    if draw.random() < 0.8:
        session = sync.ask(INITIALIZE, 0, 0x01007878, b"hislip0")[2] & 0xFFFF
        assert other.ask(ASYNC, 0, session)[0] == ASYNC_DONE
        begin = []
    try:
        sync.socket.sendall(damaged(begin + CONVERSATION[1:], draw))
        other.socket.sendall(damaged(ASIDE, draw))
    except OSError:
        pass  # the server has hung up already
    sync.close()
    other.close()


def damaged(messages, draw):
    """Return messages in another order, some lost, with flipped, lost and foreign bytes."""
    chosen = draw.choices(messages, k=draw.randint(1, 12)) if draw.random() < 0.5 else messages
    data = bytearray(b"".join(chosen))
    for _ in range(draw.randint(0, 4)):
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
