"""Suspects in the words of a bench (suspects, suspect_words): figures of changed parts in place of those measured."""

import json
from dataclasses import replace
from math import nan

import numpy as np
import pytest

from bandproof.bench.circuit import predict
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.result import result_object
from bandproof.bench.suspects import circuit_of, seen_of, suspected
from bandproof.bench.thru import paths
from bandproof.bench.types import PASSIVE, QUANTITIES


def with_figures(result, figures):
    """Return a stage's result with other figures measured, by as much of their value uncertain."""
    changed = {}
    for name, value in zip(QUANTITIES, figures, strict=True):
        changed[name] = replace(result.figures[name], measured=value)
    ratio = figures[2] / result.figures["gain"].measured
    theta = (*result.theta[:2], *(ratio * part for part in result.theta[2:4]), *result.theta[4:])
    return replace(result, figures=changed, theta=theta)


def with_parts(outcome, values):
    """Return what would be concluded, without errors, with other parts: {stage: {part: value}}."""
    board = outcome.run.board
    found = []
    for result in outcome.stages:
        prediction = predict(board, board.stage(result.name), values.get(result.name, {}))
        found.append(with_figures(result, [prediction[name] for name in QUANTITIES]))
    return found


@pytest.fixture(scope="module", autouse=True)
def kept(outcome):
    """The stages as the analysis takes them, so that their scans are made once."""
    for result in outcome.stages:
        predicted = np.log([result.figures[name].predicted for name in QUANTITIES])
        CIRCUITS[result.name] = circuit_of(outcome.run.board, outcome.run.board.stage(result.name), predicted)


def said(outcome, results):
    found = suspected(outcome.run.board, results, CIRCUITS)
    return [suspect for suspects in found.values() for suspect in suspects]


def words(outcome, values):
    return [suspect.text for suspect in said(outcome, with_parts(outcome, values))]


CIRCUITS = {}
UNEXPLAINED = (
    "outside what tolerances and U allow, and none of these gives it: a probe's factor, swapped channels, another "
    "reel, one wrong part, two exchanged, another stage's test point. More than one fault?"
)
# What is wrong with the demo's low stage (R_in 14.3 kΩ, R_shunt 34 kΩ, R_feedback 90.9 kΩ, C 33 nF), and what is said.
SENTENCES = {
    "wrong decade": ({"R_shunt": 3.4e3}, "R_shunt reads like 3.4 kΩ where 34 kΩ was drawn: wrong decade"),
    "wrong decade upwards": ({"C_1": 330e-9}, "C_1 reads like 330 nF where 33 nF were drawn: wrong decade"),
    "twice": ({"C_2": 68e-9}, "C_2 reads like 68 nF where 33 nF were drawn: twice the value"),
    "half": ({"R_in": 7.15e3}, "R_in reads like 7.15 kΩ where 14.3 kΩ was drawn: half the value"),
    "another": ({"R_feedback": 27e3}, "R_feedback reads like 27 kΩ where 90.9 kΩ was drawn: wrong value"),
    "ten per cent": ({"R_feedback": 100e3}, "R_feedback reads about 10 % high: 100 kΩ where 90.9 kΩ was drawn"),
    "low": ({"R_in": 0.9 * 14.3e3}, "R_in reads about 10 % low: 12.9 kΩ where 14.3 kΩ was drawn"),
    "missing": ({"R_shunt": 1e12}, "R_shunt is missing or open"),
    "swapped": ({"R_in": 34e3, "R_shunt": 14.3e3}, "R_in and R_shunt are swapped"),
    "two parts": ({"R_feedback": 270e3, "C_1": 10e-9}, UNEXPLAINED),
}


@pytest.mark.parametrize(("parts", "sentence"), SENTENCES.values(), ids=SENTENCES)
def test_a_stage_says_what_is_wrong_with_it(outcome, parts, sentence):
    assert words(outcome, {"low": parts}) == [f"low: {sentence}"]


def test_all_capacitors_of_a_board_are_one_sentence(outcome):
    values = {
        stage.name: {part.name: 1.12 * part.value for part in stage.parts if part.name.startswith("C")}
        for stage in outcome.run.board.stages
    }
    (suspect,) = said(outcome, with_parts(outcome, values))
    assert suspect.text == "all capacitors read about 12 % high: another reel or another type?"
    assert (suspect.kind, suspect.parts) == ("common factor", ("C_1", "C_2"))
    assert suspect.estimate == pytest.approx(1.12, rel=0.01)


def test_what_cannot_be_told_apart_is_a_list(outcome):
    """R_in low or R_feedback high: Q tells that it is one of them, f0 and gain hang on capacitors of 5 %."""
    (suspect,) = said(outcome, with_parts(outcome, {"low": {"R_in": 0.95 * 14.3e3}}))
    assert suspect.text.startswith("low: not distinguishable: R_in (about 13.6 kΩ for 14.3 kΩ); R_feedback (about 9")
    assert (suspect.kind, suspect.parts) == ("not distinguishable", ("R_in", "R_feedback"))
    assert suspect.estimate is None
    assert suspect.delta_chi_square < 4.0


def test_a_probe_factor_is_sought_at_the_bench(outcome):
    given = with_parts(outcome, {})
    ten = [with_figures(r, [r.figures[n].measured * (10.0 if n == "gain" else 1.0) for n in QUANTITIES]) for r in given]
    (suspect,) = said(outcome, ten)
    assert suspect.text == "every stage reads ten times the gain: is the probe's factor set as the bench file says?"
    assert suspect.kind == "bench"


