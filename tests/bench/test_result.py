"""What a run concludes, as an object and as lines for people (result, summary, evaluate)."""

import json
import math
import re
from dataclasses import replace

import pytest

from bandproof.bench.evaluate import evaluate, fit_points, usable
from bandproof.bench.result import board_verdict, result_object
from bandproof.bench.summary import dB, summary_lines

TEXT, NUMBER, FLAG, WHOLE = str, float, bool, int
MAYBE = (str, type(None))

# The result object as documented, its keys in their order, with the type each value has.
PARAMETER = {
    "unit": TEXT,
    "designed": NUMBER,
    "predicted": NUMBER,
    "measured": NUMBER,
    "standard_uncertainty": NUMBER,
    "expanded_uncertainty": NUMBER,
    "coverage_factor": NUMBER,
    "rule": TEXT,
    "deviation": NUMBER,
    "lower_limit": NUMBER,
    "upper_limit": NUMBER,
    "verdict": TEXT,
    "conformance_probability": NUMBER,
    "conformance_prior": TEXT,
}
STAGE = {
    "name": TEXT,
    "kind": TEXT,
    "verdict": TEXT,
    "model": TEXT,
    "parameters": {"centre": PARAMETER, "q": PARAMETER, "gain": PARAMETER},
    "fit": {"reduced_chi_square": NUMBER, "points": WHOLE, "lack_of_fit": FLAG},
    "suspects": [],
}
RESULT = {
    "schema": TEXT,
    "verdict": TEXT,
    "conformance_probability": NUMBER,
    "ended": TEXT,
    "serial": TEXT,
    "run_id": TEXT,
    "bench_seconds": NUMBER,
    "wall_seconds": (float, type(None)),
    "points": WHOLE,
    "alarms": [TEXT],
    "stages": [STAGE],
    "files": {"run": TEXT, "picture": TEXT, "report": MAYBE},
    "attempts": (list, type(None)),
}


def check_tree(found, expected, where="result"):
    """Assert that keys, their order and types are as expected, all the way down."""
    if isinstance(expected, dict):
        assert list(found) == list(expected), where
        for key, below in expected.items():
            check_tree(found[key], below, f"{where}.{key}")
    elif isinstance(expected, list):
        assert isinstance(found, list), where
        for entry in found if expected else ():
            check_tree(entry, expected[0], where)
    else:
        assert isinstance(found, expected), (where, found)
        assert expected is bool or not isinstance(found, bool), where


FILES = {"run": "run.h5", "picture": "picture.svg", "report": "report.pdf"}


def concluded(outcome):
    """Return the object that a reader of the JSON text has."""
    return json.loads(json.dumps(result_object(outcome.run, outcome.stages, FILES), allow_nan=False))


def test_the_result_object_has_the_keys_and_types_documented(outcome):
    result = concluded(outcome)
    check_tree(result, RESULT)
    assert result["schema"] == "bandproof-result/1"
    assert [stage["name"] for stage in result["stages"]] == ["low", "body"]
    assert result["points"] == 24


def test_a_deviation_is_relative_and_a_gain_a_ratio(outcome):
    for stage in concluded(outcome)["stages"]:
        for figure in stage["parameters"].values():
            assert figure["deviation"] == pytest.approx(figure["measured"] / figure["designed"] - 1.0, abs=1e-15)
        gain = stage["parameters"]["gain"]
        assert gain["unit"] == "V/V"
        assert gain["designed"] == pytest.approx(10.0**0.5)  # the board file's 10 dB
        assert (gain["lower_limit"], gain["upper_limit"]) == pytest.approx((10**0.45, 10**0.55))  # ± 1 dB
        assert stage["parameters"]["centre"]["unit"] == "Hz"
        assert stage["parameters"]["q"]["unit"] == ""


def test_an_expanded_uncertainty_is_its_factor_times_the_standard_one(outcome):
    """GUM 6.2.1: U = k u_c (from memory)."""
    for stage in concluded(outcome)["stages"]:
        for figure in stage["parameters"].values():
            product = figure["coverage_factor"] * figure["standard_uncertainty"]
            assert figure["expanded_uncertainty"] == pytest.approx(product, rel=1e-12)


def test_the_stored_result_has_no_wall_seconds_and_names_files_without_folder(outcome):
    assert outcome.result["wall_seconds"] is None
    assert outcome.result["files"] == FILES
    assert (outcome.folder / "run.h5").exists()


# --- verdicts ---


def with_verdicts(outcome, *verdicts):
    stages = (outcome.stages * len(verdicts))[: len(verdicts)]
    return [replace(stage, verdict=verdict) for stage, verdict in zip(stages, verdicts, strict=True)]


@pytest.mark.parametrize(
    ("stages", "board"),
    [
        (("pass", "pass"), "pass"),
        (("pass", "undecided"), "undecided"),
        (("undecided", "fail"), "fail"),
        (("fail", "pass"), "fail"),
        (("pass",), "pass"),
    ],
)
def test_a_board_is_as_good_as_its_worst_stage(outcome, stages, board):
    assert board_verdict(outcome.run, with_verdicts(outcome, *stages)) == board


def test_a_run_cut_short_has_no_verdict(outcome):
    run = replace(outcome.run, ended="cut_short", reason="the bench failed")
    assert board_verdict(run, outcome.stages) is None
    assert result_object(run, outcome.stages, FILES)["verdict"] is None


def test_a_stage_is_as_good_as_its_worst_figure(outcome):
    for stage in outcome.stages:
        order = ["fail", "undecided", "pass"]
        assert stage.verdict == min((figure.verdict for figure in stage.figures.values()), key=order.index)


