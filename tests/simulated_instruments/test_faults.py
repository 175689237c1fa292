"""Faults: each does what its name says, once, and leaves an instrument that works after reconnecting."""

from itertools import pairwise

import pytest

from bandproof.simulated_instruments.faults import NAMES, Fault

SHORT = 0.4  # s: nothing more is expected, so that a test has to listen for a while


@pytest.fixture
def faulty(bench, connect, clock):
    """Start a bench with faults at step 3; gives a way to connect to an instrument during that step."""

    def make(*faults, instrument="scope"):
        port = bench(faults=faults).ports[instrument]
        early = connect(port)
        assert early.ask("*OPC?") == "1", "nothing happens before the step"
        early.close()
        clock.mark(3, 0)
        return lambda: connect(port)

    return make


def nothing_more(client):
    client.socket.settimeout(SHORT)
    with pytest.raises(TimeoutError):
        client.socket.recv(1)
    client.socket.settimeout(5.0)


def ready(client, points=1000):
    client.send(f"SENS:SWE:POIN {points};TIME 0.01;:INIT")


def test_silent_instrument_answers_nothing_until_it_is_reopened(faulty):
    open_again = faulty(Fault("silent-instrument", 3))
    client = open_again()
    client.send("*OPC?")
    client.send("*IDN?")
    nothing_more(client)
    assert open_again().ask("*OPC?") == "1"


def test_late_answer_is_taken_for_the_next_one(faulty):
    """The stale-reply trap: without reopening, every answer belongs to the question before."""
    client = faulty(Fault("late-answer", 3, "generator"), instrument="generator")()
    client.send("FREQ 111;FREQ?")
    nothing_more(client)
    assert client.ask("FREQ 222;FREQ?") == "111"
    assert client.ask("FREQ 333;FREQ?") == "222"


def test_late_answer_comes_with_the_next_message_even_if_that_asks_nothing(faulty):
    client = faulty(Fault("late-answer", 3, "generator"), instrument="generator")()
    client.send("FREQ 111;FREQ?")
    nothing_more(client)
    client.send("FREQ 222")
    assert client.line() == "111"
    assert client.ask("FREQ?") == "222"


def test_late_answer_does_not_follow_to_a_new_connection(faulty):
    open_again = faulty(Fault("late-answer", 3, "generator"), instrument="generator")
    client = open_again()
    client.send("FREQ 111;FREQ?")
    nothing_more(client)
    client.close()
    assert open_again().ask("FREQ 222;FREQ?") == "222"


def test_dropped_connection_ends_in_the_middle(faulty):
    open_again = faulty(Fault("dropped-connection", 3))
    client = open_again()
    client.send("*OPC?")
    assert client.file.read() == b"", "the connection ends without an answer"
    assert open_again().ask("*OPC?") == "1"


def test_truncated_block_stops_short_and_nothing_follows(faulty):
    open_again = faulty(Fault("truncated-block", 3))
    client = open_again()
    ready(client)
    client.send("TRAC? CH1")
    received = client.file.read(2003)  # half of #44000, 4000 bytes, newline
    assert received[:6] == b"#44000"
    nothing_more(client)
    assert len(open_again().block("TRAC? CH1")) == 4000


def test_lying_block_announces_more_than_comes(faulty):
    client = faulty(Fault("lying-block-length", 3))()
    ready(client)
    client.send("TRAC? CH1")
    received = client.file.read(4007)
    assert received[:6] == b"#45000"
    nothing_more(client)


def test_endless_reply_goes_on_for_megabytes_and_others_are_answered_meanwhile(faulty):
    open_again = faulty(Fault("endless-reply", 3))
    client = open_again()
    client.send("*OPC?")
    received = client.file.read(3_000_000)
    assert set(received) == {ord("1")}
    assert open_again().ask("*OPC?") == "1"


def test_dripping_reply_comes_byte_by_byte(faulty):
    client = faulty(Fault("dripping-reply", 3))()
    client.send("*IDN?")
    assert [client.socket.recv(100) for _ in range(3)] == [b"B", b"A", b"N"]


def test_garbage_is_one_line_of_bytes_that_mean_nothing(faulty):
    client = faulty(Fault("garbage-bytes", 3))()
    client.send("*OPC?")
    garbage = client.file.readline()
    assert len(garbage) == 65
    assert max(garbage) > 127
    assert client.ask("*OPC?") == "1"


def test_error_entry_appears_once(faulty):
    client = faulty(Fault("error-entry", 3))()
    assert client.ask("SYST:ERR?").startswith("-240,")
    assert client.ask("SYST:ERR?").startswith("0,")


def test_unfinished_acquisition_never_answers_and_another_attempt_does(faulty, clock):
    open_again = faulty(Fault("unfinished-acquisition", 3))
    client = open_again()
    ready(client)
    client.send("*OPC?")
    nothing_more(client)
    client.close()
    clock.mark(3, 1)
    client = open_again()
    assert client.ask("*RST;*CLS;*OPC?") == "1"
    ready(client)
    assert client.ask("*OPC?") == "1"
    assert len(client.block("TRAC? CH1")) == 4000


def test_message_after_an_unanswered_one_is_an_interrupted_query(faulty):
    client = faulty(Fault("unfinished-acquisition", 3))()
    ready(client)
    client.send("*OPC?")
    assert client.ask("SYST:ERR?") == '-410,"Query INTERRUPTED"'


@pytest.mark.parametrize("persistent", [False, True])
def test_persistent_fault_strikes_each_attempt_and_a_plain_one_the_first(faulty, clock, persistent):
    open_again = faulty(Fault("garbage-bytes", 3, persistent=persistent))
    client, struck = open_again(), []
    for attempt in range(3):
        clock.mark(3, attempt)
        client.send("*OPC?")
        struck.append(client.file.readline() != b"1\n")
        assert client.ask("*OPC?") == "1"
    clock.mark(4, 0)
    assert client.ask("*OPC?") == "1"
    assert struck == [True, persistent, persistent]


def test_fault_of_one_instrument_leaves_the_others(bench, connect, clock):
    ports = bench(faults=(Fault("silent-instrument", 0, "generator"),)).ports
    assert connect(ports["scope"]).ask("*OPC?") == "1"
    assert connect(ports["switch"]).ask("*OPC?") == "1"


def test_recovered_measurement_equals_an_undisturbed_one(bench, connect, clock, record):
    """Physics does not notice a broken link: the record read again is the one that was taken."""
    port = bench(faults=(Fault("truncated-block", 1),)).ports["scope"]
    clock.mark(1, 0)
    client = connect(port)
    ready(client)
    client.send("TRAC? CH1")
    half = client.file.read(2003)
    again = connect(port).block("TRAC? CH1")
    assert half[6:] == again[: len(half) - 6]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"name": "unheard-of"}, "no fault 'unheard-of'"),
        ({"instrument": "lamp"}, "instrument must be one of"),
        ({"name": "truncated-block", "instrument": "switch"}, "fault of the scope"),
        ({"step": -1}, "step must not be negative"),
    ],
)
def test_impossible_fault_is_refused(changes, words):
    with pytest.raises(ValueError, match=words):
        Fault(**({"name": "late-answer", "step": 1} | changes))


def test_names_are_sorted_words_of_lower_case():
    assert all(a < b for a, b in pairwise(NAMES))
    assert all(set(name) <= set("abcdefghijklmnopqrstuvwxyz-") for name in NAMES)
