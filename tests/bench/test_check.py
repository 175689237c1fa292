"""The check standard: measured like a board, charted, blocks the bench out of limits, is the row reproducibility."""

import json
import re
import statistics
from contextlib import closing
from dataclasses import replace
from datetime import datetime, timedelta
from math import inf, pi, sqrt
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import t as student

from bandproof.analysis.circuits import join
from bandproof.analysis.curve import network_figures
from bandproof.analysis.network import GROUND, Capacitor, Network, Resistor
from bandproof.analysis.uncertainty import Row
from bandproof.bench.bench_file import parse_bench, read_bench
from bandproof.bench.board_file import parse_board
from bandproof.bench.check_chart import lines_of, reproducibility, used
from bandproof.bench.check_file import Entry, add_sweep, append, read_history
from bandproof.bench.check_use import reason_against
from bandproof.bench.circuit import board_network, draw_parts, predict, predicted_response, stage_network
from bandproof.bench.errors import BadInput, FileMistakes
from bandproof.bench.evaluate import evaluate
from bandproof.bench.finish import board_and_bench
from bandproof.bench.job import Job
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.operator import Absent
from bandproof.bench.plain import checks_from, checks_plain
from bandproof.bench.pooling import _row
from bandproof.bench.rehearsal import DEMO_BENCH, demo_text, rehearsal_bench
from bandproof.bench.resumption import EARLIER
from bandproof.bench.runfile import digest_of, read_run
from bandproof.bench.stop import Stop
from bandproof.bench.types import QUANTITIES
from bandproof.bench.verbs.console import run
from bandproof.bench.verbs.rehearse import simulated, world_of
from bandproof.drivers.clock import create_clock_file
from bandproof.simulated_instruments.bench import start
from bandproof.simulated_instruments.imperfections import Imperfections

PASS, FAIL, BAD_INPUT, BENCH_FAULT, UNDECIDED = 0, 1, 2, 3, 4  # as documented in --help
SEED = 4
EPOCH = datetime.fromisoformat("2026-01-01T00:00:00+00:00")  # of the virtual clock
HOUR = 3600.0
# A series RC into a shunt RC, both of the same R and C (half of a Wien bridge): f0 = 1/(2 pi R C), and with
# H = 1/(3 + j(f/f0 - f0/f)) gain 1/3 and Q 1/3 (any handbook, by its impedances).
R, C = 1.6e3, 100e-9
F0 = 1 / (2 * pi * R * C)
STANDARD = """title = "Check standard"
drawing = "CS-1"
revision = "A"
limits = { input_maximum = "5 V" }
points.input = { node = "in" }
points.cs_out = { node = "cs_out" }
[stages.bridge]
kind = "band"
from = "input"
to = "cs_out"
design = { centre = "995 Hz", q = 0.3333, gain = "0.3333 V/V" }
tolerance = { centre = "2 %", q = "3 %", gain = "0.5 dB" }
circuit = "passive"
"""
NAME = "Check standard, CS-1, A (bridge: input to cs_out)"
CHECK = '\n[check]\nboard = "check.board.toml"\nevery = 20\nlongest_age = "12 h"\n'


def bridge(r=R):
    return Network(
        resistors=(Resistor("cs.R_1", "in", "cs.x", r), Resistor("cs.R_2", "cs_out", GROUND, r)),
        capacitors=(Capacitor("cs.C_1", "cs.x", "cs_out", C), Capacitor("cs.C_2", "cs_out", GROUND, C)),
        opamps=(),
    )


class Station:
    """A simulated bench in virtual time with a board and a check standard on its routes, and its files."""

    def __init__(self, folder, board_text):
        self.folder, self.server = folder, None
        self.file, self.history = folder / "my.bench.toml", folder / "my.check.jsonl"
        (folder / "my.board.toml").write_text(board_text)
        (folder / "check.board.toml").write_text(STANDARD)
        self.board = parse_board(board_text, "one")

    def serve(self, *, at=0.0, day=1, r=R, gain=(0.0, 0.0), has_table=True):
        """Start the bench `at` s, with its noise of a `day`, the standard's `r`, and errors of its channels' gain."""
        self.stop()
        bench = rehearsal_bench(self.board)
        create_clock_file(self.folder / "bench.time", at)
        world = world_of(self.board, bench, draw_parts(self.board, SEED), SEED, day)
        imperfections = Imperfections(output_resistance=50.0, adc_bits=8, noise=0.5, channel_gain=gain)
        network = join(board_network(self.board, draw_parts(self.board, SEED)), bridge(r), input="in")
        routes = {**world.routes, "109": "cs_out"}
        world = replace(world, network=network, routes=routes, imperfections=imperfections)
        self.server = start(replace(world, clock=str(self.folder / "bench.time")))
        text = bench.text.replace("\nmains ", '\nsimulated_clock = "bench.time"\nmains ')
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, f"TCPIP::127.0.0.1::{self.server.ports[role]}::SOCKET")
        text = re.sub(r"^thru .*\n", "", text, flags=re.MULTILINE)  # it would take the channels' errors away
        text = text.rstrip() + '\ncs_out = { channel = 2, route = "109" }\n'
        self.file.write_text(text + CHECK * has_table)
        return self

    def stop(self):
        if self.server is not None:
            self.server.stop()
            self.server = None


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


