"""The budget: which rows there are, that each says why, and that each moves with what it is made of."""

import json
import re
from dataclasses import replace
from math import pi, sqrt

import h5py
import numpy as np
import pytest

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.uncertainty import share
from bandproof.bench.bench_file import parse_bench
from bandproof.bench.budget import budget_plain, budgets, dominating
from bandproof.bench.evaluate import evaluate_stage, fit_points
from bandproof.bench.rehearsal import demo_board
from bandproof.bench.sources import Measured, Source, sources
from bandproof.bench.summary import budget_lines, dominating_lines
from bandproof.bench.thru import paths
from bandproof.bench.types import QUANTITIES, Temperature, Wire
from tests.benchmarks._direct import measured
from tests.benchmarks.coverage import CASES, bench_of, world

# Every source a bench of this kind has (common practice), in the order they are to be read.
EVERY_ROW = [
    *("repeatability", "reseating", "reproducibility", "thru", "drift", "range to range", "compensation"),
    *("tap loading", "coupling corners", "channel skew", "linearity in", "linearity out", "hum", "settling"),
    *("generator", "temperature", "controls", "misfit", "channel gain", "source level", "definition"),
]
# Stages of the demo board: 160 Hz, where hum is fitted with every record; 1 kHz, half and half; 6.3 kHz, without
LOW, MIDDLE, HIGH = 0, 2, 4
# JCGM 100, 4.3.7: a uniform error of half-width a has u = a/sqrt(3), so the difference of two of them a sqrt(2/3)
ONE, TWO = 1 / sqrt(3), sqrt(2 / 3)
FLAT = {"channel gain", "range to range"}  # rows that are common to all points


class Case:
    """A stage of a simulated bench as measured, whose facts can be changed."""

    def __init__(self, number, seed=6):
        board = demo_board()
        self.board = replace(board, stages=(board.stages[number],))
        self.bench = bench_of(self.board, CASES["declared"])
        found = measured(self.board, self.bench, world(self.board, self.bench, CASES["declared"], seed))
        assert not found.stopped
        self.points, self.stage = found.points, self.board.stages[0]
        self.known, self.ambient, self.shifts = paths(found.points), None, {}
        self.of_stage = [point for point in self.points if point.stage == self.stage.name]

    def but(self, **facts):
        """Return the same stage with other facts: any attribute, or a figure of the bench's accuracy."""
        other = object.__new__(Case)
        other.__dict__.update(self.__dict__)
        for name, value in facts.items():
            if hasattr(other, name):
                setattr(other, name, value)
            else:
                accuracy = replace(other.bench.accuracy, **{name: value})
                other.bench = replace(other.bench, accuracy=accuracy)
        return other

    def told(self):
        """Return the stage as measured and its sources."""
        found = fit_points(self.of_stage, self.known)
        quiet = next((point for point in self.of_stage if point.purpose == "no-signal"), None)
        seen = Measured(
            self.board,
            self.bench,
            self.stage,
            found.points,
            found.covariance,
            found.paths,
            found.fit,
            quiet,
            self.shifts,
            self.ambient,
        )
        return seen, sources(seen)

    def budgets(self):
        return budgets(*self.told())

    def row(self, name, quantity="gain"):
        """Return a row with its size as a share of the figure."""
        seen, listed = self.told()
        value = {"centre": seen.fit.f0[0], "q": seen.fit.q[0], "gain": abs(seen.fit.gain[0])}[quantity]
        (row,) = [row for row in budgets(seen, listed)[quantity].rows if row.name == name]
        return row, row.contribution / value

    def by(self, route, by_hand=False):
        """Return the same stage with its output tap wired otherwise."""
        wires = {**self.bench.wires, self.stage.tap_out: Wire(2, route, by_hand)}
        return self.but(bench=replace(self.bench, wires=wires))

    def behind(self, resistance):
        """Return the same stage with a resistance between its output and the tap."""
        tap = self.stage.tap_out
        there = {**self.board.points, tap: replace(self.board.points[tap], source_resistance=resistance)}
        return self.but(board=replace(self.board, points=there))

    def result(self):
        return evaluate_stage(self.board, self.bench, self.stage, self.of_stage, self.known, self.ambient)


@pytest.fixture(scope="module")
def low():
    return Case(LOW)


