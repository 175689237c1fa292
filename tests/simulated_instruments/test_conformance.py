"""IEEE 488.2 and SCPI-99 by 101 cases run on an independent parser, and by the published list of errors.

Sources: tests/outside/scpi_cases.csv (each row was run on a device built on the C parser j123b567/scpi-parser @
8866159; the column `oracle` says where that parser departs from the standard: those rows rest on memory of the standard
only) and tests/outside/scpi_errors.csv (numbers and texts of that parser's error.h).
"""

import csv
import re
from pathlib import Path

import pytest

from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.error_texts import TEXTS, event_bit
from bandproof.simulated_instruments.parameters import Blob, Boolean, Choice, Decimal, Integer, Quoted

OUTSIDE = Path(__file__).parents[1] / "outside"


def rows(name):
    with (OUTSIDE / name).open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def identified(row):
    """Return the row as a test parameter; its id says how far the oracle carries."""
    oracle = row["oracle"]
    note = "" if oracle == "agree" else "-range-check-not-by-parser" if oracle.startswith("agree") else "-memory-only"
    return pytest.param(row, id=row["id"] + note)


CASES = rows("scpi_cases.csv")
OVER_TCP = ("H02", "H15", "H19", "H25", "P13", "P20", "S01", "B04", "B05", "B06", "E03", "E11", "E23", "E24")


def conformance_device():
    """The device tree the cases assume."""
    level = "[SOURce<1:2>]:VOLTage[:LEVel][:IMMediate]"
    return Device(
        "NOBODY,CONFORMANCE,0,0",
        timing=Timing(),
        settings=[
            Setting("[SOURce<1:2>]:FREQuency[:CW]", "frequency", Decimal(1e-3, 1e7, 1000.0, "HZ")),
            Setting(level + "[:AMPLitude]", "amplitude", Decimal(0.01, 10.0, 1.0, "V")),
            Setting(level + ":OFFSet", "offset", Decimal(-5.0, 5.0, 0.0, "V")),
            Setting("[SOURce<1:2>]:FUNCtion[:SHAPe]", "shape", Choice(("SINusoid", "SQUare", "RAMP"), "SIN")),
            Setting("OUTPut<1:2>[:STATe]", "output", Boolean()),
            Setting("DISPlay:TEXT", "text", Quoted()),
            Setting("DATA:BLOCk", "block", Blob()),
            Setting("MASK", "mask", Integer(0, 2**31 - 1)),
        ],
    )


def send(device, message):
    return device.message(message, 0.0).reply


def begin(device):
    send(device, b"*RST;*CLS;*ESE 0;*SRE 0;*ESR?")


def unescaped(text):
    return text.replace("\\n", "\n").replace("\\t", "\t").encode("latin-1")


def assert_reply(reply, expect):
    """Compare one reply with the notation of the case file."""
    if expect == "-":
        assert reply is None
        return
    assert reply is not None
    assert reply.endswith(b"\n")
    text = reply[:-1].decode("latin-1")
    if expect[0] == "=":
        assert text == unescaped(expect[1:]).decode("latin-1")
    elif expect[0] == "~":
        assert [float(part) for part in text.split(";")] == [float(part) for part in expect[1:].split(";")]
    else:
        assert re.search(expect[1:], text)


def is_expected_error(number, expect):
    choices = expect.strip("{}").split(",")
    return any(-199 <= number <= -100 if choice == "-1xx" else number == int(choice) for choice in choices)


@pytest.mark.parametrize("row", [identified(row) for row in CASES if row["id"] != "E04"])
def test_conformance_case_is_answered_as_the_standard_says(row):
    device = conformance_device()
    begin(device)
    messages = [unescaped(part) for part in row["send"].split(" | ")]
    for message, expect in zip(messages, row["expect"].split(" | "), strict=True):
        assert_reply(send(device, message), expect)
    number = int(send(device, b"SYST:ERR?").split(b",")[0])
    assert is_expected_error(number, row["error_after"])


@pytest.mark.parametrize("row", [identified(row) for row in CASES if row["id"] in OVER_TCP])
def test_conformance_case_holds_over_tcp(row, served, connect):
    with served(conformance_device()) as port:
        client = connect(port)
        client.ask("*RST;*CLS;*ESE 0;*SRE 0;*ESR?")
        for part, expect in zip(row["send"].split(" | "), row["expect"].split(" | "), strict=True):
            client.send(unescaped(part) + b"\n")
            if expect != "-":
                assert_reply(client.reply_with(unescaped(expect).count(b"\n")), expect)
        assert is_expected_error(int(client.ask("SYST:ERR?").split(",")[0]), row["error_after"])


def test_full_queue_keeps_the_oldest_and_ends_in_overflow_case_E04():
    device = conformance_device()
    begin(device)
    for _ in range(12):
        send(device, b"FOO")
    depth = int(send(device, b"SYST:ERR:COUN?"))
    assert 2 <= depth < 12
    numbers = [int(send(device, b"SYST:ERR?").split(b",")[0]) for _ in range(depth)]
    assert numbers == [-113] * (depth - 1) + [-350]
    assert send(device, b"SYST:ERR?") == b'0,"No error"\n'


def test_all_cases_of_the_file_are_there_and_seven_rest_on_memory_only():
    assert len(CASES) == 101
    assert sum(not row["oracle"].startswith("agree") for row in CASES) == 7


@pytest.mark.parametrize("row", rows("scpi_errors.csv"), ids=lambda row: row["number"])
def test_error_number_has_the_text_and_event_bit_of_the_list(row):
    number = int(row["number"])
    assert TEXTS[number] == row["text"]
    bit = re.search(r"\((\d+)\)", row["esr_bit"])
    assert event_bit(number) == (int(bit[1]) if bit else 0)


def test_list_of_errors_has_nothing_beyond_the_published_one():
    assert set(TEXTS) == {int(row["number"]) for row in rows("scpi_errors.csv")}