@pytest.fixture
def station(tmp_path, one_band_text):
    made = Station(tmp_path, one_band_text)
    yield made
    made.stop()


def check(console, station, *options):
    return console("check", station.file, *options)


def sweep(console, station, *options, serial="1"):
    place = ("--bench", station.file, "--serial", serial, "--folder", station.folder / "runs")
    return console("sweep", station.folder / "my.board.toml", *place, *options)


SPREAD = {"centre": 5e-4, "q": 7e-4, "gain": 6e-4}  # relative, of the days' histories below
DAYS = (0.3, -1.1, 0.8, -0.2, 1.3, -0.9, 0.1, -0.6)  # of these: up and down as chance would have it


def known(station, days=8, *, standard=NAME):
    """Write a history of so many checks an hour apart, the last an hour before the clock's epoch."""
    values = {"centre": F0, "q": 1 / 3, "gain": 1 / 3}
    for day in range(days):
        figures = {
            "bridge": {
                q: [v * (1 + SPREAD[q] * DAYS[(day + i) % 8]), 0.1 * v * SPREAD[q]]
                for i, (q, v) in enumerate(values.items())
            }
        }
        entry = Entry(
            number=day + 1,
            started=(EPOCH - timedelta(hours=days - day)).isoformat(timespec="seconds"),
            standard=standard,
            figures=figures,
            verdict="pass",
            accepted="",
            operator="Ann",
            ambient=23.0,
            note="",
            identities={"scope": "one"},
            run="run.h5",
            digest="0" * 64,
            version="0",
        )
        append(station.history, entry)
    return read_history(station.history).entries


# --- a passive network is measured like any band ---


def test_the_figures_are_those_of_the_bridge_by_its_impedances(station, console):
    station.serve()
    code, out, _ = check(console, station, "--json", "--ambient", "23 °C", "--operator", "Ann", "--note", "Mon")
    assert code == PASS, out
    found = json.loads(out)
    (entry,) = read_history(station.history).entries
    (result,) = evaluate(read_run(Path(found["files"]["run"])))
    true = {"centre": F0, "q": 1 / 3, "gain": 1 / 3}
    for quantity in QUANTITIES:
        figure = result.figures[quantity]
        assert figure.predicted == figure.designed
        assert abs(figure.measured - true[quantity]) < 4 * figure.standard_uncertainty, quantity
        assert entry.figures["bridge"][quantity] == [figure.measured, figure.repeatability]
    assert (entry.ambient, entry.operator, entry.note) == (23.0, "Ann", "Mon")
    assert entry.digest == digest_of(Path(found["files"]["run"]))
    assert entry.started == EPOCH.isoformat(timespec="seconds")


@pytest.mark.parametrize(("q", "gain"), [(0.34, 0.33), (0.9, 1.0), (4.0, 0.8), (12.0, 0.05)])
def test_the_circuit_that_stands_for_a_passive_one_has_its_designed_figures(q, gain):
    text = STANDARD.replace("q = 0.3333", f"q = {q}").replace("0.3333 V/V", f"{gain} V/V")
    board = parse_board(text, "standard")
    (stage,) = board.stages
    network = stage_network(board, stage)
    found = network_figures(network, node_in="in", node_out="cs_out", low=1.0, high=1e6)
    assert [float(found.f0[0]), float(found.q[0]), float(found.gain[0])] == pytest.approx([995.0, q, gain], rel=1e-4)
    assert predict(board, stage).q == q
    f = np.geomspace(100.0, 1e4, 31)
    by_hand = gain / (1 + 1j * q * (f / 995.0 - 995.0 / f))
    np.testing.assert_allclose(predicted_response(board, stage, f), by_hand, rtol=1e-12)


def test_a_passive_stage_takes_no_parts_and_its_board_needs_no_op_amp():
    with pytest.raises(FileMistakes, match=r"stages\.bridge\.parts: unknown key"):
        parse_board(STANDARD + 'parts = { R_in = "1 kΩ" }\n', "standard")
    with pytest.raises(FileMistakes, match="op_amp: missing"):
        parse_board(STANDARD.replace('"passive"', '"multiple-feedback"'), "standard")


# --- in and out of limits ---