@pytest.fixture(scope="module")
def high():
    return Case(HIGH)


def variations(case):
    """Return a case with everything that makes rows come and go."""
    ranges = case.of_stage[-1].ranges
    yield case
    yield case.but(known={})
    yield case.but(known={(ranges[0], 2 * ranges[1]): case.known[ranges]})
    yield case.by(None)
    yield case.by(None, by_hand=True)
    yield case.behind(1e3)
    yield case.but(of_stage=[point for point in case.of_stage if point.purpose != "no-signal"])
    yield case.but(board=replace(case.board, temperature=Temperature(23.0, 1e-4)))
    yield case.but(shifts={"centre": 0.1, "q": 0.001, "gain": 0.002})
    # a bench file may state that something is nothing at all
    yield case.but(known={}, linearity=0.0, range_gain=0.0, drift=0.0, reseating=0.0, probe_compensation=0.0)
    yield case.but(channel_gain=0.0, generator_frequency=0.0, linearity=0.0, drift=0.0, reseating=0.0)
    yield case.but(board=replace(case.board, temperature=Temperature(23.0, 0.0)))


@pytest.mark.parametrize("name", ["low", "high"])
def test_every_row_is_in_every_budget_in_its_order_and_a_zero_says_why(request, name):
    for case in variations(request.getfixturevalue(name)):
        for budget in case.budgets().values():
            assert [row.name for row in budget.rows] == EVERY_ROW
            for row in budget.rows:
                assert row.reason
                assert row.reason.startswith("0, because ") == (row.contribution == 0.0), (row.name, row.reason)
            assert sum(share(row, budget) for row in budget.rows) == pytest.approx(1.0)


def test_a_source_without_a_reason_cannot_enter_a_budget(low):
    seen, listed = low.told()
    for source in (Source("bare", ""), Source("bare", "", 0.1, direct={"gain": 1.0})):
        with pytest.raises(ValueError, match="row 'bare': reason is empty"):
            budgets(seen, [*listed, source])


def test_a_thru_takes_the_place_of_what_is_declared_about_the_path(high):
    without = high.but(known={}, channel_gain=0.02, range_gain=0.004, probe_compensation=0.03)
    assert without.row("channel gain")[1] == pytest.approx(TWO * 0.02, rel=1e-6)
    assert without.row("range to range")[1] == pytest.approx(TWO * 0.004, rel=1e-6)
    # far above the corner of 1.5 kHz a wrong division is nearly a gain: 0.95 of it at 6.3 kHz, x²/(1 + x²)
    x = 6.3 / 1.5
    assert without.row("compensation")[1] == pytest.approx(TWO * 0.03 * x**2 / (1 + x**2), rel=0.05)
    assert without.row("compensation", "q")[1] > 0.0
    assert "no thru on these ranges" in without.row("thru")[0].reason
    for name in ("channel gain", "range to range", "compensation"):
        row, size = high.row(name)
        assert size == 0.0
        assert "thru" in row.reason
    row, size = high.row("thru")
    assert row.type == "A"
    assert 0.0 < size < 0.1 * without.row("channel gain")[1]


def test_a_thru_on_other_ranges_is_no_thru(high):
    (ranges,) = {point.ranges for point in high.of_stage if point.purpose == "curve"}
    other = high.but(known={(ranges[0], 2 * ranges[1]): high.known[ranges]})
    assert other.row("range to range")[1] > 0.0
    assert other.row("channel gain")[1] > 0.0
    assert other.row("thru")[1] == 0.0


def test_the_thrus_own_noise_is_a_row(high):
    (_, size), louder = high.row("thru"), []
    for path in high.known.values():
        louder.append(replace(path, fit=replace(path.fit, covariance=4.0 * path.fit.covariance)))
    assert high.but(known=dict(zip(high.known, louder, strict=True))).row("thru")[1] == pytest.approx(2 * size)


