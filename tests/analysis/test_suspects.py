"""Who is suspected, on multiple-feedback band-passes whose figures are known in closed form (suspects, tolerances)."""

from functools import cache
from itertools import product

import numpy as np
import pytest
from scipy import optimize
from scipy.stats import chi2

from bandproof.analysis.circuits import MfbParts, mfb_design, mfb_figures, mfb_network
from bandproof.analysis.curve import figure_slopes
from bandproof.analysis.elements import OpAmp
from bandproof.analysis.suspects import judged
from bandproof.analysis.tolerances import Circuit, Seen, covariance, least_distance, outside

PARTS = ("R_in", "R_shunt", "R_feedback", "C_1", "C_2")
KINDS = ("resistor", "resistor", "resistor", "capacitor", "capacitor")
TOLERANCES = (0.01, 0.01, 0.01, 0.05, 0.05)
CENTRES = (160.0, 1e3, 6.3e3)
U = np.array([1e-4, 2e-3, 3e-3])  # relative standard uncertainty of f0, Q, gain: about that of an 8-bit scope


def figures(values):
    """Return ln f0, ln Q, ln gain (K, 3) with an ideal op-amp, in closed form."""
    found = [mfb_figures(MfbParts(*row)) for row in values]
    return np.log([[one.f0, one.q, one.gain] for one in found])


def slopes(values, _=None):
    """Return d ln figure / d ln value (K, 3, 5), by differences of the closed form."""
    steps = np.exp(1e-5 * np.eye(5))
    return np.stack([(figures(values * step) - figures(values / step)) / 2e-5 for step in steps], axis=-1)


@cache
def circuit(centre, *, q=1.5, gain=10**0.5, tolerances=TOLERANCES):
    parts = mfb_design(centre, q, gain, 5e-6 / centre)
    values = np.array([getattr(parts, name) for name in PARTS])
    row = values[None]
    return Circuit(PARTS, KINDS, values, np.array(tolerances), figures(row)[0], slopes(row)[0], figures, slopes)


def board(**options):
    return [circuit(centre, **options) for centre in CENTRES]


def seen(circuits, factors=None, u=U):
    """Return what is measured, without errors, of parts times factors {(stage, part): factor}."""
    found = []
    for i, one in enumerate(circuits):
        values = one.values.copy()
        for (stage, part), factor in (factors or {}).items():
            if stage in (i, "all"):
                members = [j for j, name in enumerate(PARTS) if name == part or KINDS[j] == part]
                values[members] *= factor
        found.append(Seen(figures(values[None])[0], np.diag(u**2)))
    return found


def moved(given, gains):
    """Return what is measured with gains times factors {stage: factor}."""
    return [
        Seen(one.figures + np.array([0.0, 0.0, np.log(gains.get(i, 1.0))]), one.covariance)
        for i, one in enumerate(given)
    ]


def suspects(factors, **options):
    circuits = board(**options)
    return judged(circuits, seen(circuits, factors))


# --- what tolerances can do ---


def test_slopes_of_a_nodal_curve_are_the_published_sensitivities():
    """S. Mancini (ed.), Op Amps for Everyone, chapter 16: derivatives of its formulas, made by hand, op-amp ideal."""
    parts = mfb_design(1e3, 10.0, 2.0, 100e-9)
    network = mfb_network("", parts, OpAmp("U", "", "", "", gbw=1e13), node_in="in", node_out="out")
    values = {name: np.array([getattr(parts, name)]) for name in PARTS}
    known = np.log([[1e3, 10.0, 2.0]])
    found = figure_slopes(network, known, node_in="in", node_out="out", values=values)[0]
    a = parts.R_shunt / (parts.R_in + parts.R_shunt)
    b = 1.0 - a
    expected = [
        [-a / 2, -b / 2, -0.5, -0.5, -0.5],
        [-a / 2, -b / 2, 0.5, 0.0, 0.0],
        [-1.0, 0.0, 1.0, -0.5, 0.5],
    ]
    assert found == pytest.approx(np.array(expected), abs=5e-4)  # 4e-4 is what differences 2 % of an edge away cost