def test_the_first_eight_checks_keep_the_declared_limits_and_say_that_these_are_provisional(station, console):
    station.serve()
    known(station, 7)
    code, out, _ = check(console, station)
    assert code == PASS
    assert "limits are provisional" in out
    assert "7 of the 8 checks" in out
    station.serve(at=HOUR, day=2)
    code, out, _ = check(console, station)
    assert code == PASS, out
    assert "about one check of a healthy bench in 100 leaves them" in out
    assert "made of the first 8 checks (2025-12-31 to 2026-01-01)" in out


def test_a_channel_that_drifted_leaves_the_chart_and_blocks_the_bench_until_a_check_is_in_order(station, console):
    station.serve()
    known(station)
    assert check(console, station)[0] == PASS
    assert sweep(console, station)[0] == PASS
    station.serve(at=HOUR, gain=(0.0, 0.01))  # 0.09 dB: within the declared 0.5 dB
    code, out, _ = check(console, station)
    assert code == FAIL
    assert re.search(r"OUT: gain of bridge is 0\.33\d+, outside its chart's 0\.33\d* to 0\.33\d*", out)
    assert "centre of bridge" not in out
    assert "Bench: OUT OF ORDER" in out
    code, _, err = sweep(console, station, serial="2")
    assert code == BAD_INPUT
    assert "its last check, 2026-01-01 01:00 UTC, was out of order (fail)" in err
    assert f"bandproof check {station.file}" in err
    assert not (station.folder / "runs" / "2").exists()
    station.serve(at=2 * HOUR)
    assert check(console, station)[0] == PASS
    assert sweep(console, station, serial="2")[0] == PASS


def test_a_standard_outside_its_declared_limits_is_out_without_a_chart(station, console):
    station.serve(r=1.05 * R)
    code, out, _ = check(console, station)
    assert code == FAIL
    assert re.search(
        r"OUT: centre of bridge is 947\.\d+, outside the 975\.1 to 1014\.9 that its board file declares", out
    )


def test_a_check_out_of_limits_is_no_part_of_the_limits(station, console):
    before = known(station)
    station.serve(gain=(0.0, 0.01))
    assert check(console, station)[0] == FAIL
    station.serve(at=HOUR)
    out = json.loads(check(console, station, "--json")[1])
    assert out["checks_before"] == 8
    values = [entry.figures["bridge"]["gain"][0] for entry in before]
    chart = out["stages"]["bridge"]["gain"]
    assert chart["centre_line"] == pytest.approx(statistics.mean(values), rel=1e-12)
    half = 4.53 * statistics.stdev(values) * sqrt(1 + 1 / 8)  # 4.53: JCGM 100, table G.2, 99.73 %, 7 degrees of freedom
    assert chart["upper_limit"] - chart["centre_line"] == pytest.approx(half, rel=1.2e-3)


def drawn_entries(draws):
    """Return checks whose figures are normal draws (checks, 3), in standard deviations of 0.06 % of each figure."""
    values = (F0, 1 / 3, 1 / 3)
    figures = [
        {q: [v * (1 + 6e-4 * x), 1e-6 * v] for q, v, x in zip(QUANTITIES, values, row, strict=True)} for row in draws
    ]
    blank = Entry(1, EPOCH.isoformat(), "", {}, "pass", "", "", None, "", {}, "", "", "")
    return [replace(blank, number=i, figures={"bridge": found}) for i, found in enumerate(figures, 1)]


def is_in(lines, entry):
    figures = entry.figures["bridge"]
    return all(line.limits.lower <= figures[q][0] <= line.limits.upper for (_, q), line in lines.items())


def healthy_bench(rng, board, checks):
    """Return the checks in order of a healthy bench, its chart, and of each check whether it was in order."""
    kept, told, lines, made_of = [], [], {}, -1
    for entry in drawn_entries(rng.normal(size=(checks, 3))):
        if made_of != min(len(kept), 20):
            lines, made_of = lines_of(board, kept), min(len(kept), 20)
        told.append(is_in(lines, entry))
        kept += [entry] * told[-1]
    return lines_of(board, kept), told


def test_a_healthy_bench_is_out_of_order_in_one_of_100_checks_whatever_the_chart_is_made_of():
    # README says about 1 of 100; the error of what 1500 benches say is taken from their own scatter
    rng, board, benches = np.random.default_rng(8), parse_board(STANDARD, "standard"), 1500
    told = np.array([healthy_bench(rng, board, 60)[1] for _ in range(benches)])
    assert told[:, :8].all()  # the declared tolerance
    for last in (9, 20, 60):
        rates = 1 - told[:, max(8, last - 10) : last].mean(axis=1)
        assert 0.005 < rates.mean() < 0.01 + 3 * rates.std() / sqrt(benches), last


