"""Board and bench files (reading, board_file, bench_file): every mistake at once, with place, find and nearest word."""

import random
import re
from dataclasses import replace

import pytest

from bandproof.bench.bench_file import check_wiring, find_bench, parse_bench, read_bench
from bandproof.bench.board_file import parse_board, parse_defect, read_board
from bandproof.bench.errors import FileMistakes
from bandproof.bench.rehearsal import DEMO_BENCH, DEMO_BOARD, demo_board, demo_text, rehearsal_bench
from bandproof.bench.verbs.console import BAD_INPUT, run
from bandproof.drivers.dialect import source
from bandproof.drivers.serial_line import Serial

BOARD, BENCH = demo_text(DEMO_BOARD), demo_text(DEMO_BENCH)


def changed(text, *changes):
    """Return a text with each (old, new) made once; an old text that is not there would prove nothing."""
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return text


FIVE_IN_A_BOARD = (
    ('revision = "C"', 'revison = "C"'),
    ('input_maximum = "2 V"', 'input_maximum = "2,0 V"'),
    ('kind      = "band"', 'kind      = "bnad"'),
    ('to        = "low_out"', 'to        = "low_ouf"'),
    ('gbw   = "4 MHz"', "gbw   = 4e6"),
)
FOUND_IN_A_BOARD = (
    r"revison: unknown key; known here: .*\(nearest: revision\)",
    r"limits\.input_maximum: a decimal comma is not read .*expected a voltage such as",
    r"stages\.low\.kind: found 'bnad'; expected band \(nearest: band\)",
    r"stages\.low\.to: no test point 'low_ouf'; points known: .*low_out.*\(nearest: low_out\)",
    r"op_amp\.gbw: no unit in '4000000\.0'; expected a frequency such as",
)
FIVE_IN_A_BENCH = (
    ('ceiling = "2 V"', 'celing = "2 V"'),
    ('mains   = "50 Hz"', 'mains   = "0 Hz"'),
    ('channel_gain_accuracy = "1.5 %"', 'channel_gain_accuracy = "1.5"'),
    ("channel_2 = 1", "channel_2 = true"),
    ('low_out    = { channel = 2, route = "101" }', 'low_out    = { chanel = 3, route = "101" }'),
)
FOUND_IN_A_BENCH = (
    r"ceiling: missing; expected a voltage",
    r"celing: unknown key; known here: .*\(nearest: ceiling\)",
    r"mains: '0 Hz' is not above zero; expected a frequency such as",
    r"scope\.channel_gain_accuracy: no unit in '1\.5'; expected a relative such as",
    r"probes\.channel_2: found True; expected a number such as",
    r"wiring\.low_out\.channel: missing; expected a whole number from 1 to 2",
    r"wiring\.low_out\.chanel: unknown key; known here: channel, route \(nearest: channel\)",
)


def test_five_mistakes_in_a_board_file_are_five_findings_and_exit_2(tmp_path, capsys):
    path = tmp_path / "wrong.board.toml"
    path.write_text(changed(BOARD, *FIVE_IN_A_BOARD))
    assert run(["rehearse", str(path), "--folder", str(tmp_path / "r")]) == BAD_INPUT
    printed = capsys.readouterr().err
    assert f"{path}: 5 mistakes to mend" in printed
    for number, pattern in enumerate(FOUND_IN_A_BOARD, 1):
        assert re.search(r"^  \d\. " + pattern, printed, re.MULTILINE), (number, printed)
    assert not (tmp_path / "r").exists()


def test_five_mistakes_in_a_bench_file_are_all_found_and_exit_2(tmp_path, capsys):
    board, bench = tmp_path / "good.board.toml", tmp_path / "wrong.bench.toml"
    board.write_text(BOARD)
    bench.write_text(changed(BENCH, *FIVE_IN_A_BENCH))
    arguments = ["sweep", str(board), "--bench", str(bench), "--serial", "1", "--folder", str(tmp_path / "r")]
    assert run(arguments) == BAD_INPUT
    printed = capsys.readouterr().err
    assert f"{bench}: {len(FOUND_IN_A_BENCH)} mistakes to mend" in printed  # a key misspelt is unknown and missing
    for pattern in FOUND_IN_A_BENCH:
        assert re.search(r"^  \d\. " + pattern, printed, re.MULTILINE), (pattern, printed)
    assert not (tmp_path / "r").exists()


