"""Decisions and budgets against the guides' own examples."""

from __future__ import annotations

import tomllib
from math import inf, nan, sqrt

import numpy as np
import pytest
from scipy.special import ndtr

from bandproof.analysis.decision import (
    SIMPLE,
    Prior,
    Rule,
    conformance_probability,
    decide,
    outcomes,
    worst,
)
from bandproof.analysis.uncertainty import Row, combine, coverage_factor


# Source: JCGM 106:2012, Zener diode and motor oil examples
@pytest.mark.parametrize(("example", "published"), [("zener", 0.92), ("motor_oil", 0.66)])
def test_conformance_probability_of_the_guide(outside, example, published):
    case = tomllib.loads((outside / "conformity.toml").read_text())[example]
    found = conformance_probability(case["y"], case["u"], low=case.get("lower", -inf), high=case["upper"])
    assert found == pytest.approx(case["pc"], abs=1e-8)
    assert round(found, 2) == published


def test_conformance_probability_keeps_its_digits_in_the_tail():
    # Source: 1 - Phi(10) = 7.6199e-24 (table of the normal distribution, from memory)
    assert conformance_probability(-10.0, 1.0, low=0.0) == pytest.approx(7.6199e-24, rel=1e-4)
    assert conformance_probability(10.0, 1.0, low=0.0, high=0.0) == 0.0


@pytest.mark.parametrize(
    ("value", "verdict"), [(990.0, "pass"), (1010.0, "pass"), (1010.1, "fail"), (989.9, "fail"), (nan, "undecided")]
)
def test_simple_rule_takes_limits_as_they_are(value, verdict):
    assert decide(value, 3.0, low=990.0, high=1010.0).verdict == verdict


def test_doubt_makes_a_verdict_undecided_with_its_reason():
    decision = decide(1000.0, 1.0, low=990.0, high=1010.0, doubt="misfit moves f0 by more than U/3")
    assert (decision.verdict, decision.reason) == ("undecided", "misfit moves f0 by more than U/3")


def test_worst_verdict_wins():
    assert worst("pass", "undecided", "pass") == "undecided"
    assert worst("undecided", "fail", "pass") == "fail"
    with pytest.raises(ValueError, match="no verdicts"):
        worst()


# Source: JCGM 100:2008, table G.2 (from memory), 95.45 %
@pytest.mark.parametrize(("dof", "k"), [(1, 13.97), (4, 2.87), (10, 2.28), (16.7, 2.17), (50, 2.05), (inf, 2.00)])
def test_coverage_factors_of_the_guide(dof, k):
    assert coverage_factor(dof) == pytest.approx(k, abs=0.0051)


def test_effective_degrees_of_freedom_of_the_guide():
    # Source: JCGM 100:2008, H.1.6 (end gauge): u 32 nm from 25 (18), 9.7 (25.6), 2.9 (50), 16.6 (2) nm: 16.7
    parts = [(25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0)]
    rows = [Row(f"row {i}", "B", "normal", u, 1.0, dof, "the guide's table H.1") for i, (u, dof) in enumerate(parts)]
    budget = combine(rows, coverage=0.99)
    assert budget.u == pytest.approx(32.0, abs=0.5)
    assert budget.dof == pytest.approx(16.7, abs=0.3)  # the guide divides by the rounded u
    assert coverage_factor(budget.dof, coverage=0.99) == pytest.approx(2.92, abs=0.0051)


def test_budget_keeps_every_row_and_refuses_an_empty_reason():
    nothing = Row("hum", "B", "normal", 0.0, 1.0, inf, "0, because every tone is 1 kHz or above")
    fit = Row("fit", "A", "normal", 2.0, -1.5, 20.0, "covariance of the fit")
    budget = combine([nothing, fit])
    assert budget.rows == (nothing, fit)
    assert budget.u == budget.u_type_a == pytest.approx(3.0)
    with pytest.raises(ValueError, match="row 'thru': reason is empty"):
        Row("thru", "B", "normal", 0.0, 1.0, inf, "")


# --- rules ---


@pytest.mark.parametrize(
    ("value", "verdict"),
    [(992.0, "pass"), (991.9, "undecided"), (988.0, "undecided"), (987.9, "fail"), (1000.0, "pass")],
)
def test_guarded_rule_proves_both_ways(value, verdict):
    # ISO 14253-1 in the words of the trade: inside less U conformity, outside plus U non-conformity, else neither
    rule = Rule("guarded", 0.5)
    assert decide(value, 2.0, low=990.0, high=1010.0, rule=rule, expanded=4.0).verdict == verdict
    mirrored = 2000.0 - value
    assert decide(mirrored, 2.0, low=990.0, high=1010.0, rule=rule, expanded=4.0).verdict == verdict