@pytest.mark.parametrize(("checks", "shift", "power"), [(8, 10.0, 0.99), (20, 6.0, 0.95)])
def test_a_shift_of_one_figure_is_seen(checks, shift, power):
    # 1 % of a gain that scatters by 0.06 % is 17 standard deviations; 10 and 6 are seen, too
    rng, board, benches = np.random.default_rng(9), parse_board(STANDARD, "standard"), 400
    seen = 0
    for _ in range(benches):
        lines, _ = healthy_bench(rng, board, checks)
        (later,) = drawn_entries(rng.normal((0.0, 0.0, shift), size=(1, 3)))
        seen += not is_in(lines, later)
    assert seen / benches > power


def test_more_stages_of_a_standard_do_not_make_more_false_alarms():
    rng = np.random.default_rng(10)
    head, stage = STANDARD.split("[stages.bridge]")
    one = parse_board(STANDARD, "standard")
    four = parse_board(head + "".join(f"[stages.{name}]{stage}" for name in "abcd"), "standard")
    kept = drawn_entries(rng.normal(size=(8, 3)))
    kept_four = [replace(entry, figures=dict.fromkeys("abcd", entry.figures["bridge"])) for entry in kept]
    narrow, wide = lines_of(one, kept)["bridge", "q"].limits, lines_of(four, kept_four)["a", "q"].limits
    # 0.81 % / 3 and 0.81 % / 12 of Student's t with 7 degrees of freedom
    expected = student.isf(0.0081 / 24, 7) / student.isf(0.0081 / 6, 7)
    assert (wide.upper - wide.centre) / (narrow.upper - narrow.centre) == pytest.approx(expected, rel=1e-9)


def test_an_accepted_check_frees_the_bench_and_begins_a_new_chart(station, console):
    known(station)
    station.serve(gain=(0.0, 0.01))
    code, out, _ = check(console, station, "--accept", "scope adjusted")
    assert code == PASS
    assert "accepted, a new chart begins: scope adjusted" in out
    code, out, _ = sweep(console, station)
    assert code == PASS
    assert "note: the bench's last check was out of order and accepted: scope adjusted" in out
    kept = read_run(station.folder / "runs" / "1" / "1" / "run.h5")
    assert len(kept.checks.checks) == 1  # what was before tells nothing of the bench as it is
    station.serve(at=HOUR, day=2, gain=(0.0, 0.01))
    code, out, _ = check(console, station)
    assert code == PASS
    assert "1 of the 8 checks" in out


def test_a_check_in_order_is_not_marked_as_accepted(station, console):
    station.serve()
    code, out, _ = check(console, station, "--accept", "just so")
    assert code == PASS
    assert "note: the check was not marked as accepted: it is in order" in out
    assert read_history(station.history).entries[0].accepted == ""


def test_eight_checks_on_one_side_of_the_line_are_told(station, console):
    entries = known(station, 8)
    mean = statistics.mean(entry.figures["bridge"]["centre"][0] for entry in entries)
    for number in range(9, 16):
        figures = {"bridge": {**entries[0].figures["bridge"], "centre": [mean * (1 + 2e-4), 0.01]}}
        append(station.history, replace(entries[-1], number=number, figures=figures))
    # limits are of the first 20 checks, so the line moves a little towards them: the seven lie above it still
    station.serve(r=R * (1 - 3e-4))
    code, out, _ = check(console, station)
    assert code == PASS, out
    assert re.search(r"note: centre of bridge: the last \d+ checks lie above the centre line: a drift\?", out)


def test_table_and_charts_fit_80_columns_and_mark_what_is_out(station, console, capsys):
    known(station)
    station.serve(gain=(0.0, 0.01))
    run(["check", str(station.file)])
    out = capsys.readouterr().out
    folder = str(station.folder)
    assert [line for line in out.splitlines() if len(line) > 80 and folder not in line] == []
    table = [line for line in out.splitlines() if re.match(r" +\d+  20", line)]
    assert [line.split()[-1] for line in table] == ["in"] * 7 + ["OUT"]  # the last eight
    charts = {
        name: block.splitlines() for name, block in re.findall(r"^bridge, (\w+).*\n((?:.*\|.*\n)+)", out, re.MULTILINE)
    }
    assert charts.keys() == {"f0", "Q", "gain"}
    marks = {name: [line.split("|")[1].ljust(9) for line in lines] for name, lines in charts.items()}
    assert [sum(line[column] in "ox" for line in marks["gain"]) for column in range(9)] == [1] * 9
    assert "x" not in "".join(marks["f0"] + marks["Q"])
    top, *below = marks["gain"]  # the last check lies above the upper limit
    assert top == " " * 8 + "x"
    assert "x" not in "".join(below)


