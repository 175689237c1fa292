"""The control chart of single values, against the handbook and against draws."""

import statistics
from math import pi, sqrt

import numpy as np
import pytest

from bandproof.analysis.control_chart import D2, individuals, relative_spread, run_length

# NIST/SEMATECH e-Handbook, 6.3.2.2, example of an individuals chart: flow rates and the limits printed there (from
# memory; the moving ranges sum to 16.9, so that the limits can be had by hand, too)
FLOW = np.array([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
FLOW_LIMITS = 45.8159, 50.81, 55.8041


def test_limits_of_the_handbooks_example():
    found = individuals(FLOW)
    assert (found.lower, found.centre, found.upper) == pytest.approx(FLOW_LIMITS, abs=5e-5)
    by_hand = 3 / 1.128 * 16.9 / 9
    assert found.upper - found.centre == pytest.approx(by_hand, rel=1e-12)


def test_d2_is_the_mean_distance_of_two_normal_values_rounded_as_in_handbooks():
    # E|x - y| of two standard normal values is 2/sqrt(pi), because x - y has the variance 2 (by integration)
    assert pytest.approx(2 / sqrt(pi), abs=5e-4) == D2
    # 3/d2 is printed as 2.66 (handbook constants of the individuals chart, from memory)
    assert round(3 / D2, 2) == 2.66


def test_limits_hold_all_but_a_few_of_a_process_in_control():
    # 3 standard deviations of a normal process hold all but 0.27 %: of 20000 values 54 are expected outside, sd 7.3;
    # limits of 2000 values are known to 2 %, which moves that by some 15 %.
    rng = np.random.default_rng(3)
    found = individuals(rng.normal(10.0, 0.1, 2000))
    later = rng.normal(10.0, 0.1, 20000)
    outside = int(((later < found.lower) | (later > found.upper)).sum())
    assert 54 - 4 * 7.3 - 10 < outside < 54 + 4 * 7.3 + 10


def test_limits_are_no_closer_than_three_times_the_least_standard_deviation():
    found = individuals(np.array([5.0, 5.0, 5.0]), least=0.1)
    assert (found.lower, found.centre, found.upper) == pytest.approx((4.7, 5.0, 5.3))
    assert individuals(FLOW, least=1e-3) == individuals(FLOW)


@pytest.mark.parametrize("values", [[1.0], [], [[1.0, 2.0]]])
def test_no_chart_of_less_than_two_values(values):
    with pytest.raises(ValueError, match="two values or more"):
        individuals(np.array(values))


@pytest.mark.parametrize(
    ("values", "expected"),
    [([1, 1, 3, 3, 3], 3), ([3, 1, 1], -2), ([3, 3], 2), ([3, 2], 0), ([3, 2, 3], 1), ([], 0)],
)
def test_the_last_values_on_one_side_are_counted(values, expected):
    assert run_length(np.array(values, dtype=float), 2.0) == expected


def test_spread_is_the_sample_standard_deviation_over_the_mean():
    assert relative_spread(FLOW) == pytest.approx(statistics.stdev(FLOW) / statistics.mean(FLOW), rel=1e-12)
