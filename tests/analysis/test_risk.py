"""The witness of risks (tests/benchmarks/_risk.py) against published ones, and against draws."""

from __future__ import annotations

import tomllib
from math import exp, inf, isnan

import numpy as np
import pytest
from scipy.special import ndtri

from tests.benchmarks._risk import normal_process, risks

EXACT = 5e-7  # of a probability


@pytest.fixture(scope="module")
def published(outside):
    return tomllib.loads((outside / "conformity.toml").read_text())


@pytest.fixture
def bearings(published):
    """The ball bearings of JCGM 106:2012, 9.5.4: density, ends, u of a gamma process."""
    case = published["bearings"]
    assert case["shape"] == 4.0  # the density below has 3! in it

    def density(x):
        return (x / case["scale"]) ** 3 * exp(-x / case["scale"]) / (6.0 * case["scale"]) if x > 0.0 else 0.0

    return density, (0.0, inf), case["u"]


def test_risks_of_the_ball_bearings_are_those_of_the_guide(published, bearings):
    case = published["bearings"]
    found = risks(*bearings, high=case["upper"])
    assert found.outside == pytest.approx(case["outside"], abs=EXACT)
    assert found.consumer == pytest.approx(case["consumer"], abs=EXACT)
    assert found.producer == pytest.approx(case["producer"], abs=EXACT)
    assert (round(100 * found.outside, 1), round(100 * found.consumer, 1)) == (4.2, 0.8)  # as printed


def test_risks_at_the_acceptance_limit_of_the_ball_bearings_are_those_of_the_guide(published, bearings):
    case = published["bearings"]
    assert round(case["limit_for_0001"], 2) == 1.67  # as printed
    found = risks(*bearings, high=case["upper"], accept_high=case["limit_for_0001"])
    assert found.consumer == pytest.approx(0.001, abs=1e-9)
    assert found.producer == pytest.approx(case["producer_at_that_limit"], abs=EXACT)


def test_a_normal_process_has_the_published_risks(published):
    case = published["deaver"]
    found = risks(*normal_process(0.0, case["process_sd"]), case["u"], low=-case["limit"], high=case["limit"])
    assert found.consumer == pytest.approx(case["consumer"], abs=EXACT)
    assert found.producer == pytest.approx(case["producer"], abs=EXACT)


def test_false_accepts_are_those_of_the_rp19_table(published):
    table = published["rp19"]
    for inside, accept, conditional in zip(*table.values(), strict=True):
        sd = 1.0 / ndtri(0.5 * (1.0 + inside))
        found = risks(*normal_process(0.0, sd), sd / 4.0, low=-1.0, high=1.0)
        assert 1.0 - found.outside == pytest.approx(inside, abs=EXACT)
        assert found.consumer == pytest.approx(accept / 100.0, abs=EXACT)
        assert found.conditional_false_acceptance == pytest.approx(conditional / 100.0, abs=EXACT)


@pytest.mark.parametrize("seed", range(4))
def test_risks_are_what_draws_show(seed):
    rng = np.random.default_rng(seed)
    mean, sd, u = rng.uniform(-1.0, 1.0), rng.uniform(0.5, 2.0), rng.uniform(0.1, 1.0)
    limits = {"low": -2.0, "high": 1.5, "accept_low": -1.5, "accept_high": 1.8}
    true = rng.normal(mean, sd, 400_000)
    value = rng.normal(true, u)
    accepted, conforms = (value >= -1.5) & (value <= 1.8), (true >= -2.0) & (true <= 1.5)
    found = risks(*normal_process(mean, sd), u, **limits)
    seen = [~conforms, accepted, accepted & ~conforms, ~accepted & conforms]
    for exact, drawn in zip((found.outside, found.accepted, found.consumer, found.producer), seen, strict=True):
        assert drawn.mean() == pytest.approx(exact, abs=4.5 * (exact * (1.0 - exact) / 400_000) ** 0.5)
    assert found.accepted == pytest.approx(1.0 - found.outside - found.producer + found.consumer, abs=1e-12)


def test_a_perfect_measurement_has_no_risk_and_a_tiny_uncertainty_hardly_any():
    process = normal_process(0.0, 1.0)
    found = risks(*process, 0.0, low=-1.0, high=1.0)
    assert (found.consumer, found.producer) == (0.0, 0.0)
    # u -> 0: both risks are f(limit) u / sqrt(2 pi) a limit, f the density there (first order, by hand)
    expected = 2 * process[0](1.0) * 1e-6 / (2 * np.pi) ** 0.5
    found = risks(*process, 1e-6, low=-1.0, high=1.0)
    assert [found.consumer, found.producer] == pytest.approx([expected, expected], rel=1e-5)


def test_guard_bands_that_cross_accept_nothing():
    found = risks(*normal_process(0.0, 1.0), 0.1, low=-1.0, high=1.0, accept_low=0.5, accept_high=-0.5)
    assert (found.accepted, found.consumer) == (0.0, 0.0)
    assert isnan(found.conditional_false_acceptance)
    assert found.producer == pytest.approx(1.0 - found.outside, abs=1e-12)


def test_what_has_no_risk_is_refused():
    process = normal_process(0.0, 1.0)
    with pytest.raises(ValueError, match="u must not be negative"):
        risks(*process, -1.0)
    with pytest.raises(ValueError, match="low must not be above high"):
        risks(*process, 1.0, low=1.0, high=0.0)
    with pytest.raises(ValueError, match="sd above 0"):
        normal_process(0.0, 0.0)