def test_the_verb_prints_what_readme_shows(station, capsys, monkeypatch):
    readme = (Path(__file__).parent.parent.parent / "README.md").read_text(encoding="utf-8")
    (shown,) = re.findall(r"^```text\n(check, UTC.*?)^```$", readme, re.MULTILINE | re.DOTALL)
    known(station)
    station.serve(gain=(0.0, 0.01))
    monkeypatch.chdir(station.folder)
    assert run(["check", "my.bench.toml"]) == FAIL
    out = capsys.readouterr().out
    parts = [part.strip("\n") for part in shown.split("...\n")]
    assert parts[0].splitlines()[0] in out
    for part in [*parts[0].splitlines(), *parts[1:]]:
        assert part in out
    assert max(map(len, shown.splitlines())) <= 80


def test_the_files_of_readme_are_read():
    readme = (Path(__file__).parent.parent.parent / "README.md").read_text(encoding="utf-8")
    (stage,) = re.findall(r"^```toml\n(\[stages.bridge\].*?)^```$", readme, re.MULTILINE | re.DOTALL)
    board = parse_board(STANDARD.partition("[stages")[0] + stage, "README.md")
    assert board.stages == parse_board(STANDARD, "standard").stages
    (table,) = re.findall(r"^```toml\n(\[check\].*?)^```$", readme, re.MULTILINE | re.DOTALL)
    plan = parse_bench(rehearsal_bench(board).text + table, "there/my.bench.toml").check
    assert (plan.board, plan.every, plan.longest_age) == (str(Path("there/check.board.toml")), 20, 12 * HOUR)


def test_two_attempts_do_not_lower_what_is_of_the_bench():
    common = ("t", 1.0, 0.5, 7, "scatter of checks")
    rows = [Row("reproducibility", "A", *common), Row("repeatability", "A", "normal", 1.0, 0.5, inf, "noise")]
    together = [_row([row, row], [0.5, 0.5], common=False) for row in rows]
    assert [row.contribution for row in together] == pytest.approx([0.5, 0.5 / sqrt(2)])
    assert together[0].dof == 7


# --- the bench is asked before a sweep ---


def test_a_bench_that_was_never_checked_sweeps_only_with_a_reason_that_is_kept(station, console):
    station.serve()
    code, _, err = sweep(console, station)
    assert code == BAD_INPUT
    assert "it was never checked" in err
    code, out, _ = sweep(console, station, "--without-check", "standard is at the calibrator")
    assert code == PASS
    reason = f"swept without a check of the bench (standard is at the calibrator); it was never checked: {NAME}"
    assert f"note: {reason}" in out
    assert reason in read_run(station.folder / "runs" / "1" / "1" / "run.h5").alarms


@pytest.mark.parametrize(
    ("at", "words"),
    [
        (11.1 * HOUR, "its last check is 12.1 h old, the bench file allows 12 h (longest_age)"),
        (-2 * HOUR, "later than now: look at the computer's clock"),
    ],
)
def test_a_last_check_of_another_time_is_refused(station, console, at, words):
    known(station)
    station.serve(at=at)
    code, _, err = sweep(console, station)
    assert code == BAD_INPUT
    assert words in err


def test_without_the_table_no_check_is_wanted_but_its_history_counts(station, console):
    known(station, 2)
    station.serve(at=99 * HOUR, has_table=False)
    code, out, _ = sweep(console, station)
    assert code == PASS
    assert "checks   2 of the bench" in out
    code, _, err = check(console, station)
    assert code == BAD_INPUT
    assert 'board = "check.board.toml"' in err
    assert check(console, station, "--board", station.folder / "check.board.toml")[0] == PASS


# --- the history file ---


def test_a_damaged_line_is_told_and_left_out(station, console):
    known(station)
    lines = station.history.read_bytes().splitlines(keepends=True)
    lines[3] = lines[3].replace(b'"ambient":23.0', b'"ambient":24.0')
    station.history.write_bytes(b"".join(lines))
    station.serve()
    code, out, _ = check(console, station)
    assert code == PASS
    assert "note: line 4 is damaged and left out" in out
    assert "7 of the 8 checks" in out


def test_a_line_that_was_taken_out_is_told(station):
    known(station)
    lines = station.history.read_bytes().splitlines(keepends=True)
    station.history.write_bytes(b"".join(lines[:3] + lines[4:]))
    history = read_history(station.history)
    assert len(history.entries) == 7
    assert history.damages == ("line 4 has check 5 behind check 3: lines are missing or doubled",)


def test_a_last_line_that_a_power_cut_tore_blocks_the_bench_and_the_next_check_stands_behind_it(station, console):
    known(station)
    station.history.write_bytes(station.history.read_bytes()[:-40])
    station.serve()
    code, _, err = sweep(console, station)
    assert code == BAD_INPUT
    assert "the last line of my.check.jsonl is damaged" in err
    assert check(console, station)[0] == PASS
    assert [entry.number for entry in read_history(station.history).entries] == [*range(1, 8), 8]
    code, out, _ = sweep(console, station)
    assert code == PASS
    assert "note: my.check.jsonl: line 8 is damaged and left out" in out