def test_the_thrus_noise_counts_as_drawn_thrus_make_the_figures_scatter(high):
    (path,) = set(fit_points(high.of_stage, high.known).paths)
    found, count = fit_points(high.of_stage, high.known), 1000
    unit = np.sqrt(np.diag(path.fit.covariance))
    scaled = path.fit.covariance / np.outer(unit, unit)
    drawn = unit * np.random.default_rng(3).multivariate_normal(np.zeros(4), scaled, count)
    response = found.response / np.exp(drawn @ path.fit.basis(found.frequency))
    fits = fit_bands(
        np.broadcast_to(found.frequency, response.shape),
        response,
        np.broadcast_to(found.covariance, (count, *found.covariance.shape)),
    )
    for quantity, values in (("centre", fits.f0), ("q", fits.q), ("gain", np.abs(fits.gain))):
        row, _ = high.row("thru", quantity)
        assert row.contribution == pytest.approx(values.std(), rel=4 / sqrt(2 * count))


def test_a_contact_made_anew_counts_once_or_twice_and_a_fixed_one_never(low):
    for wired in (low, low.by(None, by_hand=True)):
        row, size = wired.but(reseating=0.01).row("reseating")
        assert size == pytest.approx(TWO * 0.01, rel=1e-6)  # once for the stage, once for the thru
        assert "2 contacts" in row.reason
        row, size = wired.but(known={}, reseating=0.01).row("reseating")
        assert size == pytest.approx(ONE * 0.01, rel=1e-6)
        assert row.distribution == "uniform"
    assert "was not moved" in low.by(None).row("reseating")[0].reason


def test_a_tap_behind_a_resistance_is_loaded_by_the_probe(low):
    load = low.behind(1e3).but(probe_resistance=1e6, probe_capacitance=100e-12)
    at_f0 = 1e3 * abs(1e-6 + 2j * pi * 160 * 100e-12)  # R over the probe's impedance, by hand
    assert load.row("tap loading")[1] == pytest.approx(ONE * at_f0, rel=0.01)
    assert load.but(probe_resistance=1e7).row("tap loading")[1] == pytest.approx(ONE * 1e-4, rel=0.05)
    assert "driven without a resistance" in low.row("tap loading")[0].reason


def test_hum_counts_where_it_is_not_fitted(low, high):
    assert "fitted with every record" in low.row("hum")[0].reason
    quiet = next(point for point in high.of_stage if point.purpose == "no-signal")
    others = [point for point in high.of_stage if point is not quiet]
    assert "nothing was recorded" in high.but(of_stage=others).row("hum")[0].reason

    def with_hum(volts):
        return high.but(of_stage=[replace(quiet, residuals=(0.0, volts)), *others]).row("hum")

    assert "shows none" in with_hum(0.5 * quiet.lsb[1])[0].reason
    (_, once), (_, twice) = with_hum(0.1), with_hum(0.2)
    assert twice == pytest.approx(2 * once, rel=0.1)
    middle = Case(MIDDLE)
    quiet = next(point for point in middle.of_stage if point.purpose == "no-signal")
    loud = [replace(quiet, residuals=(0.1, 0.1)), *(point for point in middle.of_stage if point is not quiet)]
    seen, listed = middle.but(of_stage=loud).told()
    (hum,) = [source for source in listed if source.name == "hum"]
    counted = [bool(hum.shapes[:, i].any()) for i in range(len(seen.points))]
    assert counted == [point.frequency >= 1e3 for point in seen.points]
    assert set(counted) == {True, False}


def test_the_row_for_hum_is_as_large_as_what_hum_does_to_sine_fits(high):
    """Outside: records with a mains sine of any phase, fitted by numpy's linear least squares."""
    quiet = next(point for point in high.of_stage if point.purpose == "no-signal")
    rms = 0.1
    others = [point for point in high.of_stage if point is not quiet]
    seen, listed = high.but(of_stage=[replace(quiet, residuals=(0.0, rms)), *others]).told()
    (hum,) = [source for source in listed if source.name == "hum"]
    phase = 2 * pi * np.arange(360) / 360
    for i, point in enumerate(seen.points):
        t = point.sample_interval * np.arange(point.samples)
        turn = 2 * pi * point.frequency * t
        columns = np.stack([np.cos(turn), np.sin(turn), np.ones_like(t)], axis=1)
        found = np.linalg.lstsq(columns, sqrt(2) * rms * np.cos(2 * pi * 50 * t[:, None] + phase), rcond=None)[0]
        there = np.sqrt((found[:2] ** 2).sum(axis=0).mean()) / point.levels[1]
        # a slope is not quite a sine, three cycles not quite whole: 5 % of the row, arbitrary
        assert hum.u * np.abs(hum.shapes[:, i]).max() == pytest.approx(there, rel=0.05)


