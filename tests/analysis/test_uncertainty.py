"""Budgets against the examples of the guides, another library, and integrals of the distributions themselves."""

from __future__ import annotations

from fractions import Fraction
from math import comb, cos, factorial, floor, inf, pi, sin, sqrt

import GTC
import numpy as np
import pytest
from GTC import reporting, type_a
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import ndtr, ndtri, stdtr

from bandproof.analysis.uncertainty import (
    COVERAGE,
    Row,
    combine,
    coverage_factor,
    half_width,
    mean_and_covariance,
    probability_below,
    propagated,
    share,
)

# --- JCGM 100:2008, annex H.2: resistance and reactance from V, I and phi observed together ---

# Source: table H.2, as printed in the documentation of the open library GTC. V, mA, rad.
OBSERVED = np.array(
    [
        [5.007, 19.663, 1.0456],
        [4.994, 19.639, 1.0438],
        [5.005, 19.640, 1.0468],
        [4.990, 19.685, 1.0428],
        [4.999, 19.678, 1.0433],
    ]
)


def _impedance(mean, covariance):
    """Return R, X, Z in ohm and their covariance; derivatives by hand."""
    v, i, phi = mean * [1.0, 1e-3, 1.0]
    z, c, s = v / i, cos(phi), sin(phi)
    slopes = np.array([[c / i, -z * c / i, -z * s], [s / i, -z * s / i, z * c], [1 / i, -z / i, 0.0]])
    return np.array([z * c, z * s, z]), propagated(slopes * [1.0, 1e-3, 1.0], covariance)


def _correlations(covariance):
    u = np.sqrt(np.diag(covariance))
    return (covariance / np.outer(u, u))[np.triu_indices(len(u), 1)]


def test_repeated_observations_are_evaluated_as_in_gum_h2():
    mean, covariance = mean_and_covariance(OBSERVED)
    u = np.sqrt(np.diag(covariance))
    # published, table H.2: half a unit of the last digit
    assert mean == pytest.approx([4.9990, 19.6610, 1.04446], abs=5e-6)
    assert (np.abs(u - [0.0032, 0.0095, 0.00075]) < [5e-5, 5e-5, 5e-6]).all()
    assert _correlations(covariance) == pytest.approx([-0.36, 0.86, -0.65], abs=5e-3)
    # computed apart from this project from the same observations
    assert u == pytest.approx([0.0032093613, 0.0094710084, 0.00075206383], rel=1e-8)
    assert _correlations(covariance) == pytest.approx([-0.355311, 0.857624, -0.645111], abs=5e-7)


def test_correlated_inputs_are_propagated_as_in_gum_h2():
    value, covariance = _impedance(*mean_and_covariance(OBSERVED))
    u = np.sqrt(np.diag(covariance))
    # published, table H.3; X = 0.295 or 0.296, as its two approaches round
    assert value == pytest.approx([127.732, 219.847, 254.260], abs=5e-4)
    assert u == pytest.approx([0.071, 0.295, 0.236], abs=1e-3)
    assert (np.abs(u - [0.071, 0.295, 0.236]) < [5e-4, 1e-3, 5e-4]).all()
    assert _correlations(covariance) == pytest.approx([-0.588, -0.485, 0.993], abs=5.5e-4)
    # computed apart from this project, printed to these digits
    assert value == pytest.approx([127.732170, 219.846512, 254.259702], abs=5e-7)
    assert u == pytest.approx([0.0710714, 0.2955817, 0.2363361], abs=5e-8)
    assert _correlations(covariance) == pytest.approx([-0.588430, -0.485259, 0.992512], abs=5e-7)


def test_gum_h2_without_its_correlations_would_be_wrong():
    mean, covariance = mean_and_covariance(OBSERVED)
    u = np.sqrt(np.diag(_impedance(mean, np.diag(np.diag(covariance)))[1]))
    assert (np.abs(u - [0.071, 0.295, 0.236]) > 0.03).all()  # against the published ones


