"""Decisions and budgets against the guides' own examples."""

from __future__ import annotations

from math import inf, nan

import pytest

from bandproof.analysis.decision import conformance_probability, decide, worst
from bandproof.analysis.uncertainty import Row, combine, coverage_factor


# Source: JCGM 106:2012, Zener diode and motor oil examples (0.92 and 0.66 published)
@pytest.mark.parametrize(
    ("value", "u", "low", "high", "probability"),
    [(-5.47, 0.05, -inf, -5.40, 0.919243), (13.6, 1.8, 12.5, 16.3, 0.662630)],
)
def test_conformance_probability_of_the_guide(value, u, low, high, probability):
    assert conformance_probability(value, u, low=low, high=high) == pytest.approx(probability, abs=5.1e-7)


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
    assert budget.coverage_factor == pytest.approx(2.92, abs=0.0051)


def test_budget_keeps_every_row_and_refuses_an_empty_reason():
    nothing = Row("hum", "B", "normal", 0.0, 1.0, inf, "0, because every tone is 1 kHz or above")
    fit = Row("fit", "A", "normal", 2.0, -1.5, 20.0, "covariance of the fit")
    budget = combine([nothing, fit])
    assert budget.rows == (nothing, fit)
    assert budget.u == budget.u_type_a == pytest.approx(3.0)
    with pytest.raises(ValueError, match="row 'thru': reason is empty"):
        Row("thru", "B", "normal", 0.0, 1.0, inf, "")