def test_the_room_and_the_misfit_are_rows_of_their_own(low):
    board = replace(low.board, temperature=Temperature(20.0, 1e-4))
    warm = low.but(board=board, ambient=25.0)
    assert warm.row("temperature", "centre")[1] == pytest.approx(ONE * 1e-4 * 6.0)  # 1 K of the board in its room
    assert "moves f0 alone" in warm.row("temperature")[0].reason
    fit = fit_points(low.of_stage, low.known).fit
    moved = low.but(shifts={"centre": 0.2, "q": -0.01, "gain": 0.0})
    assert moved.row("misfit", "centre")[1] == pytest.approx(ONE * 0.2 / fit.f0[0])
    assert moved.row("misfit", "q")[1] == pytest.approx(ONE * 0.01 / fit.q[0])


def test_the_generator_is_what_f0_is_traceable_to(low):
    stated = low.but(generator_frequency=50e-6)
    assert stated.row("generator", "centre")[1] == pytest.approx(ONE * 50e-6)
    assert stated.row("generator")[1] == 0.0


def test_what_lands_in_gain_alone_says_so_in_the_others(high):
    for name in FLAT:
        for quantity in ("centre", "q"):
            row, size = high.but(known={}).row(name, quantity)
            assert size == 0.0
            assert "wholly in gain" in row.reason


def test_a_drift_counts_from_the_thru(low):
    (row, size) = low.but(drift=1e-5).row("drift")
    (path,) = set(fit_points(low.of_stage, low.known).paths)
    since = np.abs(np.mean([point.time for point in fit_points(low.of_stage).points]) - path.time)
    assert size == pytest.approx(TWO * 1e-5 * since, rel=0.3)  # the points are not all as old
    assert f"{since:.0f}"[0] in row.reason
    later = {ranges: replace(path, time=path.time - 100.0) for ranges, path in low.known.items()}
    assert low.but(drift=1e-5, known=later).row("drift")[1] == pytest.approx(TWO * 1e-5 * 100.0, rel=0.1)
    # no channel drifts further than its gain is accurate, however old the thru
    ancient = {ranges: replace(path, time=-1e9) for ranges, path in low.known.items()}
    assert low.but(drift=1e-5, known=ancient).row("drift")[1] == pytest.approx(TWO * 0.015, rel=1e-6)


STATED = {
    "channel_skew": "scope",
    "linearity": "scope",
    "range_accuracy": "scope",
    "drift": "scope",
    "reseating": "probes",
    "compensation": "probes",
}
ROWS_STATED = {  # row: what the bench file would say of it, with the careful default
    "reseating": 'reseating = "0.5 %" in [probes]',
    "drift": 'drift = "0.1 %/min" in [scope]',
    "range to range": 'range_accuracy = "2 %" in [scope]',
    "linearity in": 'linearity = "0.5 LSB" in [scope]',
    "linearity out": 'linearity = "0.5 LSB" in [scope]',
}


def test_what_a_bench_file_leaves_out_is_a_careful_default_and_says_so(low):
    text = low.bench.text
    for key in STATED:
        assert re.search(rf"^{key} = ", text, re.MULTILINE), key
        text = re.sub(rf"^{key} = .*\n", "", text, flags=re.MULTILINE)
    bare = low.but(bench=parse_bench(text, "bare"), known={})
    said = low.but(bench=parse_bench(low.bench.text, "full"), known={})
    for name, line in ROWS_STATED.items():
        assert f"not declared, a careful default ({line})" in bare.row(name)[0].reason
        assert "declared in the bench file" in said.row(name)[0].reason
        assert "not declared" not in said.row(name)[0].reason
        # careful: no smaller than what a bench in good order declares, here that of the demo
        assert bare.row(name)[1] >= said.row(name)[1] > 0.0
    assert "probes of factor 1" in bare.row("compensation")[0].reason
    ten = parse_bench(text.replace("channel_2 = 1\n", "channel_2 = 10\n"), "ten")
    row, size = low.but(bench=ten, known={}).row("compensation", "q")
    assert size > 0.0
    assert "not declared" in row.reason


# --- how it is told ---