def test_another_library_gives_the_same_impedance():
    v, i, phi = type_a.multi_estimate_real(OBSERVED.T.tolist())
    i = 1e-3 * i
    theirs = [v / i * GTC.cos(phi), v / i * GTC.sin(phi), v / i]
    value, covariance = _impedance(*mean_and_covariance(OBSERVED))
    assert value == pytest.approx([GTC.value(x) for x in theirs], rel=1e-12)
    expected = [[GTC.get_covariance(a, b) for b in theirs] for a in theirs]
    np.testing.assert_allclose(covariance, expected, rtol=1e-10)


def test_the_law_of_propagation_takes_batches():
    rng = np.random.default_rng(3)
    slopes, root = rng.normal(size=(5, 2, 3)), rng.normal(size=(5, 3, 3))
    covariance = root @ root.swapaxes(1, 2)
    expected = [
        [[sum(s[a, i] * c[i, j] * s[b, j] for i in range(3) for j in range(3)) for b in (0, 1)] for a in (0, 1)]
        for s, c in zip(slopes, covariance, strict=True)
    ]
    np.testing.assert_allclose(propagated(slopes, covariance), expected, rtol=1e-12)


@pytest.mark.parametrize("observations", [np.zeros((1, 3)), np.zeros(3)])
def test_one_observation_has_no_scatter(observations):
    with pytest.raises(ValueError, match="n of 2 or more"):
        mean_and_covariance(observations)


# --- independent rows ---


def _row(u, dof=inf, distribution="normal", sensitivity=1.0, name="a", kind="B"):
    return Row(name, kind, distribution, u, sensitivity, dof, "a test")


def test_effective_degrees_of_freedom_are_those_of_the_end_gauge():
    # Source: JCGM 100:2008, H.1.6, from memory: parts of 25, 9.7, 2.9, 16.6 nm with 18, 25.6, 50, 2 degrees of freedom
    # give 16 whole ones, and k = 2.92 at 99 %.
    parts = [(25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0)]
    budget = combine([_row(u, dof) for u, dof in parts], coverage=0.99)
    assert int(budget.dof) == 16
    assert coverage_factor(budget.dof, coverage=0.99) == pytest.approx(2.92, abs=5e-3)
    assert budget.u == pytest.approx(32.0, abs=0.5)


@pytest.mark.parametrize("seed", range(20))
def test_budgets_of_independent_rows_agree_with_another_library(seed):
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 9))
    u, sensitivity = rng.uniform(0.1, 3.0, count), rng.uniform(-4.0, 4.0, count)
    dof = np.where(rng.uniform(size=count) < 0.3, inf, rng.uniform(2.0, 50.0, count))
    rows = [
        _row(*values, "t" if values[1] < inf else "normal", s) for *values, s in zip(u, dof, sensitivity, strict=True)
    ]
    inputs = [GTC.ureal(0.0, *values) for values in zip(u.tolist(), dof.tolist(), strict=True)]
    theirs = sum(s * x for s, x in zip(sensitivity.tolist(), inputs, strict=True))
    ours = combine(rows)
    assert ours.u == pytest.approx(GTC.uncertainty(theirs), rel=1e-9)
    assert ours.dof == pytest.approx(GTC.dof(theirs), rel=1e-9)
    whole = int(ours.dof) if ours.dof < inf else inf  # JCGM 100, G.4.1 truncates, the library does not
    assert coverage_factor(ours.dof) == pytest.approx(reporting.k_factor(whole, 100 * COVERAGE), rel=1e-9)
    assert sum(share(row, ours) for row in ours.rows) == pytest.approx(1.0, rel=1e-12)
    assert len(ours.rows) == count


def test_one_normal_row_with_few_observations_has_the_factor_of_student():
    # Source: JCGM 100:2008, table G.2, p = 95.45 %: k = 4.53 for 2 degrees of freedom, 2.28 for 10 (from memory)
    for dof, k in ((2.0, 4.53), (10.0, 2.28)):
        assert combine([_row(3.0, dof, "t")]).coverage_factor == pytest.approx(k, abs=5e-3)


