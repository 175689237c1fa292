"""Attempts on one serial number: which may begin, what a repair changes, and the verdict of several together."""

import json
import re
from dataclasses import replace
from datetime import UTC, datetime
from math import sqrt
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from bandproof.analysis.decision import SIMPLE, Rule, outcomes
from bandproof.analysis.uncertainty import combine
from bandproof.bench.attempts import Attempt, earlier, log_repair, refusal, superseded
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import evaluate
from bandproof.bench.journal import Journal
from bandproof.bench.pooling import judged_otherwise, outlook, pooled, with_earlier
from bandproof.bench.runfile import digest_of, read_result, write_run
from bandproof.bench.types import QUANTITIES

NOON = datetime(2026, 1, 1, 12, tzinfo=UTC)


# --- which may begin ---


def known(*verdicts):
    """Return attempts of these verdicts since the last repair; None: unfinished."""
    return [Attempt(n, verdict and "5e3c", verdict, counts=True) for n, verdict in enumerate(verdicts, 1)]


UNFINISHED = r"attempt 1 is unfinished\. Go on with it:  bandproof resume runs/TB-1/1\n.*--retest"


@pytest.mark.parametrize(
    ("verdicts", "retest", "words"),
    [
        ([], "", None),
        (["undecided"], "", None),  # earns one more
        (["fail"], "a clip had come off", None),
        (["pass"], "audit", None),
        ([None], "the scope is broken", None),
        (["fail"], "", r"its verdict is fail. To ask once more, say why: --retest"),
        (["pass"], "", r"its verdict is pass\."),
        ([None], "", UNFINISHED),
        (["undecided", "undecided"], "once more", r"measured twice .* a person decides: its verdict is undecided"),
        (["fail", "fail"], "", r"measured twice .*--repair"),
        ([None, "pass"], "once more", r"measured twice .* a person decides: its verdict is pass"),
        ([None, None], "once more", r"measured twice .*attempt 2 is unfinished.*resume runs/TB-1/2\n"),
        (["fail", None], "once more", r"measured twice .*attempt 2 is unfinished.*resume runs/TB-1/2\n"),
        ([], "why", r"nothing to retest"),
    ],
)
def test_a_board_is_looked_at_again_once_with_a_reason(verdicts, retest, words):
    found = refusal(known(*verdicts), retest, Path("runs/TB-1"))
    assert (re.search(words, found) is not None) if words else found == ""


def stored(folder, outcome, number, verdict):
    """Keep the outcome's run as an attempt of a verdict."""
    (folder / str(number)).mkdir(parents=True)
    run = replace(outcome.run, attempt=number, serial=folder.name)
    write_run(folder / str(number) / "run.h5", run, {**outcome.result, "verdict": verdict}, raw=lambda step: None)


def test_attempts_count_when_complete_and_since_the_last_repair(outcome, tmp_path):
    place = tmp_path / "TB-1"
    assert earlier(place) == []
    stored(place, outcome, 1, "fail")
    (place / "2").mkdir()  # interrupted: no run file
    stored(place, outcome, 10, "pass")
    assert [(a.number, a.verdict, a.counts) for a in earlier(place)] == [(1, "fail", True), (10, "pass", True)]
    log_repair(place, " C_2 was\n a wrong\tvalue ", operator="Ann\tB", utc=NOON)
    stored(place, outcome, 11, "undecided")
    assert [a.counts for a in earlier(place)] == [False, False, True]
    assert earlier(place)[0].digest == digest_of(place / "1" / "run.h5")
    log = (place / "repairs.txt").read_text()
    assert log == "2026-01-01T12:00:00+00:00\tafter attempt 10\tAnn B\tC_2 was a wrong value\n"
    log_repair(place, "again", operator="", utc=NOON)
    assert not any(a.counts for a in earlier(place))
    assert (place / "repairs.txt").read_text().startswith(log)  # nothing that was logged is lost


