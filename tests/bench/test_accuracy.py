"""Whole sweeps over TCP against the truth of each simulated board.

The truth is read from the nodal curve by definition, for seeds 1 to 3 from ngspice's curve of the same netlist.
"""

from math import isclose

import numpy as np
import pytest

from bandproof.analysis.curve import curve_figures
from bandproof.bench.circuit import predict
from bandproof.bench.evaluate import evaluate_stage
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.thru import paths

SEEDS = range(1, 21)  # the first twenty, not chosen
FIGURES = ("centre", "q", "gain")


def scores(swept_board, truth):
    """Return (error / u) of f0, Q and gain of every stage, (stages, 3), as they are concluded."""
    points, bench = swept_board.journal.points, rehearsal_bench(swept_board.board)
    known, rows = paths(points), []
    for stage in swept_board.board.stages:
        result = evaluate_stage(swept_board.board, bench, stage, [p for p in points if p.stage == stage.name], known)
        figures = [result.figures[name] for name in FIGURES]
        rows.append([(f.measured - t) / f.standard_uncertainty for f, t in zip(figures, truth(stage), strict=True)])
    return np.array(rows)


@pytest.fixture(scope="module")
def all_scores(swept):
    """Return the scores of all seeds, (seeds, stages, 3)."""

    def one(seed):
        board = swept(seed)

        def truth(stage):
            true = predict(board.board, stage, board.drawn[stage.name])
            return true.centre, true.q, true.gain

        return scores(board, truth)

    return np.array([one(seed) for seed in SEEDS])


def test_every_figure_of_twenty_boards_is_within_four_standard_uncertainties(all_scores):
    assert np.abs(all_scores).max() < 4.0


def test_stated_uncertainty_is_the_scatter_that_is_there(all_scores):
    rms = np.sqrt((all_scores[:, :, :2] ** 2).mean())
    # 200 figures, f0 and Q: a correct u gives 1 ± 0.05 (one standard error); 0.8 to 1.2 is what was asked.
    assert 0.8 < rms < 1.2


def test_most_boards_have_all_fifteen_figures_within_two_and_a_half(all_scores):
    assert (np.abs(all_scores).max(axis=(1, 2)) < 2.5).sum() >= 12


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_figures_agree_with_the_curve_of_ngspice(swept, spice, seed):
    """Witness: ngspice (Debian package), AC analysis of the drawn parts with one-pole op-amps."""
    board = swept(seed)

    def truth(stage):
        return _spice_figures(spice, board.drawn[stage.name], board.board.op_amp.gbw, stage.limits["centre"].designed)

    assert np.abs(scores(board, truth)).max() < 4.0


def _spice_figures(spice, parts, gbw, centre):
    netlist = [
        "V1 in 0 AC 1",
        f"R1 in x {parts['R_in']!r}",
        f"R2 x 0 {parts['R_shunt']!r}",
        f"R3 out m {parts['R_feedback']!r}",
        f"C1 x out {parts['C_1']!r}",
        f"C2 x m {parts['C_2']!r}",
        f"G1 0 p 0 m {2.0 * np.pi * gbw!r}",  # one-pole op-amp: an integrator of 2 pi GBW
        "CP p 0 1",
        "RP p 0 1e12",  # SPICE wants a direct current path
        "E1 out 0 p 0 1",
    ]
    table = spice(netlist, f"ac dec 4000 {centre / 10!r} {centre * 10!r}", ["vr(out)", "vi(out)"])
    frequency, real, imag = table.T
    logs, heights = np.log(frequency), np.log(np.hypot(real, imag))

    def curve(f):
        from scipy.interpolate import CubicSpline

        return np.exp(CubicSpline(logs, heights)(np.log(f))).astype(complex)

    found = curve_figures(curve, centre / 8, centre * 8)
    return float(found.f0[0]), float(found.q[0]), float(found.gain[0])


def test_witness_and_nodal_curve_agree(spice, one_band):
    """The reference against ours before anything is measured with it: 1e-6, the spline's own error at 4000 a decade."""
    parts = {part.name: part.value for part in one_band.stages[0].parts}
    found = _spice_figures(spice, parts, one_band.op_amp.gbw, 160.0)
    ours = predict(one_band, one_band.stages[0])
    for theirs, mine in zip(found, (ours.centre, ours.q, ours.gain), strict=True):
        assert isclose(theirs, mine, rel_tol=1e-6)