def test_type_a_is_told_apart():
    budget = combine([_row(3.0, kind="A"), _row(4.0)])
    assert (budget.u, budget.u_type_a) == (5.0, 3.0)


def test_nothing_but_zeros_gives_zero():
    budget = combine([_row(0.0)])
    assert (budget.u, budget.expanded, share(budget.rows[0], budget)) == (0.0, 0.0, 0.0)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"u": -1.0}, "must not be negative"),
        ({"u": inf}, "must not be negative"),
        ({"sensitivity": inf}, "sensitivity must be finite"),
        ({"dof": 0.0}, "dof must be positive"),
    ],
)
def test_a_row_that_cannot_be_is_refused(changes, words):
    with pytest.raises(ValueError, match=words):
        _row(**{"u": 1.0, **changes})


def test_a_row_without_a_reason_and_a_budget_without_rows_are_refused():
    with pytest.raises(ValueError, match="reason is empty"):
        Row("a", "B", "normal", 0.0, 1.0, inf, "")
    with pytest.raises(ValueError, match="at least one row"):
        combine([])


# --- the interval: distributions folded on a grid, against integrals and draws ---

QUANTILES = {  # of distributions with a standard deviation of 1, by hand from their definitions
    "uniform": lambda p: sqrt(3) * (2 * p - 1),
    "triangular": lambda p: np.sign(p - 0.5) * sqrt(6) * (1 - np.sqrt(1 - np.abs(2 * p - 1))),
    "arcsine": lambda p: sqrt(2) * np.sin(pi * (p - 0.5)),
    "normal": ndtri,
}


def _exact(bounded, u, distribution, coverage):
    """Return the half-width of the sum of a bounded variable and another one by an integral over the bounded one."""

    def held(h):
        # over the bounded variable's probability: a density may be infinite at its ends, a quantile is not
        def inside(p):
            at = u * QUANTILES[bounded](p)
            return distribution(h - at) - distribution(-h - at)

        return quad(inside, 0.0, 1.0, epsabs=1e-9, limit=400, points=[0.5])[0] - coverage

    return brentq(held, 0.0, 100.0 * (1 + u), xtol=1e-9)


@pytest.mark.parametrize("coverage", [0.9, COVERAGE])
@pytest.mark.parametrize("size", [0.2, 1.0, 5.0])
@pytest.mark.parametrize("bounded", ["uniform", "triangular", "arcsine"])
def test_a_bounded_row_and_a_normal_one_hold_what_an_integral_says(bounded, size, coverage):
    found = half_width([_row(size, distribution=bounded), _row(0.6), _row(0.8)], coverage=coverage)
    assert found == pytest.approx(_exact(bounded, size, ndtr, coverage), rel=1e-4)


# At 1 and 2 degrees of freedom the tails reach far beyond any multiple of u; as of two and three readings.
@pytest.mark.parametrize("size", [0.2, 1.0])
@pytest.mark.parametrize("dof", [1.0, 2.0, 5.0])
def test_a_uniform_row_and_few_observations_hold_what_an_integral_says(dof, size):
    found = half_width([_row(size, distribution="uniform"), _row(1.0, dof, "t")])
    assert found == pytest.approx(_exact("uniform", size, lambda x: stdtr(dof, x), COVERAGE), rel=1e-3)


def test_two_uniform_rows_of_one_size_are_a_triangle():
    # |x| of a triangle of half-width w holds p at w (1 - sqrt(1 - p)), by its area
    for p in (0.5, 0.9, COVERAGE):
        found = half_width([_row(1.0, distribution="uniform")] * 2, coverage=p)
        assert found == pytest.approx(2 * sqrt(3) * (1 - sqrt(1 - p)), rel=1e-4)
        assert half_width([_row(sqrt(2), distribution="triangular")], coverage=p) == pytest.approx(found, rel=1e-4)


def test_two_uniform_rows_of_other_sizes_are_a_trapezium():
    # Source: area of the trapezium's corners: beyond h lies (a + b - h)^2 / (8 a b) on either side, where h > |a - b|
    a, b = sqrt(3), 0.5 * sqrt(3)
    found = half_width([_row(1.0, distribution="uniform"), _row(0.5, distribution="uniform")])
    assert found == pytest.approx(a + b - sqrt(4 * a * b * (1 - COVERAGE)), rel=1e-4)