def test_a_figure_outside_its_limits_fails_and_takes_the_board_with_it(outcome):
    """The same points against another design: a centre 20 % higher."""
    low, body = outcome.run.board.stages
    limit = low.limits["centre"]
    moved = replace(limit, designed=1.2 * limit.designed, lower=1.2 * limit.lower, upper=1.2 * limit.upper)
    other = replace(low, limits={**low.limits, "centre": moved})
    run = replace(outcome.run, board=replace(outcome.run.board, stages=(other, body)))
    first, second = evaluate(run)
    assert first.figures["centre"].verdict == "fail"
    assert first.figures["centre"].conformance_probability < 1e-6
    assert (first.verdict, second.verdict) == ("fail", outcome.stages[1].verdict)
    assert board_verdict(run, (first, second)) == "fail"


def test_a_stage_without_enough_points_is_undecided_and_says_why(outcome):
    kept = [point for point in outcome.run.points if point.stage == "low"][:4]  # quiet, low-level, two of the curve
    run = replace(outcome.run, points=tuple(kept))
    (stage,) = evaluate(run)
    assert stage.verdict == "undecided"
    assert stage.alarms == ("low: only 2 usable points",)
    result = json.loads(json.dumps(result_object(run, (stage,), FILES), allow_nan=False))
    assert result["stages"][0]["parameters"]["centre"]["measured"] is None
    assert result["stages"][0]["parameters"]["centre"]["designed"] == 160.0
    assert result["stages"][0]["fit"]["reduced_chi_square"] is None


def test_points_that_cannot_be_trusted_stay_out_of_the_fit(outcome):
    points = [point for point in outcome.run.points if point.stage == "low"]
    curve = [point for point in points if point.purpose in ("curve", "closing")]
    assert usable(points) == tuple(curve)
    overloaded = replace(curve[0], flags=("overload",))
    faint = replace(curve[1], levels=(curve[1].levels[0], 19.9 * curve[1].lsb[1]))
    assert usable([overloaded, faint, *curve[2:]]) == tuple(curve[2:])
    worst = replace(curve[0], response=100.0 + 0j, flags=("overload",))
    assert fit_points([worst, *curve[1:]]).fit.f0[0] == fit_points(curve[1:]).fit.f0[0]


# --- lines for people ---


def test_every_line_fits_80_columns_and_every_figure_has_a_line_with_its_verdict(outcome):
    lines = summary_lines(outcome.stages)
    assert max(map(len, lines)) <= 80
    for stage in outcome.stages:
        rows = [line for line in lines if line.startswith(stage.name + " ")]
        assert [row.split()[-1].lower() for row in rows] == [figure.verdict for figure in stage.figures.values()]
    assert any(line.startswith("Centre frequency f0") for line in lines)
    assert "Gain at f0" in lines


@pytest.mark.parametrize("name", ["a" * 40, "eleven-long", "twelve-longs", "thirteen-long"])
def test_a_long_name_costs_no_column(outcome, name):
    lines = summary_lines([replace(stage, name=name) for stage in outcome.stages])
    assert max(map(len, lines)) <= 80
    for line in lines:
        if name in line:
            assert re.fullmatch(rf"{name}( .*)?", line)
    assert sum(name in line for line in lines) == 6


# figure, what must stand in its line: decibels only where people read; 20 lg of a voltage ratio.
READ = {
    "gain": (
        {"measured": math.sqrt(10.0) * 1.01, "expanded_uncertainty": 0.04},
        r"10 dB .* 10\.09 ± 0\.11 dB +\+0\.09 dB +±1 dB ",
    ),
    "gain with U above it": ({"measured": 3.0, "expanded_uncertainty": 4.0}, r"9\.54 dB ± unknown"),
    "gain not found": ({"measured": math.nan, "expanded_uncertainty": math.nan}, "not found"),
}


@pytest.mark.parametrize(("changes", "words"), READ.values(), ids=READ)
def test_a_gain_is_read_in_decibels(outcome, changes, words):
    assert re.search(words, gain_line(outcome, changes))


def gain_line(outcome, changes):
    stage = outcome.stages[0]
    gain = replace(stage.figures["gain"], **changes)
    lines = summary_lines([replace(stage, figures={**stage.figures, "gain": gain})])
    assert "nan" not in "".join(lines)
    return lines[-1]


@pytest.mark.parametrize("centre", [0.0123456, 31.5, 999.9999, 6.3e3, 1.23456789e9])
@pytest.mark.parametrize("relative", [1e-7, 1e-5, 1e-3, 0.3])
def test_columns_stay_apart_for_any_uncertainty(outcome, centre, relative):
    stage = outcome.stages[0]
    figure = replace(
        stage.figures["centre"],
        designed=centre,
        predicted=1.01 * centre,
        measured=1.1 * centre,
        expanded_uncertainty=relative * centre,
        lower_limit=0.94 * centre,
        upper_limit=1.06 * centre,
    )
    (line,) = [
        line
        for line in summary_lines([replace(stage, figures={**stage.figures, "centre": figure})])[:4]
        if line.startswith("low ")
    ]
    assert len(line) <= 80
    assert re.fullmatch(r"low +\S+ \S*Hz +\S+ \S*Hz +\S+ ± \S+ \S*Hz +[+-]\S+ % +±6 % +\w+", line)


def test_decibels_are_twenty_lg():
    assert dB(10.0) == 20.0
    assert dB(-0.1) == pytest.approx(-20.0)
