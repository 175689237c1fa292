"""Netlists: the subset that is understood, and mistakes by line."""

import subprocess
import sys

import pytest

from bandproof.analysis.network import Capacitor, OpAmp, Resistor
from bandproof.simulated_instruments.netlist import NetlistMistakes, parse_netlist, parse_number

GOOD = """one band
* a comment
V1 IN 0 DC 0 AC 1 rs=50
R1 in a 10kohm ; first
C1 a out
+ 33nF
X1 gnd m OUT opamp gbw=4meg offset=1m swing=12 slew=2meg
R3 m out 100K
C2 a m 33n
R2 a 0 1k
.end
R9 this is not read
"""


def test_netlist_becomes_the_network_it_describes():
    network = parse_netlist(GOOD)
    assert network.input == "in"
    assert network.source_resistance == 50
    assert network.resistors[0] == Resistor("r1", "in", "a", 10e3)
    assert network.capacitors[0] == Capacitor("c1", "a", "out", 33e-9)
    assert network.opamps == (OpAmp("x1", "0", "m", "out", gbw=4e6, offset=1e-3, swing=12.0, slew=2e6),)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1meg", 1e6),
        ("1M", 1e-3),
        ("2.2u", 2.2e-6),
        ("1e3k", 1e6),
        (".5", 0.5),
        ("-3p", -3e-12),
        ("1f", 1e-15),
        ("7t", 7e12),
    ],
)
def test_number_has_the_suffix_spice_gives_it(text, value):
    """Suffixes of SPICE, common practice."""
    assert parse_number(text) == value


@pytest.mark.parametrize("text", ["", "k", "1.2.3", "3x", "1,5k", "nan", "inf", "1 k", "4k7"])
def test_what_is_no_number_is_refused(text):
    with pytest.raises(ValueError, match="not a number"):
        parse_number(text)


BAD = """R1 in a 10k
R2 a
C1 a b -3n
Q1 x y z
R3 a a 3
X1 a b c OPAMP gbw=3 foo=4
R2 a 0 3k
X2 a b c OPAMP
V1 in b
V2 in 0 rs=-1
V3 in 0
V4 in 0
.tran 1
R5 a b 3x
"""
EXPECTED = {
    1: "title",
    2: "two nodes and a value",
    3: "must be positive",
    4: "begin with R, C, V or X",
    5: "both ends",
    6: "foo=4",
    7: "already there in line 2",
    8: "gbw=",
    9: "then ground",
    10: "rs must not be negative",
    12: "already a source",
    13: ".tran",
    14: "'3x'",
}


def test_all_mistakes_come_at_once_with_their_lines():
    with pytest.raises(NetlistMistakes) as caught:
        parse_netlist(BAD)
    found = {mistake.line: mistake.text for mistake in caught.value.mistakes}
    assert list(found) == sorted(EXPECTED)
    for line, words in EXPECTED.items():
        assert words in found[line]


def test_netlist_without_source_and_netlist_with_a_floating_node_are_refused():
    with pytest.raises(NetlistMistakes, match="no V line"):
        parse_netlist("title\nR1 in 0 1k\n")
    with pytest.raises(NetlistMistakes):
        parse_netlist("title\nV1 in 0\nR1 in 0 1k\nR2 a b 1k\n")


def run(tmp_path, text, *options):
    path = tmp_path / "board.cir"
    path.write_text(text)
    command = [sys.executable, "-m", "bandproof.simulated_instruments", str(path), *options]
    return subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)


@pytest.mark.parametrize(
    ("text", "options", "words"),
    [
        pytest.param("title\nR1 in 0\n", (), "board.cir: line 2: r1", id="mistake"),
        pytest.param(GOOD, ("--scope2", "nowhere"), "no node 'nowhere'", id="unknown node"),
        pytest.param(GOOD, ("--route", "one=out"), "--route 'one=out'", id="route"),
    ],
)
def test_command_refuses_bad_input_with_exit_code_2_and_no_traceback(tmp_path, text, options, words):
    ended = run(tmp_path, text, *options)
    assert ended.returncode == 2
    assert words in ended.stderr
    assert "Traceback" not in ended.stderr
