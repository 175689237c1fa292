"""A serial line is set as it is told before its first byte, each time it is opened; by the lifeline too."""

from __future__ import annotations

import termios

import pytest

from bandproof.drivers.clock import RealClock
from bandproof.drivers.errors import LinkBroken
from bandproof.drivers.lifeline import Lifeline
from bandproof.drivers.link import Link
from bandproof.drivers.serial_line import Serial
from bandproof.drivers.session import Session, as_text
from tests.benchmarks._serial_bridge import serial_address

IFLAG, CFLAG, OSPEED = 0, 2, 5
UNABLE = termios.PARENB | termios.CSIZE  # what a pseudo-terminal of Linux does not do (see _serial_bridge)
KEPT = termios.PARODD | termios.CSTOPB | termios.CRTSCTS

# settings, and what POSIX's <termios.h> calls them: speed, control flags, flow control of the input
LINES = {
    "as it comes": (Serial(), termios.B9600, termios.CS8, 0),
    "baud": (Serial(baud=19200), termios.B19200, termios.CS8, 0),
    "data bits": (Serial(data_bits=7), termios.B9600, termios.CS7, 0),
    "even": (Serial(parity="even"), termios.B9600, termios.CS8 | termios.PARENB, 0),
    "odd": (Serial(parity="odd"), termios.B9600, termios.CS8 | termios.PARENB | termios.PARODD, 0),
    "stop bits": (Serial(stop_bits=2), termios.B9600, termios.CS8 | termios.CSTOPB, 0),
    "xon/xoff": (Serial(flow="xon/xoff"), termios.B9600, termios.CS8, termios.IXON | termios.IXOFF),
    "rts/cts": (Serial(flow="rts/cts"), termios.B9600, termios.CS8 | termios.CRTSCTS, 0),
    "all": (
        Serial(115200, 7, "odd", 2, "rts/cts"),
        termios.B115200,
        termios.CS7 | termios.PARENB | termios.PARODD | termios.CSTOPB | termios.CRTSCTS,
        0,
    ),
}


def answer(connection, stop):
    while connection.recv(1000):
        connection.sendall(b"Nobody,Nothing,0,0\n")


@pytest.mark.parametrize(("serial", "speed", "control", "flow"), LINES.values(), ids=LINES)
def test_a_line_is_set_as_told_when_its_first_bytes_come(loopback, monkeypatch, serial, speed, control, flow):
    asked, true = [], termios.tcsetattr

    def tcsetattr(handle, when, attributes):
        asked.append(list(attributes))
        attributes[CFLAG] = attributes[CFLAG] & ~UNABLE | termios.CS8  # a pseudo-terminal refuses the rest
        true(handle, when, attributes)

    monkeypatch.setattr(termios, "tcsetattr", tcsetattr)
    seen = set()
    with serial_address(int(loopback(answer).split("::")[2]), seen=seen) as address:
        link = Link(address, RealClock(), serial=serial)
        for _ in range(2):  # reopened, it is set once more
            assert Session(link).ask("*IDN?", as_text) == "Nobody,Nothing,0,0"
            link.reopen()
        link.close()
    (line,) = seen
    assert line[OSPEED] == speed
    assert line[CFLAG] & KEPT == control & KEPT
    assert line[IFLAG] & (termios.IXON | termios.IXOFF) == flow
    assert asked[-1][CFLAG] & (KEPT | UNABLE) == control


def test_a_speed_the_port_does_not_have_is_told_as_a_link_that_cannot_be_opened(loopback, monkeypatch):
    def refuse(*_):
        raise termios.error(22, "Invalid argument")

    with serial_address(int(loopback(answer).split("::")[2])) as address:
        link = Link(address, RealClock(), serial=Serial(baud=57600))
        monkeypatch.setattr(termios, "tcsetattr", refuse)
        with pytest.raises(LinkBroken, match="Invalid argument"):
            link.open()


def test_the_lifeline_sets_the_generators_line_too(loopback):
    """Its messages are not understood here, which is no matter: what counts is the line they came over."""
    from bandproof.drivers.dialect import source

    seen = set()
    with serial_address(int(loopback(answer).split("::")[2]), seen=seen) as address:
        held = Lifeline.start(
            address,
            dialect_text=source("scpi99-generator"),
            visa_library="@py",
            clock_path=None,
            popen_options={},
            serial=Serial(baud=19200, stop_bits=2),
            limit=0.2,
        )
        held.await_ready()
        held.close()
    assert {line[OSPEED] for line in seen} == {termios.B19200}
    assert {line[CFLAG] & KEPT for line in seen} == {termios.CSTOPB}