def begun(place, number, outcome, points):
    """Keep a journal that ends behind so many points of the outcome's run."""
    (place / str(number)).mkdir(parents=True)
    journal = Journal.begin(place / str(number), Journal.peeked(outcome.folder).head)
    journal.planned(outcome.run.steps[:points])
    for point in outcome.run.points[:points]:
        journal.measured(point, began=0.0, finished=0.0)
    journal.close()


def test_an_unfinished_attempt_counts_once_it_has_a_point_of_a_curve(outcome, tmp_path):
    first = next(i for i, point in enumerate(outcome.run.points) if point.purpose == "curve")
    begun(tmp_path, 1, outcome, first)
    assert earlier(tmp_path) == []
    begun(tmp_path, 2, outcome, first + 1)
    assert earlier(tmp_path) == [Attempt(2, None, None, counts=True)]
    assert earlier(tmp_path, repaired=True) == [Attempt(2, None, None, counts=False)]
    assert earlier(tmp_path)[0].plain() == {"attempt": 2, "digest": None, "verdict": None, "pooled": False}
    assert "2 was begun since" in superseded(tmp_path, 1)
    assert superseded(tmp_path, 2) == ""


def test_a_log_of_repairs_is_read_strictly(tmp_path):
    (tmp_path / "repairs.txt").write_text("changed a part\n")
    with pytest.raises(BadInput, match=r"repairs\.txt: 'changed a part' is no entry"):
        earlier(tmp_path)


# --- the verdict of several ---


def noise_alone(stage):
    """Return a stage whose budgets have the records' noise alone."""
    budgets = {
        name: combine(
            [row if row.name == "repeatability" else replace(row, standard_uncertainty=0.0) for row in b.rows]
        )
        for name, b in stage.budgets.items()
    }
    return replace(stage, budgets=budgets)


def moved(stage, **figures):
    """Return a stage that measured so many times each figure."""
    changed = {name: replace(f, measured=figures.get(name, 1.0) * f.measured) for name, f in stage.figures.items()}
    return replace(stage, figures=changed)


def test_figures_of_two_attempts_are_averaged_and_type_a_alone_is_lowered(outcome):
    first = tuple(moved(stage, centre=1.0002) for stage in outcome.stages)
    found = pooled([outcome.run, outcome.run], [first, outcome.stages])
    for stage, own in zip(found, outcome.stages, strict=True):
        assert stage.figures["centre"].measured == pytest.approx(1.0001 * own.figures["centre"].measured, rel=1e-12)
        assert stage.figures["q"].measured == own.figures["q"].measured
        for name in QUANTITIES:
            was, now = own.budgets[name], stage.budgets[name]
            assert now.u_type_a == pytest.approx(was.u_type_a / sqrt(2.0), rel=1e-12)
            kept = sqrt(was.u**2 - was.u_type_a**2)
            assert now.u == pytest.approx(sqrt(kept**2 + was.u_type_a**2 / 2.0), rel=1e-12)
            assert stage.figures[name].expanded_uncertainty == now.expanded
            assert stage.figures[name].repeatability == pytest.approx(own.figures[name].repeatability / sqrt(2.0))


def test_an_attempt_of_longer_records_counts_by_their_length(outcome):
    """Four times the samples, half the noise: 0.2 and 0.8 are the weights of least variance, 1/5 of the first's."""
    points = tuple(replace(point, samples=4 * point.samples) for point in outcome.run.points)
    first, second = noise_alone(moved(outcome.stages[0], q=1.01)), noise_alone(outcome.stages[0])
    halved = {
        name: combine([replace(row, standard_uncertainty=0.5 * row.standard_uncertainty) for row in b.rows])
        for name, b in second.budgets.items()
    }
    (stage,) = pooled([outcome.run, replace(outcome.run, points=points)], [[first], [replace(second, budgets=halved)]])
    assert stage.figures["q"].measured == pytest.approx(1.002 * second.figures["q"].measured, rel=1e-12)
    assert stage.budgets["q"].u == pytest.approx(first.budgets["q"].u / sqrt(5.0), rel=1e-12)