def test_slopes_where_there_is_no_band_are_not_a_number():
    parts = mfb_design(1e3, 10.0, 2.0, 100e-9)
    network = mfb_network("", parts, OpAmp("U", "", "", "", gbw=1e13), node_in="in", node_out="out")
    values = {name: np.array([getattr(parts, name)] * 2) for name in PARTS}
    known = np.array([np.log([1e3, 10.0, 2.0]), [np.nan] * 3])
    found = figure_slopes(network, known, node_in="in", node_out="out", values=values)
    assert np.isfinite(found[0]).all()
    assert np.isnan(found[1]).all()


def test_covariance_is_that_of_drawn_parts():
    """Parts drawn uniformly: their figures' covariance, by its own standard error (normal theory, from memory)."""
    one, count = circuit(1e3), 4000
    rng = np.random.default_rng(5)
    drawn = figures(one.values * (1.0 + np.array(TOLERANCES) * rng.uniform(-1.0, 1.0, (count, 5))))
    expected = covariance(one, one.slopes, Seen(one.nominal, np.zeros((3, 3))))
    size = np.sqrt(np.outer(np.diag(expected), np.diag(expected)) + expected**2) / np.sqrt(count)
    assert (np.abs(np.cov(drawn.T) - expected) < 4.0 * size).all()


@pytest.mark.parametrize("corner", list(product([-1.0, 1.0], repeat=5)))
def test_no_corner_of_the_tolerances_is_outside(corner):
    """Also at 20 % capacitors, where figures are not linear: a mean of squares there would be."""
    for tolerances in (TOLERANCES, (0.01, 0.01, 0.01, 0.2, 0.2)):
        one = circuit(1e3, tolerances=tolerances)
        there = figures((one.values * (1.0 + 0.999 * np.array(tolerances) * np.array(corner)))[None])[0]
        assert least_distance(one, Seen(there, np.diag(U**2))) < 0.1
        assert outside([one], [Seen(there, np.diag(U**2))]) == []


@pytest.mark.parametrize(("part", "factor"), [(0, 1.1), (1, 1.3), (2, 0.9), (3, 1.1), (4, 0.85)])
def test_least_distance_is_what_a_general_minimizer_finds(part, factor):
    one = circuit(1e3)
    values = one.values.copy()
    values[part] *= factor
    measured = Seen(figures(values[None])[0], np.diag(U**2))

    def residuals(at):
        return (figures((one.values * np.exp(at))[None])[0] - measured.figures) / U

    bounds = np.log1p(-np.array(TOLERANCES)), np.log1p(TOLERANCES)
    least = 2.0 * optimize.least_squares(residuals, np.zeros(5), bounds=bounds, xtol=1e-12, ftol=1e-12).cost
    found = least_distance(one, measured)
    assert found > chi2.ppf(0.99, 3)
    assert found == pytest.approx(least, rel=1e-3)  # covariances are kept regular by 1e-6, a hundredth of f0's u


# Every part near an end of its tolerance: factors of the parts, in tolerances.
UNLIKELY = {
    "one reel": (-0.9, -0.9, -0.9, 0.98, 0.98),
    "all for a low gain and Q": (0.98, 0.98, -0.98, 0.98, -0.98),
    "all for a high f0": (-0.98, -0.98, -0.98, -0.98, -0.98),
}


@pytest.mark.parametrize("corner", UNLIKELY.values(), ids=UNLIKELY)
@pytest.mark.parametrize("errors", range(3))
def test_parts_within_tolerance_are_not_accused_however_unlikely(corner, errors):
    """Independent draws would hardly do that on all stages, and yet nothing is wrong."""
    rng = np.random.default_rng([7, errors])
    circuits = board()
    factors = {("all", part): 1.0 + t * c for part, t, c in zip(PARTS, TOLERANCES, corner, strict=True)}
    given = [Seen(one.figures + 0.7 * U * rng.standard_normal(3), one.covariance) for one in seen(circuits, factors)]
    away = [one.figures - c.nominal for c, one in zip(circuits, given, strict=True)]
    far = sum(d @ np.linalg.solve(covariance(c, c.slopes, s), d) for c, s, d in zip(circuits, given, away, strict=True))
    assert corner == UNLIKELY["one reel"] or far > chi2.ppf(0.99, 9)  # so a distance with their spread would accuse
    assert judged(circuits, given) == []


