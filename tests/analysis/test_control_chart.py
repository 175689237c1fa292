"""The control chart of single values, against the handbook and against draws."""

import statistics
from math import sqrt

import numpy as np
import pytest

from bandproof.analysis.control_chart import prediction_limits, relative_spread, run_length

# NIST/SEMATECH e-Handbook, 6.3.2.2, flow rates of its example of a chart of single values (from memory)
FLOW = np.array([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
THREE_SIGMA = 0.0027  # what a normal value leaves three standard deviations by, both sides, rounded as in handbooks
# JCGM 100:2008, table G.2, Student's t for 99.73 % (from memory), by degrees of freedom
T_99_73 = {2: 19.21, 4: 6.62, 7: 4.53, 9: 4.09, 10: 3.96, 19: 3.45, 20: 3.42}


@pytest.mark.parametrize(("dof", "t"), T_99_73.items())
def test_limits_are_those_of_one_more_value_by_the_table_of_students_t(dof, t):
    # a value and the mean of n others differ with the variance 1 + 1/n (by hand)
    values = np.random.default_rng(dof).normal(10.0, 0.1, dof + 1)
    found = prediction_limits(values, chance=THREE_SIGMA)
    mean, half = statistics.mean(values), t * statistics.stdev(values) * sqrt(1 + 1 / (dof + 1))
    assert (found.lower, found.centre, found.upper) == pytest.approx(
        (mean - half, mean, mean + half), abs=0.0015 * half
    )


def test_limits_of_many_values_are_the_three_standard_deviations_of_handbooks():
    values = np.random.default_rng(3).normal(10.0, 0.1, 100_000)
    found = prediction_limits(values, chance=THREE_SIGMA)
    assert found.upper - found.centre == pytest.approx(3 * values.std(), rel=1e-4)


@pytest.mark.parametrize("n", [8, 20])
def test_the_next_value_of_a_process_in_control_leaves_the_limits_as_often_as_stated(n):
    # 20000 charts of n values each and one more: 2 % are 400 outside, standard deviation 20
    draws = np.random.default_rng(n).normal(10.0, 0.1, (20_000, n + 1))
    limits = [prediction_limits(row[:n], chance=0.02) for row in draws]
    outside = sum(not chart.lower <= row[n] <= chart.upper for chart, row in zip(limits, draws, strict=True))
    assert abs(outside - 400) < 4 * 20


def test_limits_are_no_closer_than_those_of_the_least_standard_deviation():
    found = prediction_limits(np.array([5.0, 5.0, 5.0]), chance=THREE_SIGMA, least=0.1)
    half = 0.3 * sqrt(4 / 3)
    assert (found.lower, found.centre, found.upper) == pytest.approx((5 - half, 5.0, 5 + half), rel=1e-5)
    assert prediction_limits(FLOW, chance=0.01, least=1e-3) == prediction_limits(FLOW, chance=0.01)


@pytest.mark.parametrize("values", [[1.0], [], [[1.0, 2.0]]])
def test_no_chart_of_less_than_two_values(values):
    with pytest.raises(ValueError, match="two values or more"):
        prediction_limits(np.array(values), chance=0.01)


@pytest.mark.parametrize(
    ("values", "expected"),
    [([1, 1, 3, 3, 3], 3), ([3, 1, 1], -2), ([3, 3], 2), ([3, 2], 0), ([3, 2, 3], 1), ([], 0)],
)
def test_the_last_values_on_one_side_are_counted(values, expected):
    assert run_length(np.array(values, dtype=float), 2.0) == expected


def test_spread_is_the_sample_standard_deviation_over_the_mean():
    assert relative_spread(FLOW) == pytest.approx(statistics.stdev(FLOW) / statistics.mean(FLOW), rel=1e-12)
