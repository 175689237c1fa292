"""Standard-value parts: the least error there is, by trying all; sensitivities and ranges."""

from itertools import product
from math import inf, log, sqrt

import numpy as np
import pytest

from bandproof.analysis.circuits import MfbFigures, MfbParts, mfb_design, mfb_figures
from bandproof.analysis.e_series import e_series, nearest_preferred, preferred_values, widest_step
from bandproof.analysis.one_pole import one_pole_figures
from bandproof.analysis.spread import variance_shares, worst_case
from bandproof.analysis.standard_parts import (
    CAPACITANCE,
    NAMES,
    RESISTANCE,
    TooSlow,
    best_resistors,
    part_sensitivities,
    standard_parts,
)
from tests.benchmarks.parts import SAMPLE, judged, least_error, requests

A = MfbFigures(1000.0, 10.0, 2.0)
B = MfbFigures(1000.0, 3.0, 10.0)


@pytest.mark.parametrize("number", range(SAMPLE))
def test_choices_of_random_requests_are_the_least_possible_or_name_their_breach(number):
    request = requests()[number]
    assert judged(request) == []


def test_rounding_each_resistor_alone_is_not_the_best_choice():
    exact = mfb_design(B.f0, B.q, B.gain, 10e-9)
    rounded = [nearest_preferred(value, "E96") for value in (exact.R_in, exact.R_shunt, exact.R_feedback)]
    found = best_resistors(B, 10e-9, "E96")
    errors = [worst(MfbParts(*resistors, 10e-9, 10e-9), B) for resistors in (rounded, found)]
    assert errors[1] < 0.8 * errors[0]


def worst(parts, wanted):
    figures = mfb_figures(parts)
    return max(abs(figures.f0 / wanted.f0 - 1), abs(figures.q / wanted.q - 1), abs(figures.gain / wanted.gain - 1))


# Source: example a of Op Amps for Everyone, ch. 16 (see test_circuits); with its nearest E96 parts, evaluated
# apart from this project: 1002.355 Hz, Q 9.9508, gain 2.00762.
def test_example_a_ends_no_worse_than_its_nearest_parts():
    found = best_resistors(A, 100e-9, "E96", within=(10.0, 1e6))
    nearest = worst(MfbParts(7.87e3, 80.6, 31.6e3, 100e-9, 100e-9), A)
    assert nearest == pytest.approx(1 - 9.9508 / 10, abs=1e-5)
    assert worst(MfbParts(*found, 100e-9, 100e-9), A) <= nearest


def test_example_a_breaches_the_range_with_its_capacitor_and_says_where():
    (choice,) = standard_parts(A, [100e-9])
    assert choice.breaches == ("R_shunt",)
    assert choice.parts.R_shunt == pytest.approx(80.381, rel=widest_step("E96") - 1)


def test_all_capacitors_are_searched_and_the_best_comes_first():
    capacitances = preferred_values("E12", *CAPACITANCE)
    choices = standard_parts(B, capacitances)
    errors = [choice.error for choice in choices]
    assert errors == pytest.approx(sorted(errors), abs=1e-9)
    inside = [c for c in capacitances if exact_inside(B, c)]
    assert set(inside) <= {choice.parts.C_1 for choice in choices}
    assert len(inside) >= 10
    for choice in choices:
        assert choice.breaches == ()
        assert all(RESISTANCE[0] <= getattr(choice.parts, name) <= RESISTANCE[1] for name in NAMES[:3])


def exact_inside(wanted, capacitance):
    parts = mfb_design(wanted.f0, wanted.q, wanted.gain, capacitance)
    return all(RESISTANCE[0] <= getattr(parts, name) <= RESISTANCE[1] for name in NAMES[:3])


def test_values_chosen_are_values_of_the_series():
    for choice in standard_parts(B, preferred_values("E6", *CAPACITANCE), resistors="E24"):
        for name in NAMES[:3]:
            value = getattr(choice.parts, name)
            assert nearest_preferred(value, "E24") == value


def test_equal_errors_stand_nearest_to_the_middle_of_the_range_first():
    choices = standard_parts(MfbFigures(1e3, 1.5, 10**0.5), [100e-12, 1e-9, 10e-9])
    assert [choice.parts.C_1 for choice in choices] == [10e-9, 1e-9]


def test_no_capacitor_within_the_ranges_gives_the_nearest_breach_first():
    wanted = MfbFigures(1000.0, 30.0, 3.0)  # R_feedback / R_shunt = 2 (2 Q^2 - gain) = 3594, the range holds 1000
    choices = standard_parts(wanted, preferred_values("E12", *CAPACITANCE))
    beyond = [
        max(max(RESISTANCE[0] / value, value / RESISTANCE[1]) for value in resistors(choice.parts))
        for choice in choices
    ]
    assert beyond == sorted(beyond)
    assert sqrt(3.594) / 1.13 < beyond[0] < sqrt(3.594) * 1.13  # both ends breached alike, to half an E12 step
    assert set(choices[0].breaches) == {"R_shunt", "R_feedback"}
    assert choices[0].error <= widest_step("E96") - 1