def test_the_whole_budget_is_told_in_80_columns_with_the_largest_row_marked(high):
    for case in variations(high):
        result = replace(case.result(), name="a_stage_whose_name_is_as_long_as_a_name_may_be_and_longer_than_most")
        lines = budget_lines(result)
        assert max(map(len, lines)) <= 80, max(lines, key=len)
        lines = lines[next(i for i, line in enumerate(lines) if line.startswith("source ")) + 1 :]
        assert "".join(lines).count("*") == 3
        heads = [line[:17].strip() for line in lines if line[:1].strip()]
        assert heads[: len(EVERY_ROW)] == EVERY_ROW
        for i, quantity in enumerate(QUANTITIES):
            budget = result.budgets[quantity]
            largest = max(budget.rows, key=lambda row: row.contribution)
            (marked,) = [line[:17].strip() for line in lines if line[31 + 10 * i : 41 + 10 * i].endswith("*")]
            assert marked == largest.name


def test_a_budget_adds_up_as_it_is_printed(high):
    lines = budget_lines(high.result())
    for i in range(3):
        cells = {
            line[:31].strip(): line[31 + 10 * i : 40 + 10 * i] for line in lines[3:] if line[31 + 10 * i :].strip()
        }
        numbers = {name: float(cell) for name, cell in cells.items() if re.fullmatch(r" *\d+\.\d+", cell)}
        u, expanded, k = numbers.pop("u, combined"), numbers.pop("U, 95.45 %"), numbers.pop("coverage factor U / u")
        # every number is rounded to 5e-5 %
        assert sqrt(sum(number**2 for number in numbers.values())) == pytest.approx(u, abs=3e-4)
        assert k * u == pytest.approx(expanded, abs=0.01 * expanded + 1e-4)


def test_a_stage_without_a_fit_has_no_budget(low):
    result = low.but(of_stage=low.of_stage[:3]).result()
    assert (budget_lines(result), dominating_lines([result])) == ([], [])


def test_the_largest_row_is_shown_with_every_result(low, high):
    stages = [low.result(), high.but(known={}).result()]
    long = replace(stages[0], name="a_stage_whose_name_is_as_long_as_a_name_may_be_and_longer_than_most")
    lines = dominating_lines([*stages, long])
    assert max(map(len, lines)) <= 80
    told = [line for line in lines if "%" in line]
    for stage, line in zip([*stages, long], told, strict=True):
        cells = re.findall(r"  ([a-z][a-z ]*[a-z]) (\d+) %", line.removeprefix(stage.name))
        assert len(cells) == 3
        for (name, percent), quantity in zip(cells, QUANTITIES, strict=True):
            rows = {row.name: row.contribution for row in stage.budgets[quantity].rows}
            assert rows[name] == max(rows.values())
            assert int(percent) == pytest.approx(100 * rows[name] ** 2 / sum(u**2 for u in rows.values()), abs=0.5)
            assert dominating(stage.budgets[quantity]).name == name
    assert "channel gain" in told[1]  # what is declared about the channels is most of it without a thru


def test_the_run_file_keeps_every_row_for_anybody(outcome):
    with h5py.File(outcome.folder / "run.h5") as file:
        kept = json.loads(bytes(file["budget"][()]))  # UTF-8, as its attribute says
        assert file["budget"].attrs["encoding"] in ("utf-8", b"utf-8")
    assert set(kept) == {stage.name for stage in outcome.stages}
    for stage in outcome.stages:
        assert set(kept[stage.name]) == set(QUANTITIES)
        for quantity, budget in stage.budgets.items():
            rows = kept[stage.name][quantity]
            assert [row["source"] for row in rows] == EVERY_ROW
            assert rows == json.loads(json.dumps(budget_plain(stage.budgets)[quantity]))
            for row, ours in zip(rows, budget.rows, strict=True):
                assert row["contribution"] == abs(row["sensitivity"]) * row["standard_uncertainty"]
                assert (row["type"], row["distribution"], row["reason"]) == (ours.type, ours.distribution, ours.reason)
                assert row["degrees_of_freedom"] is None
            figure = stage.figures[quantity]
            total = sqrt(sum(row["contribution"] ** 2 for row in rows))
            assert total == pytest.approx(figure.standard_uncertainty, rel=1e-12)
