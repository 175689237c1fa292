"""The path itself: measured by its verb, kept in a file, used while its conditions hold, refused with every reason."""

import json
import re
import socket
import sys
import zlib
from contextlib import closing
from dataclasses import replace
from datetime import datetime, timedelta
from pathlib import Path

import h5py
import numpy as np
import pytest

from bandproof.bench import runfile, thru_job
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts, predict
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import known_paths
from bandproof.bench.finish import board_and_bench, run_of
from bandproof.bench.job import Job
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.operator import Absent
from bandproof.bench.plain import to_json
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text, rehearsal_bench
from bandproof.bench.resumption import EARLIER
from bandproof.bench.runfile import read_result, read_run
from bandproof.bench.stop import Stop
from bandproof.bench.thru import paths
from bandproof.bench.thru_file import keep_thru, read_thru
from bandproof.bench.thru_job import ThruJob
from bandproof.bench.verbs import conditions
from bandproof.bench.verbs.console import run
from bandproof.bench.verbs.rehearse import simulated, world_of
from bandproof.drivers.clock import create_clock_file
from bandproof.simulated_instruments.bench import start

PASS, BAD_INPUT, BENCH_FAULT = 0, 2, 3  # as documented in --help
SEED = 4
# Errors no bench file here declares; a thru must remove them all.
GROSS = {"channel_gain": 0.05, "skew": 500e-9, "probe_compensation": 0.05, "range_gain": 0.02}
ROUTES = {"input": "100", "low_out": "101"}


@pytest.fixture
def console(capsys):
    """Run a command line; return (exit code, standard output, standard error), folded lines joined."""

    def call(*arguments):
        capsys.readouterr()
        code = run([str(argument) for argument in arguments])
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        assert "mistake of this program" not in err, err
        return code, re.sub(r"\n  +(?=\S)", " ", out), err

    return call


class Bench:
    """A simulated bench in virtual time, its files, and the hands that move its probe."""

    def __init__(self, server, folder, board_path):
        self.ports, self.folder, self.board = server.ports, folder, board_path
        self.file, self.thru = folder / "my.bench.toml", folder / "my.thru.json"
        self.asked, self.answers = [], {}

    def answer(self, request):
        """Do what is asked: move the probe, or say who and how warm."""
        self.asked.append(request)
        if (tap := re.search(r"test point '(\w+)'", request)) is not None:
            assert self.ask("generator", b"OUTP?") == b"0\n"
            assert self.ask("switch", f"ROUT:CLOS (@{ROUTES[tap[1]]});*OPC?".encode()) == b"1\n"
            return ""
        return next((answer for word, answer in self.answers.items() if word in request), "")

    def ask(self, role, question):
        with socket.create_connection(("127.0.0.1", self.ports[role]), 5.0) as connection:
            connection.sendall(question + b"\n")
            return connection.recv(100)

    def change(self, old, new):
        text = self.file.read_text()
        assert old in text
        self.file.write_text(text.replace(old, new))

    def change_thru(self, *, started=None, points=None, **changes):
        """Store the thru as if it had been measured otherwise."""
        thru = read_thru(self.thru)
        kept = replace(thru, conditions={**thru.conditions, **changes})
        keep_thru(self.thru, replace(kept, started=started or kept.started, points=points or kept.points))

    def measure(self, console, *options):
        return console("thru", self.file, "--board", self.board, *options)

    def sweep(self, console, *options):
        place = ("--bench", self.file, "--serial", "1", "--folder", self.folder / "runs")
        return console("sweep", self.board, *place, *options)

    def run_file(self, attempt=1):
        return self.folder / "runs" / "1" / str(attempt) / "run.h5"


@pytest.fixture
def made(one_band_text, tmp_path, monkeypatch):
    """Return a maker of benches in virtual time; `by_hand`: hands at the terminal instead of a switch."""
    servers = []

    def make(text=one_band_text, *, by_hand=True, seed=SEED, **sizes):
        board_path = tmp_path / "my.board.toml"
        board_path.write_text(text)
        board = parse_board(text, "one")
        bench = rehearsal_bench(board)
        create_clock_file(tmp_path / "bench.time")
        world = world_of(board, bench, draw_parts(board, seed), seed, 1, **sizes)
        server = start(replace(world, clock=str(tmp_path / "bench.time")))
        servers.append(server)
        text = bench.text.replace("\nmains ", '\nsimulated_clock = "bench.time"\nmains ')
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, f"TCPIP::127.0.0.1::{server.ports[role]}::SOCKET")
        found = Bench(server, tmp_path, board_path)
        found.world = world
        if by_hand:
            text = re.sub(r"\[switch\].*?(?=\[probes\])", "", text, flags=re.DOTALL)
            text = re.sub(r'route = "\d+"', 'route = "by hand"', text)
            monkeypatch.setattr(sys, "stdin", Terminal())
            monkeypatch.setattr(conditions, "_ask", found.answer)
        found.file.write_text(text)
        return found

    yield make
    for server in servers:
        server.stop()


