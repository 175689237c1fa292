"""A twentieth of the studies of coverage and efficiency (tests/benchmarks), seeded; bounds that so few can support."""

from math import sqrt

import numpy as np
import pytest

from tests.benchmarks import coverage, efficiency

BENCHES, SWEEPS = 50, 300


def four(p, count):
    """Return four standard deviations of a share p of so many."""
    return 4 * sqrt(p * (1 - p) / count)


@pytest.fixture(scope="module")
def declared():
    return coverage.table(coverage.many(range(BENCHES), coverage.CASES["declared"]))


def test_intervals_of_a_hundred_benches_hold_the_truth_as_often_as_they_say(declared):
    least, (low, high) = coverage.LEAST, coverage.POOLED
    assert declared["held"].min() > least - four(least, BENCHES)
    # the figures of one bench share its errors: counted as one of them
    assert low - four(low, BENCHES) < declared["pooled"] < min(1.0, high + four(high, BENCHES))


def test_intervals_of_a_hundred_benches_are_neither_too_wide_nor_too_narrow(declared):
    # an estimated 95 % point of |errors| scatters by sqrt(p (1 - p) / n) over its density, normal: 0.117 at 1.96
    own = 4 * sqrt(0.95 * 0.05 / BENCHES) / (0.117 * 1.96)
    low, high = coverage.WIDTHS
    assert low * (1 - own) < min(declared["widths"])
    assert max(declared["widths"]) < high * (1 + own)


def test_hardly_a_bench_as_declared_raises_an_alarm(declared):
    assert declared["said"] < coverage.MOST_ALARMS + four(coverage.MOST_ALARMS, BENCHES)


@pytest.mark.parametrize("seed", [0, 1])
def test_a_bench_gives_the_same_figures_over_tcp(seed):
    first, second = coverage.over_tcp(seed)
    assert first == second
    assert np.isfinite(first.errors).all()


@pytest.mark.parametrize("name", efficiency.BANDS)
def test_errors_of_500_sweeps_are_as_large_as_the_bound(name):
    f0, q, gain, delay = efficiency.BANDS[name]
    theta = np.array([f0, q, gain, 0.0, delay])
    found = efficiency.errors(theta, SWEEPS, [SWEEPS, list(efficiency.BANDS).index(name)])
    ratio = np.sqrt((found**2).mean(axis=0)) / efficiency.bound(theta)
    assert ratio == pytest.approx(np.ones(3), abs=4 / sqrt(2 * SWEEPS))