TITLE = 'title    = "Talkback voice equalizer, five bands"'
ONE_IN_A_BOARD = {
    "negative part": (('R_in = "14.3 kΩ"', 'R_in = "-14.3 kΩ"'), r"stages\.low\.parts\.R_in: '-14\.3 kΩ' is not above"),
    "part misspelt": (("R_shunt = ", "R_shnt = "), r"parts\.R_shnt: unknown key.*nearest: R_shunt"),
    "part without value": (('C_1 = "33 nF"', "C_1 = {}"), r"parts\.C_1\.value: missing; expected a capacitance"),
    "part of no tolerance": (
        ('C_1 = "33 nF"', 'C_1 = { value = "33 nF", tolerance = "120 %" }'),
        r"parts\.C_1\.tolerance: is 100 % or more",
    ),
    "tolerance of nothing": (('q = "6 %"', 'q = "0 %"'), r"stages\.low\.tolerance\.q: '0 %' is not a usable width"),
    "both taps the same": (('to        = "low_out"', 'to        = "input"'), r"stages\.low: from and to are the same"),
    "stage named oddly": (("[stages.low]", '[stages."low/out"]'), r"stages\.low/out: cannot be a name"),
    "point named oddly": (("input      = {", '"in put" = {'), r"points\.in put: cannot be a name"),
    "source resistance negative": (('"0 Ω"', '"-1 Ω"'), r"points\.input\.source_resistance: '-1 Ω' is below zero"),
    "empty title": ((TITLE, 'title = " "'), "title: found ' '; expected a text"),
    "title a number": ((TITLE, "title = 5"), "title: found 5; expected a text"),
    "table a number": (("parts     = {", "parts = 1 # "), r"stages\.low\.parts: found 1; expected a table"),
    "table missing": (("[limits]\n", "[limit]\n"), r"limit: unknown key.*nearest: limits"),
    "circuit unknown": (('"multiple-feedback"', '"multiple-fedback"'), "nearest: multiple-feedback"),
    "huge whole number": (("q = 1.5", "q = 0x" + "F" * 5000), r"design\.q: found .a number of thousands"),
    "date for a number": (("q = 1.5", "q = 2026-01-01"), r"design\.q: found datetime\.date"),
}


@pytest.mark.parametrize(("change", "finding"), ONE_IN_A_BOARD.values(), ids=ONE_IN_A_BOARD)
def test_a_mistake_in_a_board_file_is_named_with_its_place(change, finding):
    with pytest.raises(FileMistakes, match=finding):
        parse_board(changed(BOARD, change), "a.board.toml")


SWITCH = BENCH[BENCH.index("[switch]") : BENCH.index("[probes]")]
ONE_IN_A_BENCH = {
    "route without a switch": (
        (SWITCH, ""),
        r'wiring\.low_out\.route: is a switch route, but there is no \[switch\]; write "by hand"',
    ),
    "third channel": (("input      = { channel = 1 }", "input = { channel = 3 }"), r"wiring\.input\.channel: found 3"),
    "channel in words": (("input      = { channel = 1 }", 'input = { channel = "1" }'), "channel: found '1'"),
    "no address": (('address = "TCPIP::127.0.0.1::5025::SOCKET"\n', ""), r"generator\.address: missing"),
    "no wiring": (("[wiring] ", "[wireing] "), r"wiring: missing(.|\n)*wireing: unknown key.*nearest: wiring"),
    "no probes": (("[probes]\n", ""), r"probes: missing"),
    "baud of a socket": (
        ("[scope]\n", "[scope]\nbaud = 19200\n"),
        r"scope\.baud: is for a serial line \(ASRL\.\.\.\), and 'TCPIP::127\.0\.0\.1::5026::SOCKET' is none",
    ),
    "probe of no factor": (("channel_1 = 1 ", "channel_1 = 0 "), r"probes\.channel_1: 0 is not above zero"),
}


