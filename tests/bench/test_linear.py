"""Converters that are less straight than declared, and stages whose gain falls with level, against straight ones."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import lsq_linear

from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.linear import _distance_to_box
from bandproof.bench.thru import paths
from tests.benchmarks._direct import measured, with_designs_kept
from tests.benchmarks.coverage import CASES, bench_of, board_of, world

SEEDS = range(20)  # the first twenty, not chosen; each with another stage and bench
WORDS = "depart by"


def swept(seed, nonlinearity):
    """Return board, bench and points of a bench whose channels depart by an S of so many steps (in, out)."""
    board = board_of(seed)
    bench = bench_of(board, CASES["declared"])
    made = world(board, bench, CASES["declared"], seed)
    made = replace(made, imperfections=replace(made.imperfections, nonlinearity=nonlinearity))
    found = measured(board, bench, made)
    assert not found.stopped
    return board, bench, found.points


def alarms(board, bench, points):
    stage = board.stages[0]
    own = [point for point in points if point.stage == stage.name]
    return evaluate_stage(board, bench, stage, own, paths(points)).alarms


def bent(points, fall):
    """Return points as a stage leaves them whose gain falls by a share, growing with the square of its output."""
    top = max(point.levels[1] for point in points if point.purpose != "thru")

    def one(point):
        if point.purpose in ("thru", "no-signal"):
            return point
        factor = 1.0 - fall * (point.levels[1] / top) ** 2
        return replace(point, response=point.response * factor, levels=(point.levels[0], point.levels[1] * factor))

    return [one(point) for point in points]


@pytest.fixture(scope="module")
def straight():
    """Benches whose converters depart by what is declared, 0.5 LSB, in opposite directions."""
    with with_designs_kept():
        return [swept(seed, (0.5, -0.5) if seed % 2 else (-0.5, 0.5)) for seed in SEEDS]


def test_converters_of_2_lsb_raise_the_alarm():
    with with_designs_kept():
        for seed in SEEDS:
            told = [alarm for alarm in alarms(*swept(seed, (2.0, -2.0))) if WORDS in alarm]
            assert len(told) == 1, seed
            assert "declared is 0.5 LSB" in told[0]


def test_converters_as_good_as_declared_raise_none(straight):
    for seed, one in zip(SEEDS, straight, strict=True):
        assert not alarms(*one), seed


def test_converters_of_2_lsb_that_are_declared_raise_none():
    board, bench, points = swept(3, (2.0, -2.0))
    accuracy = replace(bench.accuracy, linearity=2.0)
    assert any(WORDS in alarm for alarm in alarms(board, bench, points))
    assert not alarms(board, replace(bench, accuracy=accuracy), points)


def test_a_stage_whose_gain_falls_with_level_is_told(straight):
    """A gain that falls with the square of the level: the first term of any smooth compression (Taylor)."""
    for seed, (board, bench, points) in zip(SEEDS, straight, strict=True):
        assert any(WORDS in alarm for alarm in alarms(board, bench, bent(points, 0.05))), seed


def test_a_gain_that_differs_between_batches_is_nonlinear(straight):
    board, bench, points = straight[2]
    curve = [point for point in points if point.purpose == "curve" and point.stage != "thru"]
    louder = [replace(p, amplitude=2 * p.amplitude, response=0.97 * p.response) for p in curve]
    same = [replace(p, amplitude=2 * p.amplitude) for p in curve]
    # what is left is a level of 1/0.97 of that tried first
    told = [alarm for alarm in alarms(board, bench, [*louder, *points]) if "nonlinear" in alarm]
    assert "by -3.00 %" in told[0]
    assert not [alarm for alarm in alarms(board, bench, [*same, *points]) if "nonlinear" in alarm]


@pytest.mark.parametrize("seed", range(40))
def test_the_distance_to_what_is_declared_is_that_of_a_bounded_least_squares_solver(seed):
    # Witness: scipy's lsq_linear (bounded-variable least squares) on the whitened problem
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 4))
    root = rng.normal(size=(count, count)) * 10.0 ** rng.uniform(-1.5, 1.5, (count, 1))
    covariance = root @ root.T
    sizes, bound = rng.normal(size=count) * 10.0 ** rng.uniform(-1, 1), float(rng.uniform(0.1, 2.0))
    white = np.linalg.inv(np.linalg.cholesky(covariance))
    found = lsq_linear(white, white @ sizes, (-bound, bound), tol=1e-14, method="bvls")
    assert _distance_to_box(sizes, covariance, bound) == pytest.approx(2 * found.cost, rel=1e-6, abs=1e-9)
