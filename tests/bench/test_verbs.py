"""The command line from end to end: exit codes, files left, one message for every expected error."""

import io
import json
import re
import signal
import socket
import subprocess
import sys
import termios
import time
from dataclasses import replace
from importlib.metadata import version

import pytest

from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts
from bandproof.bench.errors import Stopped
from bandproof.bench.evaluate import evaluate
from bandproof.bench.journal import Journal
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.verbs.console import run
from bandproof.bench.verbs.rehearse import world_of
from bandproof.bench.verbs.table import VERBS
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.drivers.dialect import source
from bandproof.drivers.lifeline import Lifeline
from bandproof.drivers.serial_line import Serial
from bandproof.simulated_instruments.bench import start
from bandproof.simulated_instruments.faults import Fault
from tests.benchmarks._serial_bridge import serial_address

PASS, BOARD_FAILS, BAD_INPUT, BENCH_FAULT, UNDECIDED, INTERRUPTED = range(6)  # as documented in --help


@pytest.fixture
def console(capsys):
    """Run a command line; return (exit code, standard output, standard error), proven free of tracebacks."""

    def call(*arguments):
        capsys.readouterr()
        code = run([str(argument) for argument in arguments])
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        assert "mistake of this program" not in err, err
        return code, out, err

    return call


@pytest.fixture(scope="session")
def board_path(one_band_text, tmp_path_factory):
    path = tmp_path_factory.mktemp("board") / "one.board.toml"
    path.write_text(one_band_text)
    return path


@pytest.fixture(scope="module")
def rehearsed(board_path, tmp_path_factory):
    """The folder of a rehearsal's attempt, made once; tests copy what they spoil."""
    folder = tmp_path_factory.mktemp("rehearsed")
    assert run(["rehearse", str(board_path), "--seed", "1", "--folder", str(folder)]) == PASS
    return folder / "rehearsal-1" / "1"


@pytest.fixture
def run_path(rehearsed, tmp_path):
    path = tmp_path / "run.h5"
    path.write_bytes((rehearsed / "run.h5").read_bytes())
    return path


# --- help ---


def test_help_names_every_verb_and_the_exit_codes(console):
    code, out, _ = console("--help")
    assert code == 0
    for verb in VERBS:
        assert re.search(rf"^  {verb.name} +{re.escape(verb.line[:30])}", out, re.MULTILINE)
    assert re.search(r"0 pass or done, 1 board fails, 2 bad input or usage,\s+3 bench fault, 4 undecided, 5", out)


@pytest.mark.parametrize("verb", [verb.name for verb in VERBS])
def test_every_verb_has_help_with_an_example_of_itself(console, verb):
    code, out, _ = console(verb, "--help")
    assert code == 0
    assert re.search(rf"Examples?:\s+bandproof {verb} ", out)


def test_the_version_is_the_installed_one(console):
    assert console("--version")[:2] == (0, f"bandproof {version('bandproof')}\n")


USAGE = {
    "unknown verb": (("sweeep",), r"no verb 'sweeep'; known: .*\(nearest: sweep\)"),
    "verb like none": (("xyzzy",), r"no verb 'xyzzy'; known: begin, .*rehearse, .*verify"),
    "unknown option": (("rehearse", "--sed", "1"), r"No such option.*--sed.*--seed"),
    "word for a number": (("rehearse", "--seed", "one"), "'one' is not a valid integer"),
    "negative seed": (("rehearse", "--seed", "-1"), "a seed is 0 or more"),
    "no serial": (("sweep", "a.board.toml"), "Missing option '--serial'"),
    "no run": (("fit",), "Missing argument 'RUN...'"),
    "no file": (("verify", "nowhere.h5"), "nowhere.h5: cannot be read: No such file"),
    "no board": (("rehearse", "nowhere.toml"), "nowhere.toml: 1 mistake to mend"),
}