@pytest.mark.parametrize(("change", "finding"), ONE_IN_A_BENCH.values(), ids=ONE_IN_A_BENCH)
def test_a_mistake_in_a_bench_file_is_named_with_its_place(change, finding):
    with pytest.raises(FileMistakes, match=finding):
        parse_bench(changed(BENCH, change), "a.bench.toml")


SERIAL_LINE = ("TCPIP::127.0.0.1::5025::SOCKET", "ASRL/dev/ttyUSB0::INSTR")


def test_every_mistake_of_a_serial_line_is_named_with_its_place():
    wrong = 'baud = "19200"\ndata_bits = 9\nparity = "mark"\nstop_bits = 1.5\nflow = "xon/off"\nbauds = 9600\n'
    with pytest.raises(FileMistakes) as caught:
        parse_bench(changed(BENCH, SERIAL_LINE, ("[generator]\n", "[generator]\n" + wrong)), "a.bench.toml")
    for number, pattern in enumerate(
        (
            r"generator\.baud: found '19200'; expected a whole number from 50 to 4000000",
            r"generator\.data_bits: found 9; expected a whole number from 7 to 8",
            r"generator\.parity: found 'mark'; expected none \| even \| odd",
            r"generator\.stop_bits: found 1\.5; expected a whole number from 1 to 2",
            r"generator\.flow: found 'xon/off'; expected none \| xon/xoff \| rts/cts \(nearest: xon/xoff\)",
            r"generator\.bauds: unknown key.*\(nearest: baud\)",
        ),
        1,
    ):
        assert re.search(rf"^  {number}\. {pattern}", str(caught.value), re.MULTILINE), pattern


def test_a_serial_line_is_set_as_the_file_says_and_as_visa_leaves_it_where_it_says_nothing():
    """The defaults are VISA's own (VPP-4.3: 9600 Bd, 8 data bits, no parity, 1 stop bit, no flow control)."""
    plain = parse_bench(changed(BENCH, SERIAL_LINE), "a.bench.toml").instruments
    assert plain["generator"].serial == Serial(9600, 8, "none", 1, "none")
    assert plain["scope"].serial is None
    every = 'baud = 115200\ndata_bits = 7\nparity = "odd"\nstop_bits = 2\nflow = "rts/cts"\n'
    bench = parse_bench(changed(BENCH, SERIAL_LINE, ("[generator]\n", "[generator]\n" + every)), "a.bench.toml")
    assert bench.instruments["generator"].serial == Serial(115200, 7, "odd", 2, "rts/cts")


NO_FILES = {
    "missing": (lambda path: None, "No such file"),
    "directory": (lambda path: path.mkdir(), "directory"),
    "binary": (lambda path: path.write_bytes(bytes(range(256))), r"is not UTF-8 text \(byte 128\)"),
    "empty": (lambda path: path.write_bytes(b""), "title: missing"),
    "only a comment": (lambda path: path.write_text("# nothing\n"), "missing"),
    "huge": (lambda path: path.write_bytes(b"#" * 4_000_001), "larger than 4 MB"),
    "not TOML": (lambda path: path.write_text("title = \n"), r"is not TOML: .*line 1"),
    "nested without end": (lambda path: path.write_text("a = " + "[" * 100_000), "is not TOML"),
}


@pytest.mark.parametrize("read", [read_board, read_bench])
@pytest.mark.parametrize(("make", "words"), NO_FILES.values(), ids=NO_FILES)
def test_a_file_that_cannot_be_used_says_why(tmp_path, read, make, words):
    path = tmp_path / "a.toml"
    make(path)
    words = words if words != "title: missing" or read is read_board else "mains: missing"
    with pytest.raises(FileMistakes, match=words) as caught:
        read(path)
    assert str(caught.value).startswith(f"{path}: ")