def test_four_uniform_rows_hold_what_the_supplement_says():
    # Source: JCGM 101:2008, 9.2.3, from memory: 95 % lie within 3.88, by the law of propagation within 3.92; in closed
    # form 2 sqrt(3) (2 - 0.6**0.25), where the end of the sum of four holds x**4 / 24.
    rows = [_row(1.0, distribution="uniform")] * 4
    found = half_width(rows, coverage=0.95)
    assert found == pytest.approx(3.88, abs=5e-3)
    assert found == pytest.approx(2 * sqrt(3) * (2 - 0.6**0.25), rel=1e-4)
    budget = combine(rows, coverage=0.95)
    assert coverage_factor(budget.dof, coverage=0.95) * budget.u == pytest.approx(3.92, abs=5e-3)


def test_the_probability_below_a_value_is_that_of_the_sum_of_the_rows():
    x = np.array([-1.9, -1.0, 0.0, 0.4, 1.7])
    two = [_row(1.0, distribution="uniform")] * 2  # a triangle of half-width 2 sqrt(3), by its area
    left = 0.5 * (1.0 - np.abs(x) / (2 * sqrt(3))) ** 2
    assert probability_below(two, x) == pytest.approx(np.where(x < 0, left, 1 - left), abs=1e-5)
    normal = [_row(0.6), _row(0.8)]
    assert probability_below(normal, x) == pytest.approx(ndtr(x), abs=1e-12)
    assert probability_below([_row(2.0, dof=3.0)], x) == pytest.approx(stdtr(3, x / 2.0), abs=1e-12)
    assert probability_below(two, np.array([-inf, inf])).tolist() == [0.0, 1.0]


def test_as_many_rows_as_a_budget_has_are_folded_without_a_shift():
    # Source: P. S. de Laplace's formula for the sum of n uniform variables (Irwin-Hall), in whole numbers
    n = 20

    def held(h):
        x = Fraction(h / (2 * sqrt(3))) + Fraction(n, 2)
        terms = ((-1) ** k * comb(n, k) * (x - k) ** n for k in range(floor(x) + 1))
        return 2.0 * float(sum(terms) / factorial(n)) - 1.0

    found = half_width([_row(1.0, distribution="uniform")] * n)
    assert found == pytest.approx(brentq(lambda h: held(h) - COVERAGE, 0.0, 3 * sqrt(n)), rel=2e-4)


def test_a_single_arcsine_row_holds_a_sine():
    # the share of time that a sine is within h of 0 is 2/pi asin(h / amplitude)
    found = half_width([_row(1.0, distribution="arcsine")], coverage=0.5)
    assert found == pytest.approx(sqrt(2) * sin(0.5 * pi / 2), rel=1e-3)


@pytest.mark.parametrize("seed", [0, 1])
def test_whole_budgets_hold_what_a_million_draws_hold(seed):
    """Outside: JCGM 101, propagation by draws; the order statistics' own error is 4 of theirs."""
    rng = np.random.default_rng([seed, 101])
    names = ["uniform", "triangular", "arcsine", "normal", "uniform", "triangular"]
    u, draws = rng.uniform(0.05, 2.0, len(names)), 1_000_000
    rows = [_row(size, distribution=name) for size, name in zip(u, names, strict=True)]
    total = sum(size * QUANTILES[name](rng.uniform(size=draws)) for size, name in zip(u, names, strict=True))
    extra = rng.uniform(0.2, 1.0)
    rows.append(_row(extra, 6.0, "t"))
    size = np.sort(np.abs(total + extra * rng.standard_t(6.0, draws)))
    error = 4 * sqrt(COVERAGE * (1 - COVERAGE) / draws)
    low, high = (size[int(draws * p)] for p in (COVERAGE - error, COVERAGE + error))
    assert low < half_width(rows) < high
    assert high / low < 1.01
