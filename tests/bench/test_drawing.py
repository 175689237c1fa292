"""Draws of every source (JCGM 101) beside the budget, which takes the linear road; and the command that shows both."""

import json
import re
from dataclasses import replace
from math import inf, sqrt

import numpy as np
import pytest

from bandproof.analysis.uncertainty import Row, combine, half_width
from bandproof.bench import drawing
from bandproof.bench.budget import budgets
from bandproof.bench.drawing import drawn
from bandproof.bench.errors import BadInput
from bandproof.bench.evaluate import described, evaluate
from bandproof.bench.runfile import read_run
from bandproof.bench.sources import Source
from bandproof.bench.types import QUANTITIES, Temperature
from bandproof.bench.verbs.console import run

DRAWS = 20_000
OWN = 4 / sqrt(2 * DRAWS)  # four standard errors of a standard deviation of so many draws, relative


@pytest.fixture(scope="module")
def kept(outcome):
    """The run file of a board of two bands, with its thru."""
    return read_run(outcome.folder / "run.h5")


def without_thru(kept):
    return replace(kept, points=tuple(point for point in kept.points if point.purpose != "thru"))


@pytest.mark.parametrize("changed", [lambda kept: kept, without_thru])
def test_draws_of_all_sources_agree_with_the_budget(kept, changed):
    changed = changed(kept)
    stage = changed.board.stages[0].name
    seen, listed = described(changed, stage)
    found = drawn(seen, listed, draws=DRAWS, seed=5)
    budget = budgets(seen, listed)
    for quantity in QUANTITIES:
        # what a linear road may leave out is 2 % of u; of the half-width, whose own scatter is 0.7 %, 3 % in all
        assert found[quantity].u == pytest.approx(budget[quantity].u, rel=OWN + 0.02)
        assert found[quantity].half_width == pytest.approx(budget[quantity].expanded, rel=0.03)
        assert found[quantity].draws == DRAWS
    fit = seen.fit
    for quantity, value in zip(QUANTITIES, (fit.f0[0], fit.q[0], abs(fit.gain[0])), strict=True):
        assert abs(found[quantity].mean - value) < 0.05 * budget[quantity].u


COURSES = {
    "gain": lambda x: np.ones_like(x) + 0j,
    "angle": lambda x: 1j * np.ones_like(x),  # is taken by the fit's complex gain, and leaves the noise
    "slope": lambda x: x + 0j,
    "bend": lambda x: 1j * x**2,
    "turning": lambda x: np.exp(1j * np.pi * x),
}


@pytest.mark.parametrize("course", COURSES)
def test_a_course_of_the_points_moves_draws_and_budget_alike(kept, course):
    """One large source alone, real, imaginary and mixed: noise hides nothing of it."""
    seen, _ = described(kept, "low")
    x = np.linspace(-1, 1, len(seen.points))
    listed = [Source("one", "a test", 0.004, "normal", shapes=COURSES[course](x)[None])]
    found, budget = drawn(seen, listed, draws=DRAWS, seed=6), budgets(seen, listed)
    for quantity in QUANTITIES:
        assert found[quantity].u == pytest.approx(budget[quantity].u, rel=OWN + 0.01)


@pytest.mark.parametrize(
    ("distribution", "dof"), [("normal", inf), ("uniform", inf), ("triangular", inf), ("arcsine", inf), ("t", 5.0)]
)
def test_every_distribution_is_drawn_as_it_is_folded(kept, distribution, dof):
    seen, _ = described(kept, "low")
    u, f0, noise = 0.002, float(seen.fit.f0[0]), float(seen.fit.u_f0[0])
    listed = [Source("one", "a test", u, distribution, direct={"centre": 1.0}, dof=dof)]
    found = drawn(seen, listed, draws=DRAWS, seed=7)
    rows = [Row("one", "B", distribution, u, f0, dof, "a test"), Row("noise", "A", "normal", noise, 1.0, inf, "a test")]
    assert found["centre"].half_width == pytest.approx(half_width(rows), rel=0.02)
    spread = sqrt(dof / (dof - 2)) if dof < inf else 1.0  # of Student's t of scale 1 (JCGM 101, 6.4.9.4)
    tails = 3.0 if dof < inf else 1.0  # its kurtosis of 9 makes u scatter twice as far as a normal one's
    assert found["centre"].u == pytest.approx(np.hypot(spread * u * f0, noise), rel=tails * OWN)
    assert found["q"].u == pytest.approx(float(seen.fit.u_q[0]), rel=OWN)


def test_several_shapes_of_a_source_are_drawn_each_for_itself(kept):
    seen, _ = described(kept, "low")
    ones = np.ones((9, len(seen.points)), dtype=complex)
    found = drawn(seen, [Source("nine", "a test", 0.001, "uniform", shapes=ones)], draws=DRAWS, seed=8)
    gain = abs(seen.fit.gain[0])
    assert found["gain"].u == pytest.approx(np.hypot(3 * 0.001 * gain, seen.fit.u_gain[0]), rel=OWN + 0.01)