def test_a_stored_thru_that_both_attempts_used_is_not_lowered(outcome):
    run = replace(outcome.run, thru=type("Stored", (), {"started": "2026-01-01T00:00:00+00:00"})())
    other = replace(outcome.run, thru=type("Stored", (), {"started": "2026-01-02T00:00:00+00:00"})())
    own = {row.name: row for row in outcome.stages[0].budgets["gain"].rows}["thru"].contribution
    assert own > 0.0
    for runs, factor in (([run, run], 1.0), ([run, other], sqrt(0.5))):
        rows = pooled(runs, [outcome.stages, outcome.stages])[0].budgets["gain"].rows
        assert {row.name: row for row in rows}["thru"].contribution == pytest.approx(factor * own, rel=1e-12)


def test_unequal_attempts_keep_the_degrees_of_freedom_of_the_one_that_counts_most(outcome):
    """JCGM 100:2008, G.4.1: u 1.0 of 3 degrees and u 0.1 of 100 are no mean of 103.

    (0.25 + 0.0025)^2 / (0.0625 / 3 + 0.00000625 / 100) = 3.06, by hand; t of 3 for 95.45 % is 3.31 (table G.2).
    """
    alone = noise_alone(outcome.stages[0])

    def sized(u, dof):
        row, *zeros = alone.budgets["q"].rows
        rows = [replace(row, standard_uncertainty=u, distribution="t", dof=dof), *zeros]
        return [replace(alone, budgets={**alone.budgets, "q": combine(rows)})]

    (stage,) = pooled([outcome.run] * 2, [sized(1.0, 3.0), sized(0.1, 100.0)])
    budget = stage.budgets["q"]
    assert budget.rows[0].dof == pytest.approx(3.06, abs=0.005)
    assert (budget.u, budget.coverage_factor) == (pytest.approx(sqrt(0.2525)), pytest.approx(3.31, abs=0.005))


def test_the_verdict_of_both_is_that_of_their_mean(outcome):
    """A gain 0.5 % above its limit in one attempt and 0.3 % below it in the other; then below it in both."""
    limit = outcome.run.board.stages[0].limits["gain"]
    own = outcome.stages[0].figures["gain"].measured
    out, inside = (moved(outcome.stages[0], gain=factor * limit.upper / own) for factor in (1.005, 0.997))
    (stage,) = pooled([outcome.run] * 2, [[out], [inside]])
    assert (stage.figures["gain"].verdict, stage.verdict) == ("fail", "fail")
    (stage,) = pooled([outcome.run] * 2, [[inside], [moved(inside, gain=1.001)]])
    assert stage.figures["gain"].verdict == "pass"


def test_attempts_that_contradict_each_other_are_not_averaged(outcome):
    own = outcome.stages[0]
    u = own.figures["gain"].expanded_uncertainty / own.figures["gain"].measured
    far, near = (moved(own, gain=1.0 + size * sqrt(2.0) * u) for size in (2.1, 1.9))  # of both U together
    (stage,) = pooled([outcome.run, replace(outcome.run, attempt=2)], [[far], [own]])
    assert (stage.verdict, {figure.verdict for figure in stage.figures.values()}) == ("undecided", {"undecided"})
    assert stage.figures["gain"].measured == own.figures["gain"].measured
    assert re.search(r"attempts 1 and 2 do not agree: gain \S+ dB and \S+ dB, .* --repair$", stage.alarms[-1])
    (stage,) = pooled([outcome.run] * 2, [[near], [own]])
    assert stage.figures["gain"].measured == pytest.approx((1.0 + 0.95 * sqrt(2.0) * u) * own.figures["gain"].measured)