@pytest.mark.parametrize(
    "content", [b"\x00\xff\n", b"[1]\n", b'{"schema":"bandproof-check/9"}\n', b"[" * 90000 + b"\n"]
)
def test_a_file_that_is_no_history_is_exit_2_before_anything_is_measured(station, console, content):
    station.history.write_bytes(content)
    station.serve()
    code, _, err = check(console, station)
    assert code == BAD_INPUT
    assert "has no line that is a check of this program" in err
    assert not (station.folder / "my.checks").exists()


def test_checks_of_another_standard_are_told_and_not_used(station, console):
    known(station, standard="Another box (bridge: input to cs_out)")
    station.serve()
    code, out, _ = check(console, station)
    assert code == PASS
    assert "note: 8 earlier checks are of another standard and left out: Another box" in out
    assert "0 of the 8 checks" in out


# --- only the standard that [check] names speaks for the bench ---

OTHER = STANDARD.replace('drawing = "CS-1"', 'drawing = "CS-2"')


def test_a_check_of_another_standard_neither_frees_a_blocked_bench_nor_makes_its_row(station, console):
    entries = known(station)
    station.serve(gain=(0.0, 0.01))
    assert check(console, station)[0] == FAIL
    other = station.folder / "other.board.toml"
    other.write_text(OTHER)
    station.serve(at=HOUR, gain=(0.0, 0.01))
    code, out, err = check(console, station, "--board", other)
    assert code == UNDECIDED
    assert "note: my.bench.toml names check.board.toml in [check]: this check does not free the bench" in err
    assert f"OUT: it is the first check of this standard, and the last one of {NAME} was out of order" in out
    code, _, err = sweep(console, station)
    assert code == BAD_INPUT
    assert "was out of order" in err
    assert check(console, station, "--board", other, "--accept", "two boxes")[0] == PASS
    assert sweep(console, station)[0] == BAD_INPUT
    assert sweep(console, station, "--without-check", "tried")[0] == PASS
    kept = read_run(station.folder / "runs" / "1" / "1" / "run.h5")
    assert kept.checks == used(entries, NAME)


@pytest.mark.parametrize("blocked", [False, True])
def test_another_revision_of_the_standard_is_checked_first_and_frees_no_blocked_bench(station, console, blocked):
    entries = known(station)
    if blocked:
        append(station.history, replace(entries[-1], number=9, verdict="fail"))
    (station.folder / "check.board.toml").write_text(STANDARD.replace('revision = "A"', 'revision = "B"'))
    station.serve()
    code, _, err = sweep(console, station)
    assert code == BAD_INPUT
    assert "it was never checked: Check standard, CS-1, B (bridge: input to cs_out)" in err
    assert check(console, station)[0] == (UNDECIDED if blocked else PASS)
    assert sweep(console, station)[0] == (BAD_INPUT if blocked else PASS)


def test_a_later_check_of_another_standard_that_was_out_of_order_blocks_the_bench(station):
    entries = known(station)
    append(station.history, replace(entries[-1], number=9, standard="Another box", verdict="fail"))
    station.serve()
    reason = reason_against(read_bench(station.file).check, read_history(station.history), NAME, EPOCH)
    assert reason == "its last check, 2025-12-31 23:00 UTC, with Another box, was out of order (fail)"
    append(station.history, replace(entries[-1], number=10))
    assert reason_against(read_bench(station.file).check, read_history(station.history), NAME, EPOCH) == ""


def test_a_board_with_an_amplifier_is_no_check_standard(station, console):
    station.serve()
    code, _, err = check(console, station, "--board", station.folder / "my.board.toml")
    assert code == BAD_INPUT
    assert 'is no check standard: low is not of circuit = "passive"' in err
    assert not (station.folder / "my.checks").exists()


# --- every so many sweeps ---


def test_after_every_so_many_sweeps_a_check_is_wanted(station, console):
    known(station)
    station.serve()
    station.file.write_text(station.file.read_text().replace("every = 20", "every = 2"))
    assert sweep(console, station, serial="1")[0] == PASS
    assert sweep(console, station, serial="2")[0] == PASS
    code, _, err = sweep(console, station, serial="3")
    assert code == BAD_INPUT
    assert "2 sweeps were begun since its last check, the bench file allows 2 (every)" in err
    assert f"bandproof check {station.file}" in err
    assert not (station.folder / "runs" / "3").exists()
    code, out, _ = sweep(console, station, "--without-check", "one more", serial="3")
    assert code == PASS
    assert "note: swept without a check of the bench (one more); 2 sweeps were begun" in out
    history = read_history(station.history)
    assert (history.sweeps, history.damages) == ((8, 8, 8), ())
    assert check(console, station)[0] == PASS
    assert sweep(console, station, "--retest", "counts, too", serial="3")[0] == PASS
    assert read_history(station.history).sweeps == (8, 8, 8, 9)