def test_one_seed_gives_the_same_draws_another_gives_others(kept):
    told = described(kept, "body")
    first, again, other = (drawn(*told, draws=300, seed=seed) for seed in (1, 1, 2))
    assert first == again
    assert first != other


def test_any_number_of_draws_is_drawn_in_pieces_of_bounded_size(kept, monkeypatch):
    told, sizes = described(kept, "body"), []
    monkeypatch.setattr(drawing, "fit_bands", lambda f, *rest, **how: sizes.append(len(f)) or fit(f, *rest, **how))
    from bandproof.analysis.fit import fit_bands as fit

    assert drawn(*told, draws=4100, seed=1)["q"].draws == 4100
    assert sizes == [2000, 2000, 100]


def test_draws_that_cannot_be_fitted_are_told_with_their_stage(kept):
    seen, listed = described(kept, "body")
    wild = [Source("wild", "a test", 50.0, shapes=np.eye(len(seen.points)) + 0j), *listed]
    with pytest.raises(BadInput, match=r"body: \d+ of 200 draws could not be fitted"):
        drawn(seen, wild, draws=200, seed=1)


def test_a_stage_without_a_fit_has_nothing_to_draw(kept):
    few = tuple(point for point in kept.points if point.stage != "low" or point.purpose != "curve")
    assert described(replace(kept, points=few), "low") is None


def test_what_is_drawn_is_what_was_evaluated(kept):
    """The same rows, also of a board that states its temperature, in a room."""
    warm = replace(kept, board=replace(kept.board, temperature=Temperature(20.0, 1e-3)), ambient=30.0)
    for stage in evaluate(warm):
        seen, listed = described(warm, stage.name)
        assert budgets(seen, listed) == stage.budgets
        assert combine(stage.budgets["centre"].rows).u > 0.005 * stage.figures["centre"].measured


# --- fit RUN --draws N ---


@pytest.fixture
def fitted(capsys, outcome):
    """Call `fit` on the run; return code, standard output, standard error."""

    def call(*options):
        capsys.readouterr()
        code = run(["fit", str(outcome.folder / "run.h5"), *options])
        return code, *capsys.readouterr()

    return call


def test_fit_shows_budget_and_draws_side_by_side_in_80_columns(fitted, kept):
    code, out, _ = fitted("--draws", "1000")
    assert code == 0
    for stage in evaluate(kept):
        block = out.split(f"Budget of {stage.name} beside 1000 draws")[1].split("\n\n")[0]
        for name, quantity in zip(("f0", "Q", "gain"), QUANTITIES, strict=True):
            (line,) = re.findall(rf"^{name} .*$", block, re.MULTILINE)
            u, u_drawn, expanded, half, _ = map(float, line.split()[1:])
            budget, value = stage.budgets[quantity], stage.figures[quantity].measured
            assert u == pytest.approx(100 * budget.u / value, abs=5.1e-5)
            assert expanded == pytest.approx(100 * budget.expanded / value, abs=5.1e-5)
            assert u_drawn == pytest.approx(u, rel=4 / sqrt(2000) + 0.02)
            assert half == pytest.approx(expanded, rel=0.15)  # four standard errors of 1000 draws' ends
    table = out[out.index("beside 1000") - 30 :].split("  refit")[0]
    assert max(map(len, table.splitlines())) <= 80


def test_the_same_command_prints_the_same(fitted):
    tables = [fitted("--draws", "150")[1].partition("Budget of")[2].partition("  refit")[0] for _ in range(2)]
    assert tables[0] == tables[1] != ""


def test_with_both_options_both_are_shown(fitted):
    out = fitted("--budget", "--draws", "100")[1]
    assert out.count("standard uncertainties in % of the figure") == 2
    assert out.count("beside 100 draws") == 2
    assert "draws" not in fitted("--budget")[1].partition("Budget of")[2]


def test_json_stays_one_object_and_the_table_goes_to_standard_error(fitted):
    bare, with_draws = fitted("--json"), fitted("--json", "--draws", "100")
    one, other = json.loads(bare[1]), json.loads(with_draws[1])
    one["wall_seconds"] = other["wall_seconds"] = None
    assert one == other
    assert "beside 100 draws" in with_draws[2]
    assert "draws" not in bare[2]


@pytest.mark.parametrize("draws", ["99", "1000001", "0", "-5", "many"])
def test_a_number_of_draws_that_makes_no_sense_is_a_usage_error(fitted, draws):
    code, out, err = fitted("--draws", draws)
    assert code == 2
    assert "--draws" in err
    assert not out