def test_a_guard_band_wider_than_the_tolerance_passes_nothing():
    values = np.linspace(0.0, 2.0, 201)
    found = outcomes(values, 1.0, low=0.9, high=1.1, rule=Rule("guarded", 1.0), expanded=0.3)
    assert set(found[(values > 0.61) & (values < 1.39)]) == {1}
    assert 0 not in found


def test_the_risk_at_an_acceptance_limit_is_that_of_the_guide(outside):
    # Source: ILAC-G8:09/2019, table 1: bounds on the risk for guard bands r U, U = 2 u
    table = tomllib.loads((outside / "conformity.toml").read_text())["guard_bands"]
    for r, bound in zip(table["r"], table["bound"], strict=True):
        at = 10.0 - r * 2.0
        risk = 1.0 - conformance_probability(at, 1.0, high=10.0)
        assert risk <= bound
        if r:
            assert decide(at, 1.0, high=10.0, rule=Rule("guarded", r), expanded=2.0).verdict == "pass"
            assert decide(at + 1e-9, 1.0, high=10.0, rule=Rule("guarded", r), expanded=2.0).verdict == "undecided"


def test_rejecting_by_risk_is_the_guides_speed_enforcement(outside):
    # Source: JCGM 106:2012, guarded rejection: 99.9 % sure that the limit was broken, from 106.588 km/h
    case = tomllib.loads((outside / "conformity.toml").read_text())["radar"]
    rule = Rule("risk", 1.0 - case["probability"])
    for speed, verdict in ((case["speed"] + 1e-6, "fail"), (case["speed"] - 1e-6, "undecided")):
        assert decide(speed, case["relative_u"] * speed, high=case["limit"], rule=rule).verdict == verdict


def test_risk_rule_with_a_prior_sees_what_was_known():
    # by hand: a prior as wide as the measurement halves the way to its mean and the variance
    prior = Prior(0.0, 1.0)
    assert conformance_probability(2.0, 1.0, high=2.0, prior=prior) == pytest.approx(ndtr(sqrt(2.0)), abs=1e-12)
    assert decide(2.0, 1.0, high=2.0, rule=Rule("risk", 0.08), prior=prior).verdict == "pass"  # 1 - Phi(1.414) = 0.0786
    assert decide(2.0, 1.0, high=2.0, rule=Rule("risk", 0.07), prior=prior).verdict == "undecided"
    assert decide(2.0, 1.0, high=2.0, rule=Rule("risk", 0.08)).verdict == "undecided"


def test_a_prior_far_wider_than_the_measurement_is_flat():
    flat = conformance_probability(1.3, 0.7, low=0.0, high=2.0)
    assert conformance_probability(1.3, 0.7, low=0.0, high=2.0, prior=Prior(0.0, 1e9)) == pytest.approx(flat, abs=1e-12)


@pytest.mark.parametrize("rule", [SIMPLE, Rule("guarded", 1.0), Rule("guarded", 0.5), Rule("risk", 0.05)])
@pytest.mark.parametrize("prior", [None, Prior(1.0, 0.4)])
def test_one_figure_and_many_are_decided_alike(rule, prior):
    values = np.linspace(-4.0, 6.0, 201)
    words = ("pass", "undecided", "fail")
    options = {"low": 0.0, "high": 2.0, "rule": rule, "prior": prior}
    one = [decide(value, 0.3, expanded=0.7, **options) for value in values.tolist()]
    many = outcomes(values, 0.3, expanded=0.7, **options)
    assert [decision.verdict for decision in one] == [words[code] for code in many]
    assert all(bool(decision.reason) == (decision.verdict != "pass") for decision in one)
    assert set(many.tolist()) == ({0, 2} if rule is SIMPLE else {0, 1, 2})


@pytest.mark.parametrize(("kind", "size"), [("guarded", 0.0), ("guarded", inf), ("risk", 0.5), ("risk", nan)])
def test_a_rule_that_cannot_be_is_refused(kind, size):
    with pytest.raises(ValueError, match="must be above 0 and below"):
        Rule(kind, size)


def test_what_cannot_be_decided_is_refused():
    with pytest.raises(ValueError, match="low must not be above high"):
        decide(1.0, 1.0, low=2.0, high=1.0)
    with pytest.raises(ValueError, match="u must not be negative"):
        decide(1.0, -1.0, high=1.0)
    with pytest.raises(ValueError, match="an sd above 0"):
        Prior(0.0, 0.0)
