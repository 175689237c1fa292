"""Decision rules: as a board file writes them, as they decide on a run's figures, and the whole board's probability."""

import json
from dataclasses import replace
from math import log, nan, sqrt

import numpy as np
import pytest
from scipy.special import ndtr
from scipy.stats import multivariate_normal

from bandproof.analysis.decision import SIMPLE, Prior, Rule
from bandproof.analysis.uncertainty import combine
from bandproof.bench.board_file import parse_board
from bandproof.bench.comparison import judged
from bandproof.bench.conformance import board_probability
from bandproof.bench.errors import FileMistakes
from bandproof.bench.evaluate import evaluate
from bandproof.bench.result import result_object
from bandproof.bench.rules import read_rule
from bandproof.bench.summary import rule_lines
from bandproof.bench.types import QUANTITIES

SIMPLE_LINE = 'rule      = "simple"'


def board(text, rule="", spread=""):
    """Return the board of a text with another rule (a TOML value) and a spread in its first stage."""
    assert SIMPLE_LINE in text
    return parse_board(text.replace(SIMPLE_LINE, f"rule = {rule}\n{spread}", 1), "a board")


@pytest.mark.parametrize(
    ("written", "rule"),
    [
        ("simple", SIMPLE),
        ("guarded", Rule("guarded", 1.0)),
        ("guarded 1", Rule("guarded", 1.0)),
        ("guarded 0.5", Rule("guarded", 0.5)),
        ("risk 2 %", Rule("risk", 0.02)),
        ("risk 2%", Rule("risk", 0.02)),
        ("risk 500 ppm", Rule("risk", 0.0005)),
    ],
)
def test_a_rule_is_read_and_kept_as_written(one_band_text, written, rule):
    found = board(one_band_text, f'"{written}"').stages[0].limits
    assert {(limit.rule, limit.decides) for limit in found.values()} == {(written, rule)}


WRONG = [
    "guarded 0",
    "guarded -1",
    "guarded 1,5",
    "guarded 11",
    "guarded x",
    "guarded 1 %",
    "risk",
    "risk 2",
    "risk 0 %",
]
WRONG += ["risk 50 %", "risk -1 %", "simple 1", "Guarded", "", "guarded nan", "risk 2 % 3"]


@pytest.mark.parametrize("written", WRONG)
def test_a_rule_that_is_none_is_a_mistake_with_its_place(one_band_text, written):
    with pytest.raises(FileMistakes, match=r"stages\.low\.rule: found .*expected \"simple\", \"guarded\"") as told:
        board(one_band_text, f'"{written}"')
    assert len(told.value.findings) == 1


@pytest.mark.parametrize("written", [1, True, None, ["simple"], 2.5])
def test_a_rule_that_is_no_text_is_refused(written):
    with pytest.raises(ValueError, match="expected"):
        read_rule(written)


def test_figures_may_have_rules_of_their_own_and_the_others_are_simple(one_band_text):
    limits = board(one_band_text, '{ q = "guarded 0.5", gain = "risk 2 %" }').stages[0].limits
    assert [limits[name].rule for name in QUANTITIES] == ["simple", "guarded 0.5", "risk 2 %"]
    assert [limits[name].decides.kind for name in QUANTITIES] == ["simple", "guarded", "risk"]


def test_all_mistakes_of_rules_and_spreads_are_told_at_once(one_band_text):
    with pytest.raises(FileMistakes) as told:
        board(one_band_text, '{ q = "gard", gian = "simple" }', 'spread = { centre = "2", q = "0 %", gain2 = "1 dB" }')
    places = [finding.partition(":")[0] for finding in told.value.findings]
    assert sorted(places) == [
        f"stages.low.{key}" for key in ("rule.gian", "rule.q", "spread.centre", "spread.gain2", "spread.q")
    ]
    with pytest.raises(FileMistakes, match=r"stages\.low\.spread: found 3; expected a table"):
        board(one_band_text, '"simple"', "spread = 3")


def test_a_spread_is_the_prior_around_the_designed_value(one_band_text):
    limits = board(one_band_text, '"risk 2 %"', 'spread = { centre = "2 %", gain = "0.3 dB" }').stages[0].limits
    assert limits["centre"].prior == Prior(160.0, 0.5 * (1.02 - 0.98) * 160.0)
    assert limits["q"].prior is None
    # 0.3 dB of a voltage ratio is ln(10)/20 x 0.3 of it, to first order
    assert limits["gain"].prior.sd == pytest.approx(sqrt(10.0) * log(10.0) / 20.0 * 0.3, rel=1e-3)


# --- on the figures of a run ---


def with_limits(outcome, **changes):
    """Return the outcome's run with other limits of its first stage: figure name to changes of its Limit."""
    low, *others = outcome.run.board.stages
    limits = {name: replace(limit, **changes.get(name, {})) for name, limit in low.limits.items()}
    return replace(outcome.run, board=replace(outcome.run.board, stages=(replace(low, limits=limits), *others)))