class Terminal:
    """A standard input that is a terminal; what it would be asked goes to `Bench.answer`."""

    def isatty(self):
        return True


@pytest.fixture
def stored(made, console):
    """A bench whose probe is moved by hand, with a thru stored at 23 °C."""
    bench = made()
    code, out, err = bench.measure(console, "--ambient", "23 °C", "--operator", "Ann")
    assert code == 0, out + err
    bench.asked.clear()
    return bench


# --- measured ---


def test_hands_put_both_probes_on_one_node_with_the_generator_off_and_it_is_off_at_the_end(made, console):
    bench = made()
    code, out, _ = bench.measure(console, "--ambient", "23 °C", "--operator", "Ann")
    assert code == 0
    (request,) = bench.asked
    assert "Put the probe of channel 2 on test point 'input' (node in)" in request
    assert bench.ask("generator", b"OUTP?") == b"0\n"
    assert str(bench.thru) in out
    thru = read_thru(bench.thru)
    assert thru.conditions["ambient"] == 23.0
    assert thru.conditions["operator"] == "Ann"
    assert thru.conditions["channels"] == [1, 2]
    assert {point.purpose for point in thru.points} == {"thru"}


def test_a_record_without_signal_and_one_at_a_tenth_of_the_level_come_first(made, console):
    bench = made()
    assert bench.measure(console)[0] == 0
    log = bench.thru.with_suffix(".log").read_text()
    sent = re.findall(r" > \d+ (.*)", log)
    first_on = next(i for i, text in enumerate(sent) if re.match(r"OUTPut:STATe ON", text))
    records = [i for i, text in enumerate(sent) if text.startswith("INITiate")]
    amplitude = re.compile(r"SOURce:VOLTage:AMPLitude ([\d.]+)")
    levels = [float(match[1]) for text in sent if (match := amplitude.match(text))]
    assert records[0] < first_on < records[1]
    assert levels[0] == pytest.approx(0.1 * max(levels))
    assert set(levels[1:]) == {max(levels)}
    assert max(levels) <= 2.0  # the bench's ceiling


def test_the_stored_points_are_those_of_two_probe_dividers(made, console):
    """Outside: the RC divider of a 10:1 probe, 9 MΩ and C_p into 1 MΩ and C_s, by its impedances (common practice)."""
    quiet = {"nonlinearity": 0.0, "reseating": 0.0, "drift": 0.0, "range_gain": 0.0}
    bench = made(**(GROSS | quiet))
    assert console("thru", bench.file)[0] == 0
    points = [point for point in read_thru(bench.thru).points if point.ranges == (2.0, 2.0)]
    f = np.array([point.frequency for point in points])
    real = bench.world.imperfections

    def divider(excess):
        pole = 1 / (2 * np.pi * real.probe_corner)  # of 1 MΩ parallel 9 MΩ with C_p + C_s
        series = pole * (1 + excess) / 9e6
        shunt = pole / 0.9e6 - series
        upper, lower = 1 / (1 / 9e6 + 2j * np.pi * f * series), 1 / (1 / 1e6 + 2j * np.pi * f * shunt)
        return 10 * lower / (lower + upper)

    first, second = (divider(excess) for excess in real.probe_compensation)
    gain = (1 + real.channel_gain[1]) / (1 + real.channel_gain[0])
    skew = real.skew[1] - real.skew[0]
    expected = gain * second / first * np.exp(2j * np.pi * f * skew)  # a channel that samples later leads
    measured = np.array([point.response for point in points])
    u = np.sqrt([point.covariance[0] + point.covariance[2] for point in points])
    # |error|^2 / u^2 of a complex normal is exponential: above 5^2 once in 7e10.
    assert np.abs(measured / expected - 1).max() < 5 * u.max()
    assert np.abs(first / second - 1).max() > 0.02  # the probes do differ
    (path,) = paths(points).values()
    # The fitted path is surer than a point; its zero and pole are right to D**3 / 24, 4e-5 at most here.
    assert np.abs(path.fit.at(f) / expected - 1).max() < 3 * u.max()