# --- hypotheses ---


@pytest.mark.parametrize(
    ("part", "factor"),
    [case for case in product(PARTS, [0.01, 0.1, 0.5, 2.0, 10.0, 100.0]) if case != ("R_shunt", 100.0)],  # open, then
)
def test_a_wrong_part_is_named_with_its_factor(part, factor):
    (found,) = suspects({(1, part): factor})
    assert [(h.kind, h.stages, h.names) for h in found.candidates] == [("part", (1,), (part,))]
    assert found.explained
    assert found.delta_chi_square > 4.0
    assert np.exp(found.candidates[0].log_factor) == pytest.approx(factor, rel=0.01)


def test_chi_square_is_that_of_all_parts_fitted_with_their_tolerances_as_observations():
    """Bayes' way to the same number: every part an unknown, held by its tolerance, the suspect's not held."""
    circuits = board()[:1]
    given = seen(circuits, {(0, "R_feedback"): 1.1, (0, "C_1"): 0.97, (0, "R_in"): 1.004})
    (found,) = judged(circuits, given)
    one, held = circuits[0], np.array([1.0, 1.0, 0.0, 1.0, 1.0]) * 3.0**0.5 / np.array(TOLERANCES)

    def residuals(at):
        return np.concatenate([(figures((one.values * np.exp(at))[None])[0] - given[0].figures) / U, held * at])

    fitted = optimize.least_squares(residuals, np.zeros(5), xtol=1e-12, ftol=1e-12)
    assert found.candidates[0].names == ("R_feedback",)
    assert found.candidates[0].chi_square == pytest.approx(2.0 * fitted.cost, rel=0.03)  # slopes are those at one place
    assert found.candidates[0].log_factor == pytest.approx(fitted.x[2], abs=0.1 * found.candidates[0].u)


@pytest.mark.parametrize("factor", [0.92, 1.08, 1.5])
def test_a_factor_on_all_capacitors_is_not_blamed_on_one(factor):
    (found,) = suspects({("all", "capacitor"): factor})
    assert (found.candidates[0].kind, found.candidates[0].names) == ("common", ("capacitor",))
    assert len(found.candidates) == 1
    # what a reel can be holds the estimate towards 1, by its variance against that of the others: 0.0866, 0.012
    assert found.candidates[0].log_factor == pytest.approx(np.log(factor), rel=0.04)


def test_resistors_and_capacitors_of_the_same_tolerance_cannot_be_told_apart():
    """Only R times C is in f0; Q and gain hold ratios."""
    (found,) = suspects({("all", "capacitor"): 1.08}, tolerances=(0.02,) * 5)
    assert {h.names for h in found.candidates} == {("capacitor",), ("resistor",)}
    assert found.delta_chi_square < 0.1


def test_swapped_resistors_are_named_in_their_stage():
    ratio = circuit(1e3).values[1] / circuit(1e3).values[0]
    (found,) = suspects({(2, "R_in"): ratio, (2, "R_shunt"): 1.0 / ratio})
    (named,) = found.candidates
    assert (named.kind, named.stages, named.names) == ("swapped", (2,), ("R_in", "R_shunt"))
    assert found.explained


def test_a_part_without_end_is_open():
    (found,) = suspects({(0, "R_shunt"): 1e6})
    (named,) = found.candidates
    assert (named.names, named.ends) == (("R_shunt",), "open")


def test_two_bad_stages_are_told_one_by_one():
    found = suspects({(0, "R_in"): 10.0, (2, "C_1"): 0.1})
    assert [(one.candidates[0].stages, one.candidates[0].names) for one in found] == [
        ((0,), ("R_in",)),
        ((2,), ("C_1",)),
    ]


@pytest.mark.parametrize("first", [0, 1])
@pytest.mark.parametrize("factor", [0.1, 10.0])
def test_a_probe_factor_from_some_stage_on_is_the_bench(first, factor):
    circuits = board(gain=3.9)  # at 10 dB a tenth and upside down are the same
    (found,) = judged(circuits, moved(seen(circuits), dict.fromkeys(range(first, len(circuits)), factor)))
    assert [(h.kind, h.stages[0]) for h in found.candidates] == [("probe", first)]
    assert np.exp(found.candidates[0].log_factor) == pytest.approx(factor)