def test_a_byte_order_mark_and_line_ends_of_other_systems_are_no_mistakes(tmp_path):
    path = tmp_path / "a.board.toml"
    path.write_bytes(b"\xef\xbb\xbf" + BOARD.replace("\n", "\r\n").encode())
    assert replace(read_board(path), text="") == replace(demo_board(), text="")


def test_every_missing_tap_and_shared_channel_is_named_with_the_nearest_wire():
    board = demo_board()
    text = changed(
        BENCH,
        ("low_out    = { channel = 2", "low_uot    = { channel = 2"),
        ('body_out   = { channel = 2, route = "102" }', "body_out = { channel = 1 }"),
    )
    with pytest.raises(FileMistakes) as caught:
        check_wiring(board, parse_bench(text, "b"), "b.bench.toml")
    first, second = caught.value.findings
    assert re.search(r"wiring\.low_out: missing; stage 'low' is measured there \(nearest: low_uot\)", first)
    assert "wiring.body_out: is on channel 1 like 'input'" in second


@pytest.mark.parametrize("written", ["2026-05-01", '"2026-05-01"'])
def test_a_bench_says_where_it_is_and_when_an_instrument_was_calibrated(written):
    changes = ('title   = "Simulated bench"', 'title = "a"\nplace = "test room 2"')
    bench = parse_bench(changed(BENCH, changes, ("[scope]\n", f"[scope]\ncalibrated = {written}\n")), "a.bench.toml")
    assert bench.place == "test room 2"
    assert {role: found.calibrated for role, found in bench.instruments.items()} == {
        "generator": "",
        "scope": "2026-05-01",
        "switch": "",
    }


@pytest.mark.parametrize("written", ['"1.5.2026"', "2026", "2026-05-01T10:00:00Z", '"2026-02-30"'])
def test_a_calibration_that_is_no_date_is_a_mistake(written):
    with pytest.raises(FileMistakes, match=r"scope.calibrated: found .*; expected a date such as 2026-05-01"):
        parse_bench(changed(BENCH, ("[scope]\n", f"[scope]\ncalibrated = {written}\n")), "a.bench.toml")


def test_the_demo_board_is_wired_by_its_bench():
    check_wiring(demo_board(), parse_bench(BENCH, "demo"), "demo")
    assert rehearsal_bench(demo_board()).wires == parse_bench(BENCH, "demo").wires


def test_a_dialect_path_is_taken_from_the_bench_files_folder(tmp_path):
    path = tmp_path / "a.bench.toml"
    path.write_text(changed(BENCH, ('dialect = "scpi99-generator"', 'dialect = "mine.dialect.toml"')))
    (tmp_path / "mine.dialect.toml").write_text(source("scpi99-generator"))
    assert read_bench(path).instruments["generator"].dialect == str(tmp_path / "mine.dialect.toml")
    assert read_bench(path).instruments["scope"].dialect == "scpi99-digitizer"


# --- which bench ---


def named(folder, *names):
    for name in names:
        (folder / name).touch()


def test_the_option_goes_before_the_environment_and_the_folder(tmp_path, monkeypatch):
    named(tmp_path, "only.bench.toml")
    monkeypatch.setenv("BANDPROOF_BENCH", "env.bench.toml")
    path, why = find_bench("option.bench.toml", tmp_path)
    assert (str(path), why) == ("option.bench.toml", "named on the command line")


def test_the_environment_goes_before_the_folder(tmp_path, monkeypatch):
    named(tmp_path, "only.bench.toml")
    monkeypatch.setenv("BANDPROOF_BENCH", "env.bench.toml")
    path, why = find_bench(None, tmp_path)
    assert str(path) == "env.bench.toml"
    assert "BANDPROOF_BENCH" in why


def test_the_only_bench_file_of_the_folder_is_taken(tmp_path, monkeypatch):
    monkeypatch.delenv("BANDPROOF_BENCH", raising=False)
    named(tmp_path, "only.bench.toml", "a.board.toml")
    path, why = find_bench(None, tmp_path)
    assert path == tmp_path / "only.bench.toml"
    assert "only one" in why


