"""Response, state space and modes against an independent circuit simulator and against textbook networks."""

from __future__ import annotations

import json

import numpy as np
import pytest

from bandproof.analysis.circuits import mfb_design, mfb_network
from bandproof.analysis.network import (
    Capacitor,
    Network,
    OpAmp,
    Resistor,
    from_plain,
    modes,
    response,
    state_space,
    to_plain,
)

GBW = 3e6


@pytest.fixture
def board() -> Network:
    """A 6300 Hz stage behind a coupling capacitor, driven through 50 ohm."""
    stage = mfb_network(
        "", mfb_design(6300.0, 1.5, 3.16, 1e-9), OpAmp("U", "", "", "", gbw=GBW), node_in="a", node_out="out"
    )
    return Network(
        (*stage.resistors, Resistor("R_bias", "a", "0", 1e4)),
        (
            *stage.capacitors,
            Capacitor("C_in", "in", "a", 10e-6),
            Capacitor("C_load", "out", "0", 1e-12),
            Capacitor("C_stray", "x", "0", 50e-12),
        ),
        stage.opamps,
        source_resistance=50.0,
    )


def _netlist(network: Network, source: str) -> list[str]:
    lines = [f"V1 emf 0 {source}", f"Rsource emf {network.input} {network.source_resistance!r}"]
    lines += [f"R{p.name} {p.a} {p.b} {p.resistance!r}" for p in network.resistors]
    lines += [f"C{p.name} {p.a} {p.b} {p.capacitance!r}" for p in network.capacitors]
    for u in network.opamps:  # one pole at 0 Hz: a current of 1 A/V into 1/(2 pi gbw) farad, buffered
        lines += [f"G{u.name} 0 {u.name}i {u.plus} {u.minus} 1", f"C{u.name}i {u.name}i 0 {1 / (2 * np.pi * u.gbw)!r}"]
        lines += [f"R{u.name}i {u.name}i 0 1e12", f"E{u.name} {u.out} 0 {u.name}i 0 1"]
    return lines


def test_response_agrees_with_ngspice(spice, board):
    # Source: ngspice, AC analysis of the same netlist
    table = spice(_netlist(board, "DC 0 AC 1"), "ac dec 20 10 1e6", ["v(a)", "v(out)"])
    ours = response(board, table[:, 0], ["a", "out"])
    theirs = np.array([table[:, 1] + 1j * table[:, 2], table[:, 3] + 1j * table[:, 4]])
    assert np.abs(theirs[1]).max() == pytest.approx(3.1, rel=0.05)  # the netlist is the band meant
    assert np.abs(ours - theirs).max() < 1e-6 * np.abs(theirs).max()


def test_transient_after_a_step_in_frequency_agrees_with_ngspice(spice, board):
    # Source: ngspice, transient analysis: 4 kHz for 1 ms from rest, then 8 kHz for 1 ms, phase restarted
    step, span = 0.1e-6, 1e-3
    source = (
        f"B1 emf 0 V = time < {span} ? sin(6.283185307179586*4000*time) : sin(6.283185307179586*8000*(time-{span}))"
    )
    netlist = [source, *_netlist(board, "0")[1:]]
    table = spice(netlist, f"tran {step} {2 * span} 0 {step} uic", ["v(out)"])
    system = state_space(board, ["out"])
    ours = _sine_from(system, np.zeros(len(system.a)), 4e3, span)
    after = _sine_from(system, ours[1], 8e3, span)
    t = np.concatenate([ours[0], span + after[0][1:]])
    volts = np.concatenate([ours[2], after[2][1:]])
    theirs = np.interp(t, table[:, 0], table[:, 1])
    assert np.abs(theirs).max() > 1.0
    assert np.abs(volts - theirs).max() < 1e-3 * np.abs(theirs).max()


def _sine_from(system, state, frequency, duration, points=2001):
    """Exact solution for sin(2 pi f t) from a state: times, last state, output; by the steady state plus modes."""
    t = np.linspace(0.0, duration, points)
    n = len(system.a)
    steady = np.linalg.solve(2j * np.pi * frequency * np.eye(n) - system.a, system.b[:, 0]) / 1j
    rates, vectors = np.linalg.eig(system.a)
    free = np.linalg.solve(vectors, state - steady.real)
    states = (vectors @ (free[:, None] * np.exp(rates[:, None] * t))).real
    turned = np.exp(2j * np.pi * frequency * t)
    states += (steady[:, None] * turned).real
    return t, states[:, -1], system.c[0] @ states + system.d[0, 0] * (turned / 1j).real