@pytest.mark.parametrize(("arguments", "words"), USAGE.values(), ids=USAGE)
def test_bad_usage_is_exit_2_and_says_what_would_do(console, arguments, words, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    code, out, err = console(*arguments)
    assert code == BAD_INPUT
    assert re.search(words, err, re.DOTALL), err
    assert not out
    assert not list(tmp_path.iterdir())


# --- begin ---


def test_begin_writes_files_that_rehearse_as_they_are(console, tmp_path):
    folder = tmp_path / "mine"
    code, out, _ = console("begin", folder)
    assert code == 0
    written = sorted(folder.iterdir())
    assert {path.name for path in written} >= {"talkback.board.toml", "simulated.bench.toml", "scpi99-generator.toml"}
    assert {path.name for path in written} >= {
        f"blank-{kind}.toml" for kind in ("generator", "scope", "switch", "supply")
    }
    assert all(str(path) in out for path in written)
    assert all(any(line.startswith("#") for line in path.read_text().splitlines()) for path in written)
    code, out, _ = console("rehearse", folder / "talkback.board.toml", "--folder", tmp_path / "r")
    assert code == PASS
    assert "Board: PASS   15 pass" in out


def test_begin_overwrites_nothing(console, tmp_path):
    console("begin", tmp_path)
    mine = tmp_path / "talkback.board.toml"
    mine.write_text("mine")
    (tmp_path / "scpi99-switch.toml").unlink()
    code, _, err = console("begin", tmp_path)
    assert code == BAD_INPUT
    assert "talkback.board.toml" in err
    assert "nothing was written" in err
    assert mine.read_text() == "mine"
    assert not (tmp_path / "scpi99-switch.toml").exists()


# --- rehearse ---


def test_a_rehearsal_leaves_run_picture_log_and_truth(rehearsed):
    names = {path.name for path in rehearsed.iterdir()}
    assert names >= {"run.h5", "picture.svg", "exchange.log", "truth.json"}
    assert not [name for name in names if name.endswith(".part")]
    truth = json.loads((rehearsed / "truth.json").read_text())
    assert truth["stages"]["low"]["parts"].keys() == {"R_in", "R_shunt", "R_feedback", "C_1", "C_2"}
    assert truth["imperfections"]["output_resistance"] == 50.0


def test_a_rehearsal_measures_the_truth_it_wrote(console, board_path, tmp_path):
    code, out, _ = console("rehearse", board_path, "--seed", 3, "--folder", tmp_path, "--json")
    result = json.loads(out)  # one object and nothing else
    truth = json.loads((tmp_path / "rehearsal-3" / "1" / "truth.json").read_text())["stages"]["low"]
    (stage,) = result["stages"]
    assert code == PASS
    for name, true in (("centre", truth["centre_Hz"]), ("q", truth["q"]), ("gain", truth["gain"])):
        figure = stage["parameters"][name]
        # Twice the expanded uncertainty: four standard ones.
        assert abs(figure["measured"] - true) < 2 * figure["expanded_uncertainty"]
    assert result["wall_seconds"] > 0
    assert result["files"]["run"] == str(tmp_path / "rehearsal-3" / "1" / "run.h5")


def test_another_rehearsal_of_a_seed_is_another_attempt(console, board_path, rehearsed):
    before = (rehearsed / "run.h5").read_bytes()
    code, out, _ = console("rehearse", board_path, "--folder", rehearsed.parent.parent)
    assert code == PASS
    assert "attempt 2" in out
    assert (rehearsed / "run.h5").read_bytes() == before
    assert (rehearsed.parent / "2" / "run.h5").exists()


def test_a_defect_fails_the_board_in_the_line_of_its_band(console, tmp_path):
    code, out, _ = console("rehearse", "--defect", "voice.C_1=4n7", "--folder", tmp_path)
    assert code == BOARD_FAILS
    failed = {line.split()[0] for line in out.splitlines() if line.lower().endswith(" fail")}
    assert failed == {"voice"}
    assert re.search(r"^Board: FAIL   2 fail, 13 pass$", out, re.MULTILINE)
    assert max(len(line) for line in out.splitlines() if str(tmp_path) not in line) <= 80


@pytest.mark.parametrize("text", ["voice.R_9=1k", "voise.C_1=1n", "low.C_1=1k", "low.C_1", "low.C_1=0 nF"])
def test_a_defect_that_cannot_be_is_exit_2(console, tmp_path, text):
    code, _, err = console("rehearse", "--defect", text, "--folder", tmp_path / "r")
    assert code == BAD_INPUT
    assert f"--defect '{text}'" in err
    assert not (tmp_path / "r").exists()


# --- verify and fit ---


def test_verify_passes_a_run_file_as_written(console, rehearsed):
    code, out, _ = console("verify", rehearsed / "run.h5")
    assert code == 0
    assert "as it was written" in out
    assert "serial rehearsal-1, attempt 1" in out


def test_verify_notices_one_flipped_bit(console, run_path):
    content = bytearray(run_path.read_bytes())
    content[len(content) // 2] ^= 0x10
    run_path.write_bytes(content)
    code, out, err = console("verify", run_path)
    assert code == BAD_INPUT
    assert f"{run_path}: is damaged" in err
    assert "as it was written" not in out


def test_fit_concludes_the_same_and_names_its_parent_without_touching_it(console, run_path):
    before = run_path.read_bytes()
    code, out, _ = console("fit", run_path)
    assert code == PASS
    assert run_path.read_bytes() == before
    refit = run_path.with_name("run.refit-1.json")
    kept = json.loads(refit.read_text())
    assert str(refit) in out
    assert before[:512].rstrip(b"\0\n").decode() == f"bandproof-run/1 sha256={kept['parent_sha256']}"
    assert kept["result"]["stages"] == read_result(run_path)["stages"]
    console("fit", run_path)
    assert refit.with_name("run.refit-2.json").exists()
    assert json.loads(refit.read_text()) == kept


def test_fit_refuses_a_damaged_run(console, run_path):
    run_path.write_bytes(run_path.read_bytes()[:-100])
    code, _, err = console("fit", run_path)
    assert code == BAD_INPUT
    assert "is damaged" in err
    assert not list(run_path.parent.glob("*.json"))


# --- a bench that is served ---


class Served:
    """A simulated bench in virtual time, and the files to sweep it."""

    def __init__(self, server, folder, board_path):
        self.ports, self.folder, self.board = server.ports, folder, board_path
        self.bench = folder / "my.bench.toml"

    def sweep(self, console, *options, serial="TB-1"):
        return console(
            "sweep", self.board, "--bench", self.bench, "--serial", serial, "--folder", self.folder, *options
        )

    def ask_generator(self, question):
        """Ask over a connection of one's own."""
        with socket.create_connection(("127.0.0.1", self.ports["generator"]), 5.0) as connection:
            connection.sendall(question + b"\n")
            return connection.recv(100)


@pytest.fixture
def served(board_path, tmp_path):
    """Return a maker of served benches: faults, and text changes of the bench file (old, new)."""
    servers = []

    def make(*faults, changes=()):
        board = parse_board(board_path.read_text(), "one")
        bench = rehearsal_bench(board)
        create_clock_file(tmp_path / "bench.time")
        world = world_of(board, bench, draw_parts(board, 1), 1, 1)
        server = start(replace(world, clock=str(tmp_path / "bench.time"), faults=faults))
        servers.append(server)
        text = bench.text.replace("\nmains ", '\nsimulated_clock = "bench.time"\nmains ')
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, f"TCPIP::127.0.0.1::{server.ports[role]}::SOCKET")
        for old, new in changes:
            assert old in text, old
            text = text.replace(old, new)
        made = Served(server, tmp_path, board_path)
        made.bench.write_text(text)
        return made

    yield make
    for server in servers:
        server.stop()


@pytest.fixture
def impatient(monkeypatch):
    """Wait for a simulated instrument only half a second by the wall: it computes, it does not wait."""
    monkeypatch.setattr(VirtualClock, "patience", lambda self, expected: 0.5)


def test_a_serial_line_is_set_as_the_bench_file_says_in_a_whole_sweep_and_for_its_lifeline(
    console, served, monkeypatch
):
    bench, seen, lifelines, true = served(), set(), [], Lifeline.start

    def start_lifeline(address, **options):
        lifelines.append((address, options["serial"]))
        return true(address, **options)

    monkeypatch.setattr(Lifeline, "start", start_lifeline)
    with serial_address(bench.ports["generator"], seen=seen) as address:
        socket_address = f'"TCPIP::127.0.0.1::{bench.ports["generator"]}::SOCKET"'
        text = bench.bench.read_text()
        assert socket_address in text
        bench.bench.write_text(text.replace(socket_address, f'"{address}"\nbaud = 19200\nstop_bits = 2'))
        code, out, _ = bench.sweep(console)
    assert code == PASS, out
    assert {line[5] for line in seen} == {termios.B19200}  # the speed, of POSIX's termios
    assert {line[2] & termios.CSTOPB for line in seen} == {termios.CSTOPB}
    assert lifelines == [(address, Serial(baud=19200, stop_bits=2))]


def test_a_sweep_of_a_served_bench_passes_and_leaves_it_off(console, served):
    bench = served()
    code, out, _ = bench.sweep(console, "--operator", "Ann", "--note", "first")
    assert code == PASS
    assert "Board: PASS   3 pass" in out
    assert "named on the command line" in out
    assert bench.ask_generator(b"OUTP?") == b"0\n"
    assert {path.name for path in (bench.folder / "TB-1" / "1").iterdir()} >= {"run.h5", "picture.svg", "exchange.log"}
    assert bench.sweep(console, "--retest", "seen")[0] == PASS  # the next attempt, on the bench as it was left
    assert (bench.folder / "TB-1" / "2" / "run.h5").exists()


def test_a_verdict_is_asked_again_once_and_anew_after_a_repair(console, served):
    bench = served()
    assert bench.sweep(console)[0] == PASS
    code, _, err = bench.sweep(console)
    assert code == BAD_INPUT
    assert 'its verdict is pass. To ask once more, say why: --retest "REASON"' in " ".join(err.split())
    assert not (bench.folder / "TB-1" / "2").exists()
    code, out, _ = bench.sweep(console, "--retest", "for the customer", "--json")
    assert code == PASS
    first, second = json.loads(out)["attempts"]
    assert (first["attempt"], first["pooled"], second["attempt"]) == (1, True, 2)
    assert first["digest"] == digest_of(bench.folder / "TB-1" / "1" / "run.h5")
    assert second["reason"] == "for the customer"
    code, _, err = bench.sweep(console, "--retest", "once more")
    assert code == BAD_INPUT
    assert "measured twice" in err
    assert not (bench.folder / "TB-1" / "3").exists()
    code, out, _ = bench.sweep(console, "--repair", "C_2 replaced", "--operator", "Ann")
    assert code == PASS
    assert "means of attempts" not in out
    assert re.fullmatch(r"\S+\tafter attempt 2\tAnn\tC_2 replaced\n", (bench.folder / "TB-1/repairs.txt").read_text())
    code, out, _ = bench.sweep(console, "--retest", "seen")
    assert (code, "The figures are means of attempts 3, 4 where these agree." in out) == (PASS, True)


def test_a_repair_is_logged_only_where_a_sweep_may_begin(console, served):
    bench = served()
    for _ in range(2):
        code, _, err = bench.sweep(console, "--repair", "C_2 replaced", "--retest", "seen")
        assert (code, "nothing to retest" in err) == (BAD_INPUT, True)
    assert not (bench.folder / "TB-1").exists()


@pytest.mark.parametrize("option", ["--retest", "--repair", "--without-check"])
def test_a_reason_that_says_nothing_is_none(console, served, option):
    bench = served()
    for text in (" ", "\t", "-", "..."):
        code, _, err = bench.sweep(console, option, text)
        assert (code, f"{option} {text!r} says nothing" in err) == (BAD_INPUT, True)
    assert console("check", bench.bench, "--accept", " ")[0] == BAD_INPUT
    assert not (bench.folder / "TB-1").exists()


def stopped_behind(monkeypatch, purpose):
    """Let Ctrl-C come behind the first point of a purpose."""
    true, seen = Journal.measured, []

    def measured(journal, point, **details):
        true(journal, point, **details)
        seen.append(point.purpose)
        if seen.count(purpose) == 1 and point.purpose == purpose:
            raise Stopped("Ctrl-C")

    monkeypatch.setattr(Journal, "measured", measured)


def test_a_look_that_was_cut_short_has_no_verdict_and_is_gone_on_with(console, served, monkeypatch):
    bench = served()
    with monkeypatch.context() as patch:
        stopped_behind(patch, "thru")
        code, out, _ = bench.sweep(console)
    assert (code, "CUT SHORT: stopped by Ctrl-C" in out) == (INTERRUPTED, True)
    rows = [line for line in out.splitlines() if re.match(r"low .* ± ", line)]
    assert [row.split()[-1] for row in rows] == ["-"] * 3
    assert "pass" not in out
    place = bench.folder / "TB-1" / "1"
    result = read_result(place / "run.cut_short-1.h5")
    (stage,) = result["stages"]
    kept = [stage, *stage["parameters"].values()]
    assert [one["verdict"] for one in kept] == [None] * 4
    assert [one["conformance_probability"] for one in kept[1:]] == [None] * 3
    assert console("verify", place / "run.cut_short-1.h5")[0] == PASS
    code, _, err = bench.sweep(console)
    assert (code, f"bandproof resume {place}" in err, 'say why: --retest "REASON"' in err) == (BAD_INPUT, True, True)
    assert console("resume", place)[0] == PASS
    assert bench.sweep(console)[0] == BAD_INPUT  # it has a verdict now


def test_of_two_looks_only_the_last_goes_on(console, served, monkeypatch):
    """Two unfinished attempts, of which somebody would choose the better one."""
    bench = served()
    with monkeypatch.context() as patch:
        stopped_behind(patch, "thru")
        assert bench.sweep(console)[0] == INTERRUPTED
        stopped_behind(patch, "thru")
        assert bench.sweep(console, "--retest", "a probe fell off")[0] == INTERRUPTED
    code, _, err = bench.sweep(console, "--retest", "again")
    assert (code, "measured twice" in err) == (BAD_INPUT, True)
    code, _, err = console("resume", bench.folder / "TB-1" / "1")
    assert (code, "only the last goes on" in err) == (BAD_INPUT, True)
    code, out, _ = console("resume", bench.folder / "TB-1" / "2", "--json")
    first, second = json.loads(out)["attempts"]
    assert (code, first["verdict"], first["pooled"], second["pooled"]) == (PASS, None, False, True)
    assert second["reason"] == "a probe fell off"


def test_a_run_cut_short_before_its_first_curve_is_no_look(console, served, monkeypatch):
    bench = served()
    with monkeypatch.context() as patch:
        stopped_behind(patch, "low-level")
        assert bench.sweep(console)[0] == INTERRUPTED
    assert bench.sweep(console)[0] == PASS


def test_an_undecided_board_is_measured_once_more_with_longer_records_also_after_a_resume(
    console, served, monkeypatch, board_path, tmp_path
):
    """The board's f0 is 1.43 % above its design, and half of its u² is noise; both as the README's first table says."""
    bench, text = served(), board_path.read_text()
    bench.board = tmp_path / "open.board.toml"
    bench.board.write_text(
        text.replace('centre = "6 %", q', 'centre = "1.43 %", q').replace('rule      = "simple"', 'rule = "guarded 1"')
    )
    assert bench.board.read_text() != text
    code, out, _ = bench.sweep(console)
    assert code == UNDECIDED
    assert "Noise left it undecided. Sweep it once more" in " ".join(out.split())
    with monkeypatch.context() as patch:
        stopped_behind(patch, "low-level")  # its curve is planned by the resumed run
        assert bench.sweep(console)[0] == INTERRUPTED
    code, out, _ = console("resume", bench.folder / "TB-1" / "2")
    assert "The figures are means of attempts 1, 2 where these agree." in out
    assert "records are 4 times as long" in out
    if code == UNDECIDED:
        assert "now a person decides" in out
    first, second = (read_run(bench.folder / "TB-1" / n / "run.h5") for n in "12")
    curves = [[step for step in run.steps if step.purpose in ("curve", "closing")] for run in (first, second)]
    for before, after in zip(*curves, strict=True):
        assert after.duration == pytest.approx(4.0 * before.duration)
        assert after.samples == 4 * before.samples
    noise = [evaluate(run)[0].budgets["centre"].rows[0].contribution for run in (first, second)]
    assert noise[1] == pytest.approx(noise[0] / 2.0, rel=0.2)


def test_the_bench_verb_names_every_instrument_and_leaves_the_generator_off(console, served):
    bench = served()
    assert bench.ask_generator(b"OUTP ON;*OPC?") == b"1\n"
    code, out, _ = console("bench", bench.bench)
    assert code == 0
    for role in ("generator", "scope", "switch"):
        assert re.search(rf"{role} +TCPIP::127\.0\.0\.1::{bench.ports[role]}::SOCKET", out)
    assert "the generator's output is off" in out
    assert bench.ask_generator(b"OUTP?") == b"0\n"


@pytest.mark.parametrize("serial", ["../up", "a/b", "", "ö", "x" * 65, "..", "chain.txt", "Chain.TXT"])
def test_a_serial_number_that_is_no_folder_name_is_exit_2(console, served, serial):
    bench = served()
    code, _, err = bench.sweep(console, serial=serial)
    assert code == BAD_INPUT
    assert "cannot be a serial number" in err


def test_a_tap_that_is_not_wired_is_exit_2_before_anything_is_contacted(console, served):
    bench = served(changes=[("low_out = {", "low_uot = {")])
    code, _, err = bench.sweep(console)
    assert code == BAD_INPUT
    assert "wiring.low_out: missing" in err
    assert "nearest: low_uot" in err


def test_without_a_switch_and_without_hands_a_sweep_is_exit_3(console, served, monkeypatch):
    bench = served()
    text = re.sub(r"\[switch\].*?(?=\[probes\])", "", bench.bench.read_text(), flags=re.DOTALL)
    bench.bench.write_text(re.sub(r'route = "\d+"', 'route = "by hand"', text))
    monkeypatch.setattr(sys, "stdin", io.StringIO())
    code, _, err = bench.sweep(console)
    assert code == BENCH_FAULT
    assert re.search(r"somebody must: The generator is off\. Put the probe of channel 2 on test point 'low_out'", err)


@pytest.mark.parametrize("role", ["generator", "scope", "switch"])
def test_an_address_where_nobody_listens_is_exit_3_and_named(console, served, impatient, role):
    with socket.create_server(("127.0.0.1", 0)) as listener:
        closed = listener.getsockname()[1]
    bench = served()
    bench.bench.write_text(bench.bench.read_text().replace(f"::{bench.ports[role]}::", f"::{closed}::"))
    begin = time.monotonic()
    code, _, err = bench.sweep(console)
    assert code == BENCH_FAULT
    assert err.count(f"TCPIP::127.0.0.1::{closed}::SOCKET") == 1
    assert time.monotonic() - begin < 10.0
    assert bench.ask_generator(b"OUTP?") == b"0\n"


@pytest.mark.parametrize("role", ["generator", "scope"])
def test_another_kind_of_instrument_behind_an_address_is_exit_3_and_shown(console, served, impatient, role):
    """The dialect's identity pattern is compared with what *IDN? answers."""
    kind, dialect = {"generator": ("GENERATOR", "generator"), "scope": ("SCOPE", "digitizer")}[role]
    other = {"generator": "scope", "scope": "switch"}[role]
    bench = served(changes=[(f'"scpi99-{dialect}"', '"strict.toml"')])
    pattern = re.sub(r'^pattern = ""', f'pattern = "SIMULATED {kind}"', source(f"scpi99-{dialect}"), flags=re.MULTILINE)
    (bench.folder / "strict.toml").write_text(pattern)
    assert console("bench", bench.bench)[0] == 0  # the pattern fits the right one
    text = bench.bench.read_text()
    text = text.replace(f"::{bench.ports[role]}::", f"::{bench.ports[other]}::", 1)
    bench.bench.write_text(text)
    code, _, err = bench.sweep(console)
    assert code == BENCH_FAULT
    assert "expected an identity that fits" in err, err
    assert f"SIMULATED {other.upper()}" in err
    assert f"127.0.0.1::{bench.ports[other]}::" in err


# Each strikes every attempt at one record, so that no recovery helps.
STAYING = ["silent-instrument", "late-answer", "endless-reply", "dripping-reply", "lying-block-length", "error-entry"]


def unwrapped(text):
    """Return text with its folded lines joined."""
    return re.sub(r"\n  +", " ", text)


@pytest.mark.parametrize("name", STAYING)
def test_a_fault_of_the_scope_that_stays_is_exit_3_one_message_and_generator_off(console, served, impatient, name):
    bench = served(Fault(name, 4, persistent=True))
    begin = time.monotonic()
    code, out, err = bench.sweep(console)
    assert code == BENCH_FAULT
    assert time.monotonic() - begin < 20.0  # a few attempts of half a second each, on a loaded machine
    assert bench.ask_generator(b"OUTP?") == b"0\n"
    (told,) = [line for line in unwrapped(out).splitlines() if line.startswith("CUT SHORT: ")]
    assert f"::{bench.ports['scope']}::" in told
    assert re.search(r"exchange log line \d+", told)
    assert f"::{bench.ports['scope']}::" not in err
    assert "No verdict" in out
    (kept,) = (bench.folder / "TB-1" / "1").glob("*.h5")
    code, out, _ = console("verify", kept)
    assert code == 0
    assert "4 records, cut_short" in out


@pytest.mark.parametrize("name", ["late-answer", "lying-block-length"])
def test_a_fault_of_the_scope_that_passes_costs_a_repeat_and_no_verdict(console, served, impatient, name):
    bench = served(Fault(name, 4))
    code, out, _ = bench.sweep(console)
    assert code == PASS
    assert re.search(
        r"^note: low: the scope .* reopened and measured again$", " ".join(out.split("\n  ")), re.MULTILINE
    )
    assert bench.ask_generator(b"OUTP?") == b"0\n"


def test_a_generator_that_stops_answering_is_switched_off_over_a_fresh_connection(console, served, impatient):
    bench = served(Fault("silent-instrument", 5, "generator"))
    code, out, _ = bench.sweep(console)
    assert code == PASS
    assert "low: the generator gave no answer in time" in out
    assert bench.ask_generator(b"OUTP?") == b"0\n"


def test_a_sweep_cut_short_has_a_null_verdict_in_json(console, served, impatient):
    bench = served(Fault("dropped-connection", 4, persistent=True))
    code, out, _ = bench.sweep(console, "--json")
    assert code == BENCH_FAULT
    result = json.loads(out)
    assert (result["verdict"], result["ended"]) == (None, "cut_short")


def test_a_folder_that_cannot_be_written_is_told(console, board_path, tmp_path):
    (tmp_path / "file").write_text("in the way")
    code, _, err = console("rehearse", board_path, "--folder", tmp_path / "file")
    assert code == BENCH_FAULT
    assert str(tmp_path / "file") in err


# --- processes of their own ---


def fresh(code, *arguments):
    """Run Python code in a process of its own; return its last line of standard output."""
    done = subprocess.run(
        [sys.executable, "-c", code, *map(str, arguments)], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()[-1]


LOADED = """
import sys
from bandproof.bench.verbs.console import run
code = run(sys.argv[2:])
print(code, *sorted(name for name in sys.argv[1].split(",") if name in sys.modules))
"""
HEAVY = "numpy,scipy,h5py,matplotlib,pyvisa,pyvisa_py"
SLOW = "scipy.stats,scipy.signal,matplotlib.pyplot"


@pytest.mark.parametrize("arguments", [("--help",), ("rehearse", "--help"), ("sweep", "--help"), ("fit", "--help")])
def test_help_loads_nothing_heavy(arguments):
    assert fresh(LOADED, HEAVY, *arguments) == "0"


def test_a_whole_rehearsal_loads_no_statistics_signals_or_pyplot(board_path, tmp_path):
    assert fresh(LOADED, SLOW + ",numpy", "rehearse", board_path, "--folder", tmp_path) == "0 numpy"


def test_a_served_bench_is_swept_in_real_time_and_ends_with_ctrl_c(console, board_path, tmp_path):
    """As a user has it: two terminals."""
    command = [sys.executable, "-c", "from bandproof.bench.verbs.console import main; main()"]
    process = subprocess.Popen(
        [*command, "rehearse", str(board_path), "--serve", "--folder", str(tmp_path)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        lines = []
        while not lines or not lines[-1].startswith("It answers"):
            lines.append(process.stdout.readline())
            assert lines[-1], process.stderr.read()
        bench = tmp_path / "served.bench.toml"
        assert f"bench file: {bench}\n" in lines
        code, out, _ = console("sweep", board_path, "--bench", bench, "--serial", "1", "--folder", tmp_path / "r")
        assert code == PASS
        assert "Board: PASS" in out
        process.send_signal(signal.SIGINT)
        _, err = process.communicate(timeout=10)
        assert (process.returncode, err) == (0, "")
    finally:
        process.kill()
        process.wait()
        process.stdout.close()
        process.stderr.close()


@pytest.mark.parametrize("text", ["hmu=0.01", "hum", "hum=-1", "hum=much", "adc_bits=99"])
def test_an_imperfection_that_is_none_is_exit_2_with_the_names(console, tmp_path, text):
    code, _, err = console("rehearse", "--imperfection", text, "--folder", tmp_path)
    assert code == 2
    assert "names: output_resistance" in err


def test_an_imperfection_asked_for_is_in_the_truth(console, tmp_path, one_band_text):
    (tmp_path / "one.board.toml").write_text(one_band_text)
    code, _, _ = console(
        "rehearse", tmp_path / "one.board.toml", "--imperfection", "hum=0.02", "--pace", "real", "--folder", tmp_path
    )
    assert code == 0
    (truth,) = tmp_path.rglob("truth.json")
    assert max(json.loads(truth.read_text())["imperfections"]["hum"]) > 1e-3