def test_other_limits_want_a_reason_and_are_told(outcome, tmp_path):
    first = outcome.run.board.stages[0]
    wider = {**first.limits, "gain": replace(first.limits["gain"], upper=4.0)}
    board = replace(outcome.run.board, stages=(replace(first, limits=wider), *outcome.run.board.stages[1:]))
    stored(tmp_path / "TB-1", outcome, 1, "undecided")
    known = earlier(tmp_path / "TB-1")
    words = r"^attempt 1 was judged by other limits: gain of low 9 dB to 11 dB by rule simple, now 9 dB to 12.041 dB by"
    assert re.search(words, judged_otherwise(tmp_path / "TB-1", known, board))
    assert judged_otherwise(tmp_path / "TB-1", known, outcome.run.board) == ""
    assert judged_otherwise(tmp_path / "TB-1", earlier(tmp_path / "TB-1", repaired=True), board) == ""
    found = pooled([outcome.run, replace(outcome.run, board=board)], [outcome.stages] * 2)
    assert re.search(words, found[0].alarms[-1])


def test_a_stage_in_doubt_is_left_out_before_and_stays_undecided_now(outcome):
    doubted = replace(
        outcome.stages[0],
        verdict="undecided",
        figures={n: replace(f, conformance_probability=float("nan")) for n, f in outcome.stages[0].figures.items()},
    )
    assert pooled([outcome.run] * 2, [[doubted], outcome.stages[:1]]) == (outcome.stages[0],)
    assert pooled([outcome.run] * 2, [outcome.stages[:1], [doubted]]) == (doubted,)


def test_a_run_names_its_earlier_attempts_and_says_when_one_has_changed(outcome, tmp_path):
    place = tmp_path / "TB-1"
    stored(place, outcome, 1, "pass")
    before = [attempt.plain() for attempt in earlier(place)]
    run, stages = replace(outcome.run, attempt=2), evaluate(outcome.run)
    found, named = with_earlier(run, stages, place, before, "audit")
    assert [entry["attempt"] for entry in named] == [1, 2]
    assert named[0]["digest"] == digest_of(place / "1" / "run.h5")
    assert (named[1]["digest"], named[1]["reason"], named[1]["pooled"]) == (None, "audit", True)
    assert found[0].budgets["q"].u_type_a == pytest.approx(stages[0].budgets["q"].u_type_a / sqrt(2.0))
    before[0]["digest"] = "0" * 64
    found, _ = with_earlier(run, stages, place, before, "audit")
    assert {stage.verdict for stage in found} == {"undecided"}
    assert all("attempt 1 cannot be pooled" in stage.alarms[-1] for stage in found)
    assert with_earlier(run, stages, place, [], "") == (stages, None)
    cut = replace(run, ended="cut_short")
    assert with_earlier(cut, stages, place, before, "")[0] is stages


# --- whether one more can help ---


def undecided(stage, **parts):
    """Return a stage of undecided figures; of each that is named, so much of u² is the converter's linearity."""
    budgets = {}
    for name, budget in noise_alone(stage).budgets.items():
        size = budget.u * sqrt(parts.get(name, 0.0) / (1.0 - parts.get(name, 0.0)))
        rows = [
            replace(row, standard_uncertainty=size, sensitivity=1.0) if row.name == "linearity out" else row
            for row in budget.rows
        ]
        budgets[name] = combine(rows)
    figures = {
        name: replace(figure, verdict="undecided" if name in parts else "pass")
        for name, figure in stage.figures.items()
    }
    return replace(stage, figures=figures, budgets=budgets, verdict="undecided")