def test_without_a_board_the_ranges_are_those_of_the_ceiling_over_the_audio_band(made, console):
    bench = made()
    code, out, _ = console("thru", bench.file, "--json")
    assert code == 0
    result = json.loads(out)
    # Levels below 2 V that just fill a range of 1-2-5 at gains of 1, 0.32, 3.2 and 10, and these ranges.
    assert {tuple(path["ranges"]) for path in result["paths"]} == {(2.0, 2.0), (2.0, 0.5), (2.0, 5.0), (2.0, 20.0)}
    assert all(path["span"] == pytest.approx([20.0, 20e3], rel=1e-3) for path in result["paths"])
    assert result["conditions"]["ambient"] is None
    assert result["files"] == {"thru": str(bench.thru), "earlier": None}


def test_an_earlier_thru_is_kept_under_the_next_number(stored, console):
    first = stored.thru.read_bytes()
    assert stored.measure(console)[0] == 0
    second = stored.thru.read_bytes()
    code, out, _ = stored.measure(console)
    assert code == 0
    assert (stored.folder / "my.thru.1.json").read_bytes() == first != second
    assert (stored.folder / "my.thru.2.json").read_bytes() == second
    assert str(stored.folder / "my.thru.2.json") in out


def test_a_probe_factor_that_is_wrong_stores_nothing(made, console):
    bench = made()
    bench.change("channel_2 = 1\n", "channel_2 = 10\n")
    code, _, err = bench.measure(console)
    assert code == BENCH_FAULT
    assert re.search(r"both probes on one node read × (9\.\d+|10\.?\d*) at", err)
    assert len([request for request in bench.asked if "Look whether both probes" in request]) == 1
    assert not bench.thru.exists()
    assert bench.ask("generator", b"OUTP?") == b"0\n"


def test_a_bench_file_without_a_way_to_the_thru_is_exit_2_and_told_what_to_write(made, console):
    bench = made()
    bench.file.write_text(re.sub(r"^thru .*\n", "", bench.file.read_text(), flags=re.MULTILINE))
    code, _, err = bench.measure(console)
    assert code == BAD_INPUT
    assert 'thru = { channel = 2, route = "by hand" }' in err


def test_a_path_that_is_not_smooth_is_told_by_the_sweep_that_uses_it(stored, console):
    points = list(read_thru(stored.thru).points)
    points[4] = replace(points[4], response=points[4].response * 1.02)  # as a loose contact would
    stored.change_thru(points=tuple(points))
    code, out, _ = stored.sweep(console, "--ambient", "23 °C")
    assert "my.thru.json is not a smooth path on " in out
    assert code in (PASS, 1)


def test_the_verb_names_what_to_look_at_when_the_path_is_not_smooth(made, console, monkeypatch):
    bench = made()

    def loose(points):
        """Return the paths as a contact that was loose at one frequency leaves them."""
        spoilt = list(points)
        spoilt[4] = replace(points[4], response=points[4].response * 1.02)
        return paths(spoilt)

    code, out, _ = bench.measure(console)
    assert (code, "not a smooth path" in out) == (0, False)
    monkeypatch.setattr(thru_job, "paths", loose)
    code, out, _ = bench.measure(console)
    assert code == 0
    assert re.search(r"note: on [^,]+, [^,]+ it is not a smooth path \(chi-square .* look at probes", out)


def test_the_verb_prints_what_readme_shows(made, console, monkeypatch):
    readme = (Path(__file__).parent.parent.parent / "README.md").read_text()
    (shown,) = re.findall(r"^```text\n(The generator is off.*?)^```$", readme, re.MULTILINE | re.DOTALL)
    bench = made(demo_text(DEMO_BOARD), seed=1)
    monkeypatch.chdir(bench.folder)
    options = ("--board", "my.board.toml", "--ambient", "23 °C", "--operator", "Ann")
    code, out, _ = console("thru", "my.bench.toml", *options)
    assert code == 0
    first, _, rest = shown.partition("to stop]")
    assert " ".join(f"{first}to stop]".split()) == " ".join(bench.asked[0].split())
    told = out.partition("\n")[2]  # the first line names the bench file
    assert re.sub(r"\n  +(?=\S)", " ", rest).strip() == told.strip()  # folded lines joined, as in `out`
    assert max(map(len, shown.splitlines())) <= 80