def test_gains_upside_down_are_swapped_channels():
    circuits = board(gain=3.9)  # at 10 dB a tenth and upside down are the same
    given = [Seen(one.figures * [1.0, 1.0, -1.0], one.covariance) for one in seen(circuits)]
    (found,) = judged(circuits, given)
    assert [h.kind for h in found.candidates] == ["channels"]


def test_all_stages_at_ten_times_the_gain_are_one_probe_though_each_alone_could_be():
    circuits = board(gain=3.9)
    (found,) = judged(circuits, moved(seen(circuits), {0: 10.0, 1: 10.0, 2: 10.0}))
    assert [(h.kind, h.stages) for h in found.candidates] == [("probe", (0, 1, 2))]


@pytest.mark.parametrize("stage", [1, 2])
@pytest.mark.parametrize("factor", [0.01, 0.1, 10.0, 100.0])
def test_a_probe_factor_of_one_stage_only_is_the_bench(stage, factor):
    circuits = board(gain=3.9)
    (found,) = judged(circuits, moved(seen(circuits), {stage: factor}))
    (named,) = found.candidates
    assert (named.kind, named.stages) == ("probe", (stage,))
    assert np.exp(named.log_factor) == pytest.approx(factor)


@pytest.mark.parametrize("count", [1, 3])
def test_a_stage_upside_down_is_swapped_channels(count):
    circuits = board(gain=3.9)[:count]
    given = seen(circuits)
    given[-1] = Seen(given[-1].figures * [1.0, 1.0, -1.0], given[-1].covariance)
    (found,) = judged(circuits, given)
    assert [(h.kind, h.stages) for h in found.candidates] == [("channels", (count - 1,))]


@pytest.mark.parametrize("factor", [0.1, 10.0])
def test_a_board_of_one_stage_has_bench_faults_too(factor):
    circuits = board(gain=3.9)[:1]
    (found,) = judged(circuits, moved(seen(circuits), {0: factor}))
    assert [(h.kind, h.stages) for h in found.candidates] == [("probe", (0,))]
    assert found.explained


def test_a_board_of_one_stage_can_have_another_reel():
    circuits = board()[:1]
    (found,) = judged(circuits, seen(circuits, {("all", "capacitor"): 1.5}))
    assert ("common", ("capacitor",)) in [(h.kind, h.names) for h in found.candidates]


def test_a_bench_fault_at_one_stage_leaves_a_wrong_part_at_another_its_name():
    circuits = board(gain=3.9)
    found = judged(circuits, moved(seen(circuits, {(0, "R_in"): 10.0}), {1: 10.0}))
    assert [(one.candidates[0].kind, one.candidates[0].stages) for one in found] == [("part", (0,)), ("probe", (1,))]


def test_figures_of_another_stage_are_a_wrong_tap():
    circuits = board()
    given = seen(circuits)
    (found,) = judged(circuits, [given[0], given[2], given[2]])
    assert [(h.kind, h.stages) for h in found.candidates] == [("tap", (1, 2))]


def test_what_cannot_be_told_apart_is_listed():
    """R_shunt moves f0 and Q together, as R_in does; only gain parts them, and capacitors of 5 % blur it."""
    (found,) = suspects({(1, "R_shunt"): 1.2})
    assert [h.names for h in found.candidates][:1] == [("R_shunt",)]
    (vague,) = suspects({(1, "R_shunt"): 1.2}, tolerances=(0.01, 0.01, 0.01, 0.1, 0.1))
    assert len(vague.candidates) > 1
    assert ("R_shunt",) in [h.names for h in vague.candidates]
    assert vague.delta_chi_square < 4.0


def test_two_wrong_parts_in_one_stage_are_not_blamed_on_one():
    (found,) = suspects({(1, "R_feedback"): 3.0, (1, "C_1"): 0.3})
    assert not found.explained


def test_a_single_stage_is_judged_by_itself():
    circuits = board()[:1]
    (found,) = judged(circuits, seen(circuits, {(0, "R_in"): 10.0}))
    assert found.candidates[0].names == ("R_in",)
    assert judged(circuits, seen(circuits)) == []
    assert judged([], []) == []