def test_sweeps_count_since_the_last_check_of_the_standard_that_is_named(station):
    entries = known(station)
    station.serve()
    plan = replace(read_bench(station.file).check, every=3)

    def reason():
        return reason_against(plan, read_history(station.history), NAME, EPOCH)

    for _ in range(2):
        add_sweep(station.history, "1", 1, EPOCH.isoformat())
    append(station.history, replace(entries[-1], number=9, standard="Another box"))
    assert reason() == ""
    add_sweep(station.history, "1", 1, EPOCH.isoformat())
    assert reason() == "3 sweeps were begun since its last check, the bench file allows 3 (every)"
    append(station.history, replace(entries[-1], number=10))
    assert reason() == ""


def test_a_torn_line_of_a_sweep_wants_a_check_and_the_lines_behind_it_count(station):
    known(station)
    add_sweep(station.history, "1", 1, EPOCH.isoformat())
    station.history.write_bytes(station.history.read_bytes()[:-9])
    add_sweep(station.history, "2", 1, EPOCH.isoformat())
    history = read_history(station.history)
    assert history.sweeps == (8,)
    assert history.damages == ("line 9 is damaged and left out",)
    assert history.ends_damaged  # it may have been a check
    append(station.history, replace(history.entries[-1], number=9))
    assert not read_history(station.history).ends_damaged


def test_a_history_that_cannot_be_written_ends_the_sweep_before_it_is_measured(station, console, monkeypatch):
    known(station)
    station.serve()

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("bandproof.bench.check_use.add_sweep", full)
    code, _, err = sweep(console, station)
    assert code == BENCH_FAULT
    assert "my.check.jsonl cannot be written (No space left on device): it counts the sweeps" in err
    assert not (station.folder / "runs" / "1" / "1" / JOURNAL).exists()


# --- a check that was cut short ---


def test_a_resumed_check_is_kept_in_the_history_once(station, console):
    entries = known(station)
    station.serve()
    assert check(console, station)[0] == PASS
    place = station.folder / "my.checks" / "check" / "1"
    lines = (place / JOURNAL).read_bytes().splitlines(keepends=True)
    points = [i for i, line in enumerate(lines) if json.loads(line[9:])["kind"] == "point"]
    for file in place.iterdir():
        file.unlink()
    (place / JOURNAL).write_bytes(b"".join(lines[: points[6]]))
    station.history.unlink()
    known(station)
    code, out, err = console("resume", station.folder / "my.checks")
    assert code == PASS, err
    assert "Bench: IN ORDER" in out
    (added,) = read_history(station.history).entries[len(entries) :]
    assert (added.number, added.started, added.verdict) == (9, EPOCH.isoformat(timespec="seconds"), "pass")
    assert added.digest == digest_of(place / "run.h5")
    code, _, err = console("resume", station.folder / "my.checks")
    assert code == BAD_INPUT
    assert "nothing to resume" in err
    assert len(read_history(station.history).entries) == 9


# --- the files to begin with ---


def test_the_table_that_begin_writes_as_a_comment_is_that_of_readme(station):
    text = demo_text(DEMO_BENCH)
    assert parse_bench(text, "my.bench.toml").check is None
    (table,) = re.findall(r"^# \[check\].*\n(?:# .*\n)+", text, re.MULTILINE)
    plan = parse_bench(text.replace(table, table.replace("# ", "", 1).replace("\n# ", "\n")), "my.bench.toml").check
    assert plan == parse_bench(text + CHECK, "my.bench.toml").check


# --- the row reproducibility ---


def rows_of(stages):
    return {quantity: stages[0].budgets[quantity].rows[2] for quantity in QUANTITIES}