# --- used ---


def figures(path):
    (stage,) = read_result(path)["stages"]
    return stage["parameters"]


def truth(bench):
    board = parse_board(bench.board.read_text(), "one")
    true = predict(board, board.stages[0], draw_parts(board, SEED)["low"])
    return {"centre": true.centre, "q": true.q, "gain": true.gain}


def test_errors_of_channels_probes_and_ranges_leave_the_figures_with_a_stored_thru(made, console):
    bench = made(**GROSS)
    assert bench.measure(console)[0] == 0
    assert bench.sweep(console)[0] == PASS
    assert bench.sweep(console, "--without-thru", "--repair", "nothing: counted anew")[0] in (0, 1, 4)
    true, with_it, without = truth(bench), figures(bench.run_file(1)), figures(bench.run_file(2))
    for name in ("centre", "q", "gain"):
        assert abs(with_it[name]["measured"] - true[name]) < 4 * with_it[name]["standard_uncertainty"], name
    # Drawn for this seed: the channels alone differ by several per cent, which all lands in gain.
    assert abs(without["gain"]["measured"] - true["gain"]) > 2 * with_it["gain"]["expanded_uncertainty"]
    assert with_it["gain"]["expanded_uncertainty"] < 0.5 * without["gain"]["expanded_uncertainty"]


def test_the_run_file_holds_the_thru_and_a_fit_of_it_gives_the_same_figures(stored, console):
    assert stored.sweep(console, "--ambient", "22 °C", "--operator", "Bo")[0] == PASS
    kept = read_run(stored.run_file())
    assert kept.thru == read_thru(stored.thru)
    assert (kept.ambient, kept.operator) == (22.0, "Bo")
    assert not [point for point in kept.points if point.purpose == "thru"]
    (path,) = known_paths(kept).values()
    assert path.time < 0.0  # s, before the run
    stored.thru.unlink()  # the run file stands alone
    assert console("fit", stored.run_file())[0] == PASS
    refit = json.loads(stored.run_file().with_name("run.refit-1.json").read_text())
    assert refit["result"]["stages"] == read_result(stored.run_file())["stages"]


def test_a_bench_that_can_switch_to_its_thru_does_not_measure_what_is_stored(made, console):
    bench = made(by_hand=False)
    assert bench.measure(console, "--ambient", "23 °C")[0] == 0
    assert bench.sweep(console)[0] == PASS
    kept = read_run(bench.run_file())
    assert kept.thru is not None
    assert not [point for point in kept.points if point.purpose == "thru"]


def test_a_bench_that_can_switch_to_its_thru_measures_its_own_when_the_stored_one_does_not_hold(made, console):
    bench = made(by_hand=False)
    assert bench.measure(console, "--ambient", "23 °C")[0] == 0
    code, out, _ = bench.sweep(console, "--ambient", "30 °C")
    assert code == PASS
    assert re.search(r"note: my\.thru\.json was not used, .* 23 °C, now at 30 °C", out)
    kept = read_run(bench.run_file())
    assert kept.thru is None
    assert [point for point in kept.points if point.purpose == "thru"]


# --- refused ---


def older(bench, hours):
    return (datetime.fromisoformat(read_thru(bench.thru).started) - timedelta(hours=hours)).isoformat()


def narrower(bench):
    points = read_thru(bench.thru).points
    return tuple(point for point in points if point.frequency < 300.0)


REASONS = {
    "probe": (lambda bench: bench.change_thru(probe_factors={"1": 1.0, "2": 10.0}), "were 1: 1, 2: 10, now 1: 1, 2: 1"),
    "scope": (
        lambda bench: bench.change_thru(identities={"scope": "ANOTHER", "generator": "ANOTHER"}),
        "the scope was 'ANOTHER', now '",
    ),
    "dialect": (lambda bench: bench.change_thru(dialects={"scope": "0" * 64}), "the scope's dialect was another one"),
    "channels": (lambda bench: bench.change_thru(channels=[2, 1]), "it is of channel 1 over 2, not so measured: low"),
    "warmer": (lambda bench: bench.change_thru(ambient=20.0), "the room was at 20 °C, now at 23 °C"),
    "old": (
        lambda bench: bench.change_thru(started=older(bench, 12.0)),
        "it is 12 h old, the bench file lets it be used",
    ),
    "later": (lambda bench: bench.change_thru(started=older(bench, -1.0)), "look at the computer's clock"),
    "span": (lambda bench: bench.change_thru(points=narrower(bench)), " it goes from "),
    "ranges": (
        lambda bench: bench.change_thru(
            points=tuple(replace(point, ranges=(0.01, 0.01)) for point in read_thru(bench.thru).points)
        ),
        ", which the plan asks for",
    ),
}