def test_state_space_and_nodal_analysis_are_the_same_response(board):
    frequency = np.geomspace(0.1, 10e6, 33)
    direct = board.driven_through(0.0)
    for network in (board, direct, direct.with_parts({"C_load": 1e-9})):
        system = state_space(network, network.nodes)
        s = 2j * np.pi * frequency[:, None, None] * np.eye(len(system.a))
        states = np.linalg.solve(s - system.a, system.b[:, :1].astype(complex))[..., 0]
        np.testing.assert_allclose(
            (states @ system.c.T + system.d[:, 0]).T, response(network, frequency, network.nodes), atol=1e-11
        )


def test_offset_of_an_op_amp_appears_with_its_noise_gain_at_direct_current():
    # common practice: non-inverting amplifier, gain 1 + R2/R1
    amplifier = Network(
        (Resistor("R1", "minus", "0", 1e3), Resistor("R2", "out", "minus", 9e3), Resistor("R3", "in", "0", 1e4)),
        (),
        (OpAmp("U", "in", "minus", "out", gbw=1e6),),
    )
    system = state_space(amplifier, ["out"])
    still = system.d - system.c @ np.linalg.solve(system.a, system.b)
    np.testing.assert_allclose(still, [[10.0, 10.0]], rtol=1e-12)
    np.testing.assert_allclose(modes(amplifier), [-2 * np.pi * 1e6 / 10], rtol=1e-12)  # gbw / noise gain


def test_modes_survive_a_spread_of_fifteen_decades():
    # First-order corners 1/(R C), common practice; independent, so each is known by itself.
    corners = {"slow": (10e6, 100e-6), "middle": (10e3, 10e-9), "fast": (1.0, 1e-12)}
    network = Network(
        tuple(Resistor(f"R{name}", "in", name, r) for name, (r, _) in corners.items()),
        tuple(Capacitor(f"C{name}", name, "0", c) for name, (_, c) in corners.items()),
    )
    expected = [-1 / (r * c) for r, c in corners.values()]
    np.testing.assert_allclose(modes(network), expected, rtol=1e-6)


def test_capacitors_across_sources_and_in_loops_add_no_modes():
    network = Network(
        (Resistor("R1", "in", "m", 1e4), Resistor("R2", "m", "out", 1e4)),
        (Capacitor("C1", "out", "0", 1e-9), Capacitor("C2", "in", "out", 1e-12), Capacitor("C3", "in", "0", 1e-6)),
        (OpAmp("U", "0", "m", "out", gbw=GBW),),
    )
    np.testing.assert_allclose(modes(network), [-2 * np.pi * GBW / 2], rtol=1e-12)  # gbw / noise gain, common practice


def test_island_of_capacitors_follows_through_its_resistors():
    divider = Network(
        (Resistor("R1", "in", "x", 1e3), Resistor("R2", "x", "0", 1e3), Resistor("R3", "y", "x", 1e3)),
        (Capacitor("C1", "x", "y", 1e-6),),
    )
    np.testing.assert_allclose(modes(divider), [-1e3], rtol=1e-12)  # C1 across R3 alone
    assert state_space(divider, ["x"]).d[0, 0] == pytest.approx(0.5)


def test_batched_values_are_single_responses(board):
    values = {"C_1": np.array([0.9e-9, 1.1e-9]), "R_in": np.array([7e3, 9e3]), "U": np.array([1e6, 5e6])}
    f = [100.0, 6300.0]
    batch = response(board, f, ["out"], values=values)
    for k in range(2):
        plain = to_plain(board.with_parts({"C_1": values["C_1"][k], "R_in": values["R_in"][k]}))
        plain["opamps"][0]["gbw"] = values["U"][k]
        np.testing.assert_allclose(batch[k], response(from_plain(plain), f, ["out"]), rtol=1e-13)


def test_network_survives_json(board):
    assert from_plain(json.loads(json.dumps(to_plain(board)))) == board


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Network((Resistor("R1", "in", "0", 1.0),) * 2, ()), "'R1' is used twice"),
        (lambda: Network((Resistor("R1", "in", "0", 0.0),), ()), "'R1' must have a positive value"),
        (lambda: Network((), (), (OpAmp("U", "0", "m", "in"),)), "two sources drive one node"),
        (lambda: response(Network((Resistor("R1", "in", "0", 1.0),), ()), [1.0], ["inn"]), "did you mean 'in'"),
        (lambda: state_space(Network((), (), (OpAmp("U", "in", "out", "out"),)), []), "'U' needs a finite gbw"),
        (lambda: modes(Network((), (Capacitor("C1", "x", "y", 1.0),), ())), "no resistor ties node 'x'"),
    ],
)
def test_mistakes_are_named(make, words):
    with pytest.raises(ValueError, match=words):
        make()