def test_eight_checks_make_the_row_reproducibility_and_a_fit_gives_the_same_budget(station, console):
    entries = known(station)
    station.serve()
    assert sweep(console, station)[0] == PASS
    path = station.folder / "runs" / "1" / "1" / "run.h5"
    station.history.unlink()  # the run file stands alone
    kept = read_run(path)
    assert kept.checks == used(entries, NAME)
    stages = evaluate(kept)
    for quantity, row in rows_of(stages).items():
        values = [entry.figures["bridge"][quantity][0] for entry in entries]
        expected = statistics.stdev(values) / statistics.mean(values) * stages[0].figures[quantity].measured
        assert (row.name, row.type, row.distribution, row.dof) == ("reproducibility", "A", "t", 7)
        assert row.contribution == pytest.approx(expected, rel=1e-9)
        assert "8 checks of the bench, 2025-12-31 to 2025-12-31" in row.reason
    without = evaluate(replace(kept, checks=None))
    assert all(row.contribution == 0.0 for row in rows_of(without).values())
    u = {q: (stages[0].figures[q].standard_uncertainty, without[0].figures[q].standard_uncertainty) for q in QUANTITIES}
    for quantity, row in rows_of(stages).items():
        assert u[quantity][0] == pytest.approx(sqrt(u[quantity][1] ** 2 + row.contribution**2), rel=1e-9)
    code, out, _ = console("fit", path, "--budget")
    assert code == PASS
    assert "checks of the bench" in out
    refit = json.loads(path.with_name("run.refit-1.json").read_text())["result"]
    for quantity in QUANTITIES:
        assert refit["stages"][0]["parameters"][quantity]["standard_uncertainty"] == u[quantity][0]


@pytest.mark.parametrize("days", [1, 7])
def test_fewer_checks_make_no_row_and_say_so(station, days):
    reason, spreads, _ = reproducibility(used(known(station, days), NAME))
    assert spreads is None
    assert reason == f"0, because the bench has {days} of the 8 checks it takes: U does not hold it"


def test_of_several_stages_the_one_that_scatters_most_counts(station):
    history = used(known(station), NAME)
    first = [check.figures["bridge"] for check in history.checks]
    wide = [{q: (v * (1 + 0.001 * (-1) ** i), u) for q, (v, u) in found.items()} for i, found in enumerate(first)]
    both = [replace(c, figures={"a": f, "b": w}) for c, f, w in zip(history.checks, first, wide, strict=True)]
    _, spreads, dof = reproducibility(replace(history, checks=tuple(both)))
    values = [found["q"][0] for found in wide]
    assert spreads["q"] == pytest.approx(statistics.stdev(values) / statistics.mean(values), rel=1e-12)
    assert dof == 7


def test_a_resumed_run_keeps_the_checks_it_began_with(station, tmp_path, one_band_text):
    board = parse_board(one_band_text, "one")
    bench = rehearsal_bench(board)
    world = world_of(board, bench, draw_parts(board, SEED), SEED, 1)
    history = used(known(station), NAME)

    def job(reachable, clock, folder, checks):
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
            checks=checks,
        )

    whole, cut = tmp_path / "whole", tmp_path / "cut"
    whole.mkdir()
    cut.mkdir()
    with simulated(world, bench) as (reachable, clock):
        job(reachable, clock, whole, history).carry_out()
    lines = (whole / JOURNAL).read_bytes().splitlines(keepends=True)
    points = [i for i, line in enumerate(lines) if json.loads(line[9:])["kind"] == "point"]
    (cut / JOURNAL).write_bytes(b"".join(lines[: points[6]]))
    with closing(Journal.opened(cut)) as journal:
        bench = board_and_bench(journal)[1]
        with simulated(world, bench, t=journal.began[-1] - EARLIER) as (reachable, clock):
            job(reachable, clock, cut, None).go_on(journal)
    mine, theirs = read_run(cut / "run.h5"), read_run(whole / "run.h5")
    assert mine.checks == theirs.checks == history
    assert rows_of(evaluate(mine)) == rows_of(evaluate(theirs))
    assert rows_of(evaluate(mine))["q"].dof == 7


class Told:
    """Progress that nobody looks at."""

    def __call__(self, *told):
        pass

    def close(self):
        pass


@pytest.mark.parametrize(
    "spoil",
    [
        lambda plain: plain.pop("standard"),
        lambda plain: plain["checks"][0].update(started="2026-01-01T00:00:00"),
        lambda plain: plain["checks"][0]["figures"]["bridge"].pop("q"),
        lambda plain: plain["checks"][0]["figures"]["bridge"].update(q=["a", 1.0]),
    ],
)
def test_a_history_in_a_journals_head_that_is_none_is_refused(station, spoil):
    plain = json.loads(json.dumps(checks_plain(used(known(station, 1), NAME))))
    assert checks_from(plain) == used(read_history(station.history).entries, NAME)
    spoil(plain)
    with pytest.raises((KeyError, TypeError, ValueError)):
        checks_from(plain)


def test_mistakes_of_the_table_are_told_with_the_others(station):
    station.serve()
    text = station.file.read_text()
    station.file.write_text(
        text.replace('longest_age = "12 h"', 'longest_age = "12"').replace("every = 20", "evry = 20")
    )
    with pytest.raises(BadInput) as told:
        read_bench(station.file)
    assert "check.longest_age" in str(told.value)
    assert "check.evry: unknown key" in str(told.value)