def resistors(parts):
    return parts.R_in, parts.R_shunt, parts.R_feedback


def test_a_real_op_amp_s_own_response_is_brought_nearest():
    wanted, gbw = MfbFigures(16e3, 1.5, 10**0.5), 1e6
    real, ideal = (standard_parts(wanted, [1e-9], gbw=x)[0] for x in (gbw, inf))
    assert real.parts != ideal.parts
    found = one_pole_figures(*resistors(ideal.parts), 1e-9, 1e-9, gbw=gbw)
    errors = np.abs(found / [wanted.f0, wanted.q, wanted.gain] - 1)
    assert real.error < errors.max()
    assert errors[0] > 0.02  # common practice: f0 falls by about Q f0 / gbw = 0.024, less what rounding gave


def test_an_op_amp_that_is_too_slow_is_refused_with_one_that_would_do():
    wanted = MfbFigures(1000.0, 1.5, 3.0)
    with pytest.raises(TooSlow, match="3000 Hz is too low") as caught:
        standard_parts(wanted, [10e-9], gbw=3e3)
    assert standard_parts(wanted, [10e-9], gbw=caught.value.least)
    assert caught.value.least > 3e3


def test_unrealizable_figures_are_refused():
    with pytest.raises(ValueError, match=r"sqrt\(gain / 2\) = 2\.23607, found 2\.2"):
        standard_parts(MfbFigures(1000.0, 2.2, 10.0), [10e-9])


# Source: exact logarithmic sensitivities of f0, Q and gain, equal capacitors, from the circuit's equations.
A_HALF = 0.5 * 80.381284 / (7957.7472 + 80.381284)
SENSITIVITIES = {
    "R_in": (-A_HALF, -A_HALF, -1.0),
    "R_shunt": (A_HALF - 0.5, A_HALF - 0.5, 0.0),
    "R_feedback": (-0.5, 0.5, 1.0),
    "C_1": (-0.5, 0.0, -0.5),
    "C_2": (-0.5, 0.0, 0.5),
}


def test_sensitivities_of_example_a():
    found = part_sensitivities(MfbParts(7957.7472, 80.381284, 31830.9886, 100e-9, 100e-9))
    assert found.keys() == SENSITIVITIES.keys()
    for name, row in SENSITIVITIES.items():
        assert found[name] == pytest.approx(row, abs=1e-8)


def test_worst_case_of_small_tolerances_is_that_of_the_worst_corner():
    parts = mfb_design(1000.0, 1.5, 10**0.5, 10e-9)
    tolerances = {name: 1e-5 if name.startswith("R") else 5e-5 for name in NAMES}
    moved = []
    for signs in product((-1, 1), repeat=5):
        values = [getattr(parts, n) * (1 + s * tolerances[n]) for n, s in zip(NAMES, signs, strict=True)]
        figures = mfb_figures(MfbParts(*values))
        moved.append([log(figures.f0 / 1000.0), log(figures.q / 1.5), log(figures.gain / 10**0.5)])
    found = worst_case(table(parts), np.array(list(tolerances.values())))
    # second order: the tolerance itself; Q of equal capacitors has no first order in them at all
    assert found == pytest.approx(np.abs(moved).max(axis=0), rel=5e-4)


def table(parts):
    """Return sensitivities (3, 5) of f0, Q and gain."""
    slopes = part_sensitivities(parts)
    return np.array([slopes[name] for name in NAMES]).T


def test_first_order_spread_is_the_scatter_of_draws():
    parts = mfb_design(1000.0, 1.5, 10**0.5, 10e-9)
    tolerances = {name: 1e-3 if name.startswith("R") else 5e-3 for name in NAMES}
    rng, count = np.random.default_rng(7), 20000
    values = {n: getattr(parts, n) * (1 + tolerances[n] * rng.uniform(-1, 1, count)) for n in NAMES}
    scatter = np.log(one_pole_figures(*values.values())).std(axis=1)
    found, _ = variance_shares(table(parts), np.array(list(tolerances.values())))
    assert found == pytest.approx(scatter, rel=0.02)  # 20000 draws give 0.5 %, times 4


def test_preferred_values_are_all_of_them_and_no_others():
    values = preferred_values("E24", 1e3, 1e6)
    assert len(values) == 73
    assert (values[0], values[-1]) == (1e3, 1e6)
    assert {round(value / 1e3, 9) for value in values if value < 1e4} == set(e_series("E24"))


@pytest.mark.parametrize("gbw", [inf, 4e6])
def test_witness_finds_what_is_there(gbw):
    """The reference against plain loops over the curve's closed form, E24, by other equations when ideal."""
    values = np.array(preferred_values("E24", 1e3, 1e6))
    axes = [values[12:22], values[14:24], values[42:52]]
    figures = [(one_pole_figures(*triple, 10e-9, 10e-9, gbw=gbw), triple) for triple in product(*axes)]
    least = min(np.abs(found / [B.f0, B.q, B.gain] - 1).max() for found, _ in figures)
    assert least_error(B, 10e-9, axes, gbw, 0.1) == pytest.approx(least, rel=1e-9)
    assert least_error(B, 10e-9, axes, gbw, least / 2) == inf