@pytest.mark.parametrize(
    ("parts", "words"),
    [
        ({"q": 0.0}, r"^Noise left it undecided\. Sweep it once more, .* 4 times as long"),
        ({"q": 0.7, "gain": 0.5}, r"^Noise left"),
        ({"q": 0.98}, r"cannot help: q of low is undecided, and 98 % of its u² is linearity out, the same in every"),
        ({"centre": 0.0, "gain": 0.8}, r"cannot help: gain of low"),  # the board stays open whatever f0 becomes
    ],
)
def test_what_noise_left_undecided_earns_longer_records_and_what_it_did_not_is_told(outcome, parts, words):
    stages = (undecided(outcome.stages[0], **parts),)
    result = {"verdict": "undecided", "attempts": None}
    assert re.search(words, outlook(outcome.run, stages, result))
    assert outlook(outcome.run, stages, {**result, "verdict": "pass"}) == ""
    for own in ({"pooled": True, "reason": ""}, {"pooled": False, "reason": "the first was cut short"}):
        twice = {**result, "attempts": [{"pooled": True}, own]}
        assert outlook(outcome.run, stages, twice) == "It was measured twice: now a person decides."


def test_a_doubt_says_nothing_of_noise(outcome):
    open_, result = undecided(outcome.stages[0], q=0.0), {"verdict": "undecided", "attempts": None}
    figures = {n: replace(f, conformance_probability=float("nan")) for n, f in open_.figures.items()}
    assert outlook(outcome.run, (replace(open_, figures=figures),), result) == ""


# --- what the rule lets through ---

# A board exactly on its limit: passing at once, or by the mean of two independent attempts (correlation sqrt(1/2) with
# the first), z = -2 for a guard band of U = 2 u. Within three tries that each count alone: 1 - (1 - p)^3.
TRIES = {"guarded 1": (Rule("guarded", 1.0), -2.0, 0.067), "simple": (SIMPLE, 0.0, 0.88)}


@pytest.mark.parametrize(("rule", "z", "three_tries"), TRIES.values(), ids=TRIES)
def test_a_board_on_its_limit_passes_no_more_often_than_two_attempts_allow(outcome, rule, z, three_tries):
    """Somebody who wants a pass retests whatever did not; only noise differs, so pooling helps as much as it can."""
    one = noise_alone(outcome.stages[0])
    (both,) = pooled([outcome.run] * 2, [[one], [one]])
    value, boards = one.figures["gain"].measured, 40_000
    u, expanded = ([getattr(stage.budgets["gain"], size) for stage in (one, both)] for size in ("u", "expanded"))
    words = ("pass", "undecided", "fail")
    tried = value + u[0] * np.random.default_rng(5).normal(size=(3, boards))
    means = [tried[0], tried[:2].mean(axis=0)]
    first, second = (
        outcomes(mean, u[i], high=value, rule=rule, expanded=expanded[i]).tolist() for i, mean in enumerate(means)
    )
    passed = 0
    for codes in zip(first, second, strict=True):
        verdicts = []
        while not refusal(known(*verdicts), "please" if verdicts else "", Path()) and "pass" not in verdicts:
            verdicts.append(words[codes[len(verdicts)]])  # an attempt more than two would be an IndexError
        passed += verdicts[-1] == "pass"
    expected = 1.0 - multivariate_normal([0.0, 0.0], [[1.0, sqrt(0.5)], [sqrt(0.5), 1.0]]).cdf([-z, -z])
    assert passed / boards == pytest.approx(expected, abs=4.0 * sqrt(expected * (1.0 - expected) / boards))
    assert passed / boards < three_tries  # 3.8 % and 62.5 %
    alone = (outcomes(tried, u[0], high=value, rule=rule, expanded=expanded[0]) == 0).any(axis=0).mean()
    assert alone == pytest.approx(three_tries, abs=0.01)  # what three tries that each count alone would give


def test_what_the_rule_keeps_is_in_the_run_file(outcome, tmp_path):
    stored(tmp_path / "TB-1", outcome, 1, "fail")
    assert read_result(tmp_path / "TB-1" / "1" / "run.h5")["attempts"] is None
    json.dumps([attempt.plain() for attempt in earlier(tmp_path / "TB-1")])
