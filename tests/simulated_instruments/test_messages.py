"""Messages and streams: whatever comes, an instrument goes on, and its queue says what it did not like."""

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bandproof.simulated_instruments.commands import Command, CommandTree
from bandproof.simulated_instruments.device import REPLY_LIMIT, Device, Setting, Timing
from bandproof.simulated_instruments.framing import MESSAGE_LIMIT, Framer, Overrun
from bandproof.simulated_instruments.parameters import Blob, Boolean, Decimal, Quoted, RouteList, definite_block
from bandproof.simulated_instruments.status import Register
from bandproof.simulated_instruments.syntax import ScpiError, units


def small_device(**timing):
    return Device(
        "NOBODY,SMALL,0,0",
        timing=Timing(**timing),
        settings=[
            Setting("[SOURce<1:2>]:FREQuency[:CW]", "frequency", Decimal(1e-3, 1e7, 1e3, "HZ")),
            Setting("OUTPut[:STATe]", "output", Boolean()),
            Setting("DISPlay:TEXT", "text", Quoted()),
            Setting("DATA:BLOCk", "block", Blob()),
        ],
        commands=[Command("ROUTe:CLOSe?", lambda _, routes: RouteList().show(routes), (RouteList(),), 1)],
    )


PIECES = [
    b"FREQ",
    b"SOUR2:",
    b":",
    b";",
    b",",
    b" ",
    b"?",
    b"*IDN?",
    b"*OPC?",
    b"#",
    b"#15",
    b"#0",
    b"#H",
    b'"',
    b"'",
    b"(",
]
PIECES += [
    b"(@101",
    b")",
    b"1E",
    b"1e99999",
    b".",
    b"-",
    b"MAX",
    b"DISP:TEXT",
    b"DATA:BLOC",
    b"ROUT:CLOS? ",
    b"\n",
    b"\r",
]
PIECES += [b"9" * 300, b"A" * 13, b"\x00", b"\xff", b"OUTP ", b"SYST:ERR?", b"*ESE", b"2"]
JUNK = st.one_of(st.binary(max_size=300), st.lists(st.sampled_from(PIECES), max_size=25).map(b"".join))


@given(JUNK)
def test_any_bytes_leave_an_instrument_that_still_answers(junk):
    device = small_device()
    device.message(junk, 0.0)
    assert device.message(b"*CLS;*OPC?;:SYST:ERR?", 0.0).reply == b'1;0,"No error"\n'


@given(JUNK, st.lists(st.integers(0, 400), max_size=6))
def test_any_chunking_of_a_stream_gives_the_same_messages(stream, cuts):
    whole = list(Framer().feed(stream))
    framer, pieces = Framer(), []
    for start, stop in zip([0, *sorted(cuts)], [*sorted(cuts), len(stream)], strict=True):
        pieces += framer.feed(stream[start:stop])
    assert pieces == whole


@pytest.mark.parametrize(
    "stream",
    [
        b'DISP:TEXT "a #15 b";TEXT?\n*IDN?\n*CLS\n',
        b"DATA:BLOC #0a #15\n*IDN?\n",
        b"DATA:BLOC #210ab\ncd#15\n\n\n,#13\n;\n*CLS\n",
        b"DISP:TEXT 'it''s' , #15\n\n\n\n\n;FOO\n",
        b"DISP:TEXT \"open #15\nDISP:TEXT 'a\"b',#11\n\n",
        b"DATA:BLOC #3\nDATA:BLOC #\nDATA:BLOC #3004\n\n\n\n\n",
    ],
)
def test_cut_at_any_byte_a_stream_gives_the_same_messages(stream):
    whole = list(Framer().feed(stream))
    for cut in range(len(stream)):
        framer = Framer()
        assert [*framer.feed(stream[:cut]), *framer.feed(stream[cut:])] == whole
    framer = Framer()
    assert [message for byte in stream for message in framer.feed(bytes([byte]))] == whole


@given(st.binary(max_size=3000))
def test_a_block_is_one_message_and_comes_back_whole(data):
    device, framer = small_device(), Framer()
    (message,) = framer.feed(b"DATA:BLOC " + definite_block(data) + b";BLOC?\n")
    assert isinstance(message, bytes)
    assert device.message(message, 0.0).reply == definite_block(data) + b"\n"


@pytest.mark.parametrize("end", [b"\n", b"\r\n"])
def test_a_carriage_return_is_data_in_a_block_and_part_of_the_terminator_behind_it(end):
    assert list(Framer().feed(b"DATA:BLOC #12a\r" + end)) == [b"DATA:BLOC #12a\r"]


@given(st.text(st.characters(min_codepoint=32, max_codepoint=255), max_size=50))
def test_a_string_comes_back_whole(text):
    device, quoted = small_device(), Quoted().show(text)
    assert device.message(b"DISP:TEXT " + quoted + b";TEXT?", 0.0).reply == quoted + b"\n"