def test_a_probe_left_on_the_stage_before_is_named(outcome):
    low, body = with_parts(outcome, {})
    (suspect,) = said(outcome, [low, with_figures(body, [low.figures[name].measured for name in QUANTITIES])])
    assert suspect.text == "body: reads like low: is the probe on another test point?"
    assert suspect.kind == "bench"


def times(results, gains):
    """Return results with gains times factors {stage: factor}."""
    return [
        with_figures(r, [r.figures[n].measured * (gains.get(r.name, 1.0) if n == "gain" else 1.0) for n in QUANTITIES])
        for r in results
    ]


@pytest.mark.parametrize(
    ("factor", "words"),
    [(10.0, "ten times"), (0.1, "a tenth of"), (100.0, "a hundred times"), (0.01, "a hundredth of")],
)
def test_a_probe_factor_of_one_stage_is_sought_there(outcome, factor, words):
    (suspect,) = said(outcome, times(with_parts(outcome, {}), {"body": factor}))
    if factor == 0.1:  # the gain is 9.8 dB: a tenth of it and upside down are alike
        assert suspect.text.startswith("body: not distinguishable: reads a tenth of the gain; reads its gain upside")
    else:
        assert suspect.text == f"body: reads {words} the gain: is the probe's factor set as the bench file says?"
        assert suspect.kind == "bench"


def test_a_board_of_one_stage_tells_bench_faults_too(outcome):
    low, _ = times(with_parts(outcome, {}), {"low": 10.0})
    (suspect,) = said(outcome, [low])
    assert suspect.text == "low: reads ten times the gain: is the probe's factor set as the bench file says?"


def test_what_explains_no_stage_at_all_is_one_sentence(outcome):
    (suspect,) = said(outcome, times(with_parts(outcome, {}), {"low": 2.0, "body": 2.0}))
    assert suspect.text == f"all stages: {UNEXPLAINED}"


def test_a_board_of_one_stage_has_no_other_test_point_to_look_at(outcome):
    low, _ = times(with_parts(outcome, {}), {"low": 2.0})
    (suspect,) = said(outcome, [low])
    fewer = UNEXPLAINED.replace(", another stage's test point", "")
    assert suspect.text == f"low: {fewer}"


# --- silence ---


def test_a_healthy_board_has_no_suspects(outcome):
    assert [stage.suspects for stage in outcome.stages] == [(), ()]


def test_figures_in_doubt_or_missing_accuse_nobody(outcome):
    low, body = with_parts(outcome, {"low": {"R_shunt": 3.4e3}})
    for change in ({"conformance_probability": nan}, {"measured": nan}):
        doubted = {name: replace(figure, **change) for name, figure in low.figures.items()}
        assert said(outcome, [replace(low, figures=doubted), body]) == []
        assert said(outcome, [replace(low, figures=doubted)]) == []
    assert said(outcome, [low, body]) != []


def test_a_stage_without_parts_is_not_judged(outcome):
    board = outcome.run.board
    bare = replace(board, stages=tuple(replace(stage, circuit=PASSIVE, parts=()) for stage in board.stages))
    assert suspected(bare, with_parts(outcome, {"low": {"R_shunt": 3.4e3}})) == {}


# --- where they go ---


def test_the_covariance_has_the_standard_uncertainties_of_the_budget(outcome):
    """JCGM 100, 5.2: variances are the squares of combined standard uncertainties; no correlation is above 1."""
    for result in outcome.stages:
        covariance = seen_of(result).covariance
        for i, name in enumerate(QUANTITIES):
            figure = result.figures[name]
            assert covariance[i, i] ** 0.5 == pytest.approx(figure.standard_uncertainty / figure.measured, rel=1e-6)
            for j in range(3):
                assert abs(covariance[i, j]) <= (covariance[i, i] * covariance[j, j]) ** 0.5 * (1.0 + 1e-9)


def test_a_suspect_is_an_object_of_the_result(outcome):
    low, body = with_parts(outcome, {"low": {"R_shunt": 3.4e3}})
    (suspect,) = said(outcome, [low, body])
    stages = [replace(low, suspects=(suspect,)), body]
    result = json.loads(json.dumps(result_object(outcome.run, stages, {}), allow_nan=False))
    (written,) = result["stages"][0]["suspects"]
    assert written == {
        "text": "low: R_shunt reads like 3.4 kΩ where 34 kΩ was drawn: wrong decade",
        "kind": "part",
        "parts": ["R_shunt"],
        "estimate": pytest.approx(3.4e3, rel=0.01),
        "delta_chi_square": pytest.approx(suspect.delta_chi_square),
    }
    assert written["delta_chi_square"] > 4.0
    assert result["stages"][1]["suspects"] == []


def test_a_swept_stage_with_a_wrong_part_names_it(swept, one_band):
    found = swept(5, board=one_band, defects={("low", "R_shunt"): 3.4e3})
    bench = rehearsal_bench(one_band)
    points = found.journal.points
    result = evaluate_stage(one_band, bench, one_band.stages[0], [p for p in points if p.stage == "low"], paths(points))
    (suspect,) = suspected(demo_board(), [result])["low"]
    assert suspect.text == "low: R_shunt reads like 3.4 kΩ where 34 kΩ was drawn: wrong decade"
    assert suspect.estimate == pytest.approx(3.4e3, rel=0.05)