@pytest.mark.parametrize(("spoil", "reason"), REASONS.values(), ids=REASONS)
def test_a_thru_that_does_not_hold_is_exit_2_with_its_reason_before_any_signal(stored, console, spoil, reason):
    spoil(stored)
    code, out, err = stored.sweep(console, "--ambient", "23 °C")
    assert code == BAD_INPUT
    assert re.findall(r"^  (\d)\. ", err, re.MULTILINE) == ["1"]
    assert reason in err
    assert "bandproof thru" in err
    assert "sweep --without-thru" in err
    assert "Board" not in out
    assert not list(stored.folder.rglob("journal.txt"))
    assert "OUTPut:STATe ON" not in (stored.folder / "runs" / "1" / "1" / "exchange.log").read_text()


def test_all_reasons_are_told_at_once_and_without_it_the_sweep_is_made(stored, console):
    stored.change_thru(ambient=0.0, channels=[2, 1], started=older(stored, 24.0))
    code, _, err = stored.sweep(console, "--ambient", "-3.5 °C")
    assert code == BAD_INPUT
    assert re.findall(r"^  (\d)\. ", err, re.MULTILINE) == ["1", "2", "3"]
    assert "now at -3.5 °C" in err
    assert stored.sweep(console, "--without-thru")[0] == PASS
    assert read_run(stored.run_file(2)).thru is None


@pytest.mark.parametrize("ambient", ["25.9 °C", "20.1 °C", None])
def test_a_thru_holds_within_three_kelvin_or_where_nobody_says(stored, console, ambient):
    stored.change_thru(started=older(stored, 11.9))
    assert stored.sweep(console, *(("--ambient", ambient) if ambient else ()))[0] == PASS
    assert read_run(stored.run_file()).thru is not None


def test_the_bench_file_says_how_long_a_thru_holds(stored, console):
    stored.change("\nmains ", '\nthru_valid = "1 h"\nmains ')
    stored.change_thru(started=older(stored, 1.1))
    code, _, err = stored.sweep(console)
    assert code == BAD_INPUT
    assert "used for 1 h (thru_valid)" in err