def test_a_guard_band_is_made_of_the_figures_own_u(outcome):
    gain = outcome.stages[0].figures["gain"]
    for upper, verdict in ((1.01, "pass"), (0.99, "undecided"), (-0.99, "undecided"), (-1.01, "fail")):
        limit = {"upper": gain.measured + upper * gain.expanded_uncertainty, "lower": 0.1}
        run = with_limits(outcome, gain={**limit, "rule": "guarded", "decides": Rule("guarded", 1.0)})
        figure = evaluate(run)[0].figures["gain"]
        assert (figure.verdict, figure.rule) == (verdict, "guarded")


def test_a_process_known_beforehand_changes_the_probability_and_says_so(outcome):
    gain = outcome.stages[0].figures["gain"]
    u = gain.standard_uncertainty
    limit = {"upper": gain.measured + u, "lower": 0.1, "rule": "risk 10 %", "decides": Rule("risk", 0.1)}
    flat = evaluate(with_limits(outcome, gain=limit))[0].figures["gain"]
    # JCGM 106:2012, 7.2 and A.4: prior sd u around a mean u below gives mean -u/2, sd u/sqrt(2)
    known = evaluate(with_limits(outcome, gain={**limit, "prior": Prior(gain.measured - u, u)}))[0].figures["gain"]
    assert (flat.verdict, known.verdict) == ("undecided", "pass")
    assert known.conformance_probability == pytest.approx(ndtr(1.5 * sqrt(2.0)), abs=1e-9)


def test_rule_and_prior_are_told(outcome):
    gain = outcome.stages[0].figures["gain"]
    limit = {"upper": gain.measured, "lower": 0.1, "rule": "guarded 0.5", "decides": Rule("guarded", 0.5)}
    run = with_limits(outcome, gain=limit, q={"prior": Prior(1.5, 0.1)})
    stages = evaluate(run)
    result = json.loads(json.dumps(result_object(run, stages, {"run": None})))
    found = result["stages"][0]["parameters"]
    assert (found["gain"]["rule"], found["gain"]["conformance_prior"]) == ("guarded 0.5", "flat")
    assert (found["q"]["rule"], found["q"]["conformance_prior"]) == ("simple", "process spread")
    assert result["verdict"] == "undecided"
    assert result["conformance_probability"] == pytest.approx(0.5, abs=0.01)
    assert rule_lines(stages, 0.4978) == [
        "rule guarded 0.5 (low gain): 1 undecided",
        "probability that the whole board conforms: 0.498 (process spread known of 1 of 6 figures)",
    ]


def leaking(outcome, centre):
    """Return the first stage's result when a leakage passes its band by, with limits of its centre frequency."""
    run = outcome.run
    points = [
        replace(p, response=p.response + 0.2) if p.stage == "low" and p.purpose != "no-signal" else p
        for p in run.points
    ]
    first = run.board.stages[0]
    limits = {**first.limits, "centre": replace(first.limits["centre"], lower=centre[0], upper=centre[1])}
    stages = (replace(first, limits=limits), *run.board.stages[1:])
    return evaluate(replace(run, points=tuple(points), board=replace(run.board, stages=stages)))[0]


def test_a_figure_in_doubt_fails_only_farther_outside_than_the_doubt_can_move_it(outcome):
    near, far = leaking(outcome, (150.0, 160.0)), leaking(outcome, (150.0, 158.0))
    assert "do not follow a second-order band" in near.alarms[0]
    assert [figure.verdict for figure in near.figures.values()] == ["undecided"] * 3
    assert [figure.verdict for figure in far.figures.values()] == ["fail", "undecided", "undecided"]
    assert (far.verdict, far.figures["centre"].conformance_probability) == ("fail", 0.0)
    assert far.figures["centre"].measured == near.figures["centre"].measured > 160.0


# --- the whole board ---


def limited(stages, sizes):
    """Return stages with every upper limit so many u above what was measured, no lower ones."""
    moved = []
    for stage in stages:
        upper = {name: f.measured + sizes[name] * f.standard_uncertainty for name, f in stage.figures.items()}
        figures = {name: replace(f, upper_limit=upper[name], lower_limit=-1e9) for name, f in stage.figures.items()}
        moved.append(replace(stage, figures=figures))
    return moved


def only(stages, *names):
    """Return stages whose budgets have the named rows alone, and their u."""
    found = []
    for stage in stages:
        budgets = {
            name: combine([row if row.name in names else replace(row, standard_uncertainty=0.0) for row in budget.rows])
            for name, budget in stage.budgets.items()
        }
        figures = {name: replace(f, standard_uncertainty=budgets[name].u) for name, f in stage.figures.items()}
        found.append(replace(stage, budgets=budgets, figures=figures))
    return found


FAR = 100.0