@pytest.mark.parametrize(
    ("stream", "error"),
    [
        pytest.param(b"A" * (MESSAGE_LIMIT + 1) + b"\n", -363, id="no newline in time"),
        pytest.param(b"DATA:BLOC #9999999999abc\n", -223, id="block announces too much"),
        pytest.param(b'DISP:TEXT "' + b"x" * MESSAGE_LIMIT + b'"\n', -363, id="endless string"),
    ],
)
def test_message_over_the_limit_is_reported_once_and_the_next_one_heard(stream, error):
    framer = Framer()
    found = [item for start in range(0, len(stream), 65536) for item in framer.feed(stream[start : start + 65536])]
    assert found == [Overrun(error)]
    assert list(framer.feed(b"*IDN?\r\n")) == [b"*IDN?"]


def test_replies_to_one_message_are_bounded():
    device = small_device()
    device.message(b"DATA:BLOC " + definite_block(bytes(500_000)), 0.0)
    asked = 2 * REPLY_LIMIT // 500_000
    assert device.message(b":DATA:BLOC?;" * asked, 0.0).reply is None
    assert device.message(b"SYST:ERR?", 0.0).reply == b'-430,"Query DEADLOCKED"\n'


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("FREQ 1,", -102),
        ("FREQ#HFF", -111),
        ("AVERYLONGMNEMONIC 1", -112),
        ("FREQ 1" + "0" * 300, -124),
        ("FREQ 1ABCDEFGHIJKLM", -134),
        ("OUTP ABCDEFGHIJKLM", -144),
        ("ROUT:CLOS? (@101", -171),
        ("ROUT:CLOS? (101)", -171),
        ("ROUT:CLOS? (@1:9999)", -223),
        ("FREQ (@1)", -178),
        ("FREQ #13abc", -168),
        ("DISP:TEXT 5", -128),
        ("\xff", -101),
    ],
)
def test_mistake_has_the_number_of_its_kind(message, number):
    device = small_device()
    device.message(message.encode("latin-1"), 0.0)
    assert device.message(b"SYST:ERR?", 0.0).reply.startswith(b"%d," % number)


def test_channel_list_with_a_range_is_written_out():
    assert small_device().message(b"ROUT:CLOS? (@101,103:105)", 0.0).reply == b"(@101,103,104,105)\n"


def test_units_before_a_mistake_are_executed_and_answered():
    device = small_device()
    assert device.message(b"FREQ 5;FREQ?;FOO;FREQ 6", 0.0).reply == b"5\n"
    assert device.value("frequency", 1) == 5


def test_setting_takes_effect_after_its_time_and_the_reply_waits_for_it():
    device = small_device(message=1e-3, setting=5e-3)
    stamps = []
    device.changed = lambda name, suffixes: stamps.append(device.at)
    assert device.message(b"FREQ 5", 10.0).reply is None
    answer = device.message(b"*OPC?", 10.0)
    assert stamps == [pytest.approx(10.006)]
    assert answer.ready_at == pytest.approx(10.007)
    assert device.message(b"*OPC?", 20.0).ready_at == pytest.approx(20.001)


def test_pending_operation_holds_opc_query_but_not_opc():
    device = small_device(message=1e-3)
    device.message(b"*CLS", 0.0)
    device.status.begin(1.0, 2.0)
    assert device.message(b"*OPC;*ESR?", 1.0).reply == b"0\n"
    assert device.message(b"STAT:OPER:COND?", 1.0).reply == b"16\n"
    answer = device.message(b"*OPC?", 1.0)
    assert answer.reply == b"1\n"
    assert answer.ready_at == pytest.approx(2.0)
    assert device.message(b"*ESR?;:STAT:OPER?;OPER?", 1.0).reply == b"1;16;0\n"


def test_operation_that_never_completes_is_never_answered_and_reset_ends_it():
    device = small_device()
    device.status.begin(0.0, float("inf"))
    assert device.message(b"*OPC?", 1.0).reply is None
    assert device.message(b"*IDN?", 2.0).reply is not None
    assert device.message(b"*RST;*OPC?", 3.0).reply == b"1\n"


def test_register_event_rises_with_the_condition_only():
    register = Register()
    register.update(5)
    register.update(4)
    assert (register.read_event(), register.read_event(), register.condition) == (5, 0, 4)


def test_two_commands_under_one_header_are_refused():
    with pytest.raises(ValueError, match="share a header"):
        CommandTree([Command("A[:B]", lambda _: None), Command("A", lambda _: None)])


def test_header_not_as_scpi_prints_it_is_refused():
    with pytest.raises(ValueError, match=r"FOO BAR"):
        CommandTree([Command("FOO BAR", lambda _: None)])


def test_error_survives_pickling_and_says_its_number():
    again = pickle.loads(pickle.dumps(ScpiError(-222, "here")))
    assert str(again) == "-222, Data out of range; here"


def test_units_are_parsed_one_by_one():
    parsed = units(b"*RST;FREQ?;#")
    assert next(parsed).common
    assert next(parsed).query
    with pytest.raises(ScpiError):
        next(parsed)


def test_message_that_costs_no_time_is_refused():
    with pytest.raises(ValueError, match="message, transfer and upload must be positive"):
        Timing(message=0.0)