SPOILT = {
    "a digit": (lambda text: re.sub(r'"ambient": 23.0', '"ambient": 24.0', text), "is damaged"),
    "cut": (lambda text: text[: len(text) // 2], "is no thru of this program"),
    "another schema": (lambda text: text.replace("bandproof-thru/1", "bandproof-thru/9"), "does not read"),
    "a list": (lambda text: "[1]", "is no thru of this program"),
}


@pytest.mark.parametrize(("spoil", "words"), SPOILT.values(), ids=SPOILT)
def test_a_thru_file_that_is_not_as_it_was_written_is_exit_2(stored, console, spoil, words):
    before = stored.thru.read_text()
    stored.thru.write_text(spoil(before))
    assert stored.thru.read_text() != before
    code, _, err = stored.sweep(console)
    assert code == BAD_INPUT
    assert f"{stored.thru}: 1 mistake" in err
    assert words in err
    assert not (stored.folder / "runs").exists()


# --- resumed, and what earlier versions left ---


class Told:
    """Progress that nobody looks at."""

    def __call__(self, *told):
        pass

    def close(self):
        pass


@pytest.fixture(scope="module")
def switched(one_band_text, tmp_path_factory):
    """A board, a bench, its world, and a thru measured an hour before."""
    board = parse_board(one_band_text, "one")
    bench = rehearsal_bench(board)
    world = world_of(board, bench, draw_parts(board, SEED), SEED, 1)
    with simulated(world, bench) as (reachable, clock):
        job = ThruJob(reachable, board, clock, Absent(), Stop(), Told(), None, ambient=23.0)
        return board, bench, world, job.carry_out().thru


def job_on(reachable, clock, board, folder, thru=None):
    return Job(
        board=board,
        bench=reachable,
        serial="1",
        attempt=1,
        run_id="one",
        folder=folder,
        clock=clock,
        operator=Absent(),
        stop=Stop(),
        progress=Told(),
        ambient=24.0,
        thru=thru,
        thru_path="my.thru.json",
    )


@pytest.fixture(scope="module")
def unbroken(switched, tmp_path_factory):
    """The folder of a run with a stored thru that nothing stopped."""
    board, bench, world, thru = switched
    folder = tmp_path_factory.mktemp("unbroken")
    with simulated(world, bench, t=3600.0) as (reachable, clock):
        job_on(reachable, clock, board, folder, thru).carry_out()
    return folder


def datasets(path):
    """Return every dataset of a run file by name."""
    found = {}

    def visit(name, item):
        if isinstance(item, h5py.Dataset):
            found[name] = (item.dtype.str, item[()].tobytes())

    with h5py.File(path, "r") as file:
        file.visititems(visit)
    return found


def lines_of(folder):
    lines = (folder / JOURNAL).read_bytes().splitlines(keepends=True)
    return [(json.loads(line[9:]), line) for line in lines]


@pytest.mark.parametrize("points", [0, 2, 9])
def test_a_run_with_a_stored_thru_is_resumed_to_the_same_run(switched, unbroken, tmp_path, points):
    board, _, world, _ = switched
    kept, count = b"", 0
    for entry, line in lines_of(unbroken):
        if entry["kind"] in ("point", "end") and count == points:
            break
        kept, count = kept + line, count + (entry["kind"] == "point")
    (tmp_path / JOURNAL).write_bytes(kept)
    with closing(Journal.opened(tmp_path)) as journal:
        assert len(journal.points) == points
        bench = board_and_bench(journal)[1]
        t = (journal.began[-1] if journal.began else journal.head["clock_start"]) - EARLIER
        with simulated(world, bench, t=t) as (reachable, clock):
            job_on(reachable, clock, board, tmp_path).go_on(journal)
    mine, theirs = datasets(tmp_path / "run.h5"), datasets(unbroken / "run.h5")
    assert mine.keys() == theirs.keys() >= {"texts/thru"}
    assert [name for name in mine if mine[name] != theirs[name]] in ([], ["history"])
    assert not [point for point in read_run(tmp_path / "run.h5").points if point.purpose == "thru"]


def test_a_thru_that_the_run_measured_itself_comes_beside_the_stored_one(unbroken):
    kept = read_run(unbroken / "run.h5")
    stored = kept.thru.points[0].ranges
    own = [replace(point, ranges=(stored[0], 77.0), time=9.0) for point in kept.thru.points]
    found = known_paths(replace(kept, points=(*kept.points, *own)))
    assert {ranges: path.time > 0.0 for ranges, path in found.items()} == {stored: False, (stored[0], 77.0): True}


def test_a_journal_and_a_run_file_without_ambient_and_thru_are_read(switched, unbroken, tmp_path, monkeypatch):
    (head, _), *others = lines_of(unbroken)
    del head["ambient"], head["thru"]  # as earlier versions wrote it
    text = to_json(head).encode()
    (tmp_path / JOURNAL).write_bytes(b"%08x %s\n" % (zlib.crc32(text), text) + b"".join(line for _, line in others))
    journal = Journal.peeked(tmp_path)
    assert (journal.head["ambient"], journal.head["thru"]) == (None, None)
    old = run_of(journal, None, "")
    assert (old.ambient, old.thru) == (None, None)
    monkeypatch.setattr(runfile, "ABOUT", [name for name in runfile.ABOUT if name != "ambient"])
    runfile.write_run(tmp_path / "old.h5", old, {})
    assert "texts/thru" not in datasets(tmp_path / "old.h5")
    assert read_run(tmp_path / "old.h5") == replace(old)


@pytest.mark.parametrize(
    "spoil",
    [
        lambda thru: thru.pop("started"),
        lambda thru: thru.update(started="yesterday"),
        lambda thru: thru.update(started="2026-01-01T00:00:00"),
        lambda thru: thru["conditions"].pop("channels"),
        lambda thru: thru["conditions"].update(probe_factors={"1": "ten"}),
        lambda thru: thru["conditions"].update(ambient="warm"),
        lambda thru: thru["points"][0].pop("response"),
    ],
)
def test_a_head_with_a_thru_that_is_none_is_no_journal(unbroken, tmp_path, spoil):
    (head, _), *_ = lines_of(unbroken)
    spoil(head["thru"])
    text = to_json(head).encode()
    (tmp_path / JOURNAL).write_bytes(b"%08x %s\n" % (zlib.crc32(text), text))
    with pytest.raises(BadInput, match="no whole first line"):
        Journal.peeked(tmp_path)
