"""Plans against what the bench would then see, computed by another road."""

from __future__ import annotations

import numpy as np
import pytest

from bandproof.analysis.circuits import mfb_design, mfb_network
from bandproof.analysis.network import Capacitor, Network, OpAmp, Resistor, state_space
from bandproof.analysis.planning import (
    band_frequencies,
    dwell_after_step,
    mains_clearance,
    plan_record,
    shift_from_mains,
)
from bandproof.analysis.sine import fit_sines

EPS = 1e-4


@pytest.fixture
def board() -> Network:
    stage = mfb_network(
        "", mfb_design(1e3, 2.0, 3.16, 10e-9), OpAmp("U", "", "", "", gbw=3e6), node_in="a", node_out="out"
    )
    return Network(
        (*stage.resistors, Resistor("R_bias", "a", "0", 1e4)),
        (*stage.capacitors, Capacitor("C_in", "in", "a", 10e-6)),
        stage.opamps,
    )


def _error(network, previous, frequency, dwell, duration, phase, old_phase):
    """What the sine fit of a simulated record at `out` is wrong by, relative; steady states and modes superposed."""
    system = state_space(network, ["out"])
    rates, vectors = np.linalg.eig(system.a)

    def steady(f, angle):
        state = np.linalg.solve(2j * np.pi * f * np.eye(len(system.a)) - system.a, system.b[:, 0].astype(complex))
        return state * np.exp(1j * angle)

    new = steady(frequency, phase)
    before = steady(previous, old_phase).real
    t = dwell + duration * np.arange(2000) / 2000
    free = np.linalg.solve(vectors, before - new.real)
    transient = (system.c[0] @ vectors * free) @ np.exp(rates[:, None] * t)
    return abs(fit_sines(transient.real, duration / 2000, frequency).phasor[0, 0] / (system.c[0] @ new))


@pytest.mark.parametrize("previous", [700.0, 990.0, 1500.0])
def test_dwell_is_long_enough_and_not_much_too_long(board, previous):
    duration = 3e-3
    dwell = dwell_after_step(board, ["out"], 1e3, duration=duration, previous=previous, eps=EPS)
    phases = np.linspace(0, 2 * np.pi, 9)[:-1]

    def worst(wait):
        return max(_error(board, previous, 1e3, wait, duration, p, o) for p in phases for o in phases)

    assert worst(dwell) <= EPS * 1.02  # 2 %: the plan weighs 256 samples where the record has 2000
    assert worst(0.7 * dwell) > EPS  # a rung of the ladder is 19 %


def test_coupling_corner_costs_no_dwell(board):
    slow = dwell_after_step(board, ["out"], 1e3, duration=3e-3, previous=900.0)
    fast = dwell_after_step(board.with_parts({"C_in": 10.0}), ["out"], 1e3, duration=3e-3, previous=900.0)
    assert slow == pytest.approx(fast, rel=0.2)
    assert slow < 0.1 * np.log(1 / EPS) * 1e4 * 10e-6  # a tenth of waiting for 10 kohm and 10 uF


def test_first_sweep_holds_the_optimum_and_the_centre():
    f = band_frequencies([1e3, 50.0], [1.6, 5.0])
    assert f.shape == (2, 11)
    # Source: optimum of the noise-limited design for Q = 1.6 computed apart: x = 0.82 and 1.22
    assert np.abs(f[0] - 820.0).min() < 5.0
    assert np.abs(f[0] - 1220.0).min() < 5.0
    assert (np.diff(f, axis=1) > 0).all()
    assert 50.0 in f[1]


@pytest.mark.parametrize("frequency", [20.0, 63.0, 251.0, 999.0, 16e3])
def test_record_keeps_its_rules(frequency):
    plan = plan_record(frequency, mains=50.0)
    assert plan.duration * frequency >= 3 - 1e-9
    assert plan.points / plan.duration >= 20 * frequency * (1 - 1e-9)  # so the 9th harmonic lies below half the rate
    assert plan.duration * mains_clearance(frequency, 50.0)[0] >= 1 - 1e-9


def test_frequency_on_a_mains_harmonic_is_refused_and_moved():
    with pytest.raises(ValueError, match=r"100 Hz needs a record of inf s.*move it away"):
        plan_record(100.0, mains=50.0)
    moved = shift_from_mains([100.0, 60.1], mains=50.0, longest=0.5)
    assert list(moved) == [102.0, 60.1]
    assert plan_record(102.0, mains=50.0, longest=0.5).duration == pytest.approx(0.5)