def test_one_figure_at_its_limit_makes_the_board_half_probable(outcome):
    stages = limited(outcome.stages, dict.fromkeys(QUANTITIES, FAR))
    assert board_probability(stages) == 1.0
    first = limited(stages[:1], {"centre": 0.0, "q": FAR, "gain": FAR})
    assert board_probability([*first, *stages[1:]]) == pytest.approx(0.5, abs=0.006)  # 4 deviations of 1e5 draws


@pytest.mark.parametrize("at", [0.5, 1.0, 1.5, 1.7])
def test_a_figure_and_its_board_take_the_error_as_the_budget_has_it(outcome, at):
    """Source: the area of a uniform distribution of the u of its row, which is most of Q's."""
    (stage,) = only(outcome.stages[:1], "linearity out")
    q = stage.figures["q"]
    limit = replace(outcome.run.board.stages[0].limits["q"], upper=q.measured + at * q.standard_uncertainty)
    judged_q = judged(
        replace(outcome.run.board.stages[0], limits={"q": limit}),
        "q",
        q.predicted,
        q.measured,
        0.0,
        stage.budgets["q"],
        "",
    )
    expected = 0.5 + 0.5 * at / sqrt(3.0)
    assert judged_q.conformance_probability == pytest.approx(expected, abs=1e-3)
    far = limited([stage], dict.fromkeys(QUANTITIES, FAR))[0]
    found = board_probability([replace(far, figures={**far.figures, "q": judged_q})])
    assert found == pytest.approx(expected, abs=0.006)  # 4 deviations of 1e5 draws
    assert found <= judged_q.conformance_probability


@pytest.mark.parametrize(("size", "verdict"), [("20 %", "undecided"), ("22 %", "pass")])
def test_a_rule_by_risk_counts_the_error_as_the_budget_has_it(outcome, size, verdict):
    """One u inside its limit a uniform error leaves 21.1 %, a normal one would leave 15.9 %."""
    (stage,) = only(outcome.stages[:1], "linearity out")
    q, designed = stage.figures["q"], outcome.run.board.stages[0]
    limit = replace(
        designed.limits["q"],
        upper=q.measured + q.standard_uncertainty,
        rule=f"risk {size}",
        decides=read_rule(f"risk {size}"),
    )
    found = judged(replace(designed, limits={"q": limit}), "q", q.predicted, q.measured, 0.0, stage.budgets["q"], "")
    assert found.verdict == verdict


def test_noise_is_correlated_as_the_fit_says(outcome):
    """Against the normal distribution of three correlated figures, of another library."""
    (stage,) = only(outcome.stages[:1], "repeatability")
    size = {"centre": 0.5, "q": 0.5, "gain": 0.5}
    covariance = np.array(stage.theta_covariance)[:4, :4]
    gain = np.array(stage.theta[2:4])
    along = np.array([[1, 0, 0, 0], [0, 1, 0, 0], [0, 0, *(gain / (gain @ gain))]])
    spread = along @ covariance @ along.T
    correlation = spread / np.sqrt(np.outer(np.diag(spread), np.diag(spread)))
    assert abs(correlation[1, 2]) > 0.3  # a narrower band is a higher one: without it the test shows nothing
    expected = multivariate_normal(np.zeros(3), correlation).cdf([0.5, 0.5, 0.5])
    assert board_probability(limited([stage], size)) == pytest.approx(expected, abs=0.006)
    assert abs(expected - ndtr(0.5) ** 3) > 0.02


def test_a_source_common_to_the_board_moves_all_stages_together(outcome):
    at = {"centre": 0.0, "q": FAR, "gain": FAR}
    common = only(outcome.stages, "generator")  # of f0 alone, one for all stages
    assert board_probability(limited(common, at)) == pytest.approx(0.5, abs=0.006)
    apart = only(outcome.stages, "settling")  # another one in each stage
    assert board_probability(limited(apart, at)) == pytest.approx(0.25, abs=0.006)


def test_a_process_known_of_one_figure_draws_it_towards_the_designed_value(outcome):
    (stage,) = only(outcome.stages[:1], "generator")
    u = stage.figures["centre"].standard_uncertainty
    (at,) = limited([stage], {"centre": 0.0, "q": FAR, "gain": FAR})
    known = replace(at.figures["centre"], prior=Prior(at.figures["centre"].measured - 2.0 * u, u))
    # mean -u, sd u/sqrt(2): beyond 0 as probable as 1 of sqrt(1/2); the source is uniform, mean and sd are kept
    found = board_probability([replace(at, figures={**at.figures, "centre": known})])
    assert found == pytest.approx(ndtr(sqrt(2.0)), abs=0.02)


def test_the_same_stages_give_the_same_probability_and_a_figure_without_value_none(outcome):
    stages = limited(outcome.stages, dict.fromkeys(QUANTITIES, 1.0))
    assert board_probability(stages) == board_probability(stages)
    lost = replace(stages[0].figures["q"], conformance_probability=nan)
    assert board_probability([replace(stages[0], figures={**stages[0].figures, "q": lost}), *stages[1:]]) is None
    assert board_probability([]) is None