@pytest.mark.parametrize(("names", "words"), [((), "none here"), (("a.bench.toml", "b.bench.toml"), "a.bench.toml, b")])
def test_no_bench_file_or_several_are_refused_with_what_to_do(tmp_path, monkeypatch, names, words):
    monkeypatch.delenv("BANDPROOF_BENCH", raising=False)
    named(tmp_path, *names)
    with pytest.raises(FileMistakes, match=words) as caught:
        find_bench(None, tmp_path)
    assert "--bench" in str(caught.value)


# --- defects ---


def test_a_defect_is_a_part_and_its_value():
    assert parse_defect("low.R_shunt=3k4", demo_board()) == ("low", "R_shunt", 3400.0)
    assert parse_defect(" body.C_1 = 10 nF ", demo_board()) == ("body", "C_1", 10e-9)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("low.R_shunt", "names no part"),
        ("R_shunt=3k4", "names no part"),
        ("low.R_shnt=3k4", "low.R_shunt"),
        ("low.R_shunt=3,4 kΩ", "decimal comma"),
        ("low.R_shunt=3n3", "resistance"),
        ("low.R_shunt=0 Ω", "above zero"),
        ("", "names no part"),
    ],
)
def test_a_defect_that_cannot_be_is_refused(text, words):
    with pytest.raises(ValueError, match=words):
        parse_defect(text, demo_board())


# --- anything at all ---


def mutated(text, rng):
    """Return a text with one to four changes a hand or a bad disk makes."""
    for _ in range(rng.randint(1, 4)):
        text = rng.choice(MUTATIONS)(text or "\n", rng)
    return text


def cut(text, rng):
    at = rng.randrange(len(text))
    return text[:at] + text[at + rng.randint(1, 30) :]


def inserted(text, rng):
    at = rng.randrange(len(text))
    return text[:at] + rng.choice("\"'={}[],.#\n\0µΩé0-eE \\") + text[at:]


def line_lost(text, rng):
    lines = text.split("\n")
    del lines[rng.randrange(len(lines))]
    return "\n".join(lines)


def line_copied(text, rng):
    lines = text.split("\n")
    lines.insert(rng.randrange(len(lines)), rng.choice(lines))
    return "\n".join(lines)


def values_changed(text, rng):
    return re.sub(r'"[^"\n]*"', lambda _: rng.choice(VALUES), text, count=rng.randint(1, 40))


def ended(text, rng):
    return text[: rng.randrange(len(text))]


def words_changed(text, rng):
    return text.replace(rng.choice(WORDS), rng.choice(WORDS))


MUTATIONS = [cut, inserted, line_lost, line_copied, values_changed, ended, words_changed]
VALUES = ['""', '"by hand"', '"1e999 V"', '"nan"', "nan", "-inf", "true", "[]", "{}", "1", "-1", "1979-05-27", '"µ"']
WORDS = [
    "low",
    "input",
    "stages",
    "channel",
    "wiring",
    "parts",
    "R_in",
    "C_1",
    "kHz",
    "nF",
    "dB",
    "%",
    "route",
    "2",
    "",
]


@pytest.mark.parametrize("seed", range(60))
@pytest.mark.parametrize(("text", "parse"), [(BOARD, parse_board), (BENCH, parse_bench)], ids=["board", "bench"])
def test_no_text_raises_anything_but_its_mistakes(text, parse, seed):
    found = ("nothing",)
    try:
        parse(mutated(text, random.Random(seed)), "a.toml")
    except FileMistakes as mistakes:
        found = mistakes.findings
    assert found
    assert all(len(finding) < 1000 for finding in found)


def test_most_mutated_texts_are_refused():
    """The fuzz above would prove nothing if its texts were good ones."""
    refused = 0
    for seed in range(60):
        try:
            parse_board(mutated(BOARD, random.Random(seed)), "a.toml")
        except FileMistakes:
            refused += 1
    assert refused > 30
