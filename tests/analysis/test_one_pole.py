"""The closed form of the band with a one-pole op-amp, against the nodal curve's definitions and printed tables."""

from dataclasses import astuple, replace

import numpy as np
import pytest

from bandproof.analysis.circuits import MfbParts, mfb_design, mfb_figures, mfb_network
from bandproof.analysis.curve import network_figures
from bandproof.analysis.network import OpAmp
from bandproof.analysis.one_pole import one_pole_design, one_pole_figures


def by_definition(parts: MfbParts, gbw: float):
    """Return f0, Q, gain read from the nodal curve."""
    network = mfb_network("", parts, OpAmp("U", "", "", "", gbw=gbw), node_in="in", node_out="out")
    f0 = mfb_figures(parts).f0
    read = network_figures(network, node_in="in", node_out="out", low=f0 / 300, high=f0 * 100)
    return np.array([read.f0[0], read.q[0], read.gain[0]])


PARTS = {
    "a": mfb_design(1e3, 10.0, 2.0, 100e-9),
    "b": mfb_design(1e3, 3.0, 10.0, 10e-9),
    "wide": mfb_design(1e3, 0.5, 0.3, 10e-9),
    "high": mfb_design(20e3, 2.0, 3.0, 1e-9),
    "sharp": mfb_design(1e3, 30.0, 5.0, 10e-9),
    "unequal": MfbParts(7.96e3, 80.4, 31.8e3, 220e-9, 33e-9),
    "unequal, other way": MfbParts(7.96e3, 80.4, 31.8e3, 68e-9, 150e-9),
}


@pytest.mark.parametrize("gbw", [float("inf"), 4e6, 1e6, 1e5])
@pytest.mark.parametrize("name", PARTS)
def test_closed_form_is_the_nodal_curve_by_definition(name, gbw):
    # 1e-11 of the width of the band is what the reading of a curve is solved to
    found = one_pole_figures(*astuple(PARTS[name]), gbw=gbw)
    assert found == pytest.approx(by_definition(PARTS[name], gbw), rel=1e-10)


# Source: the circuit's own equations evaluated apart from this project, printed to seven digits (see test_circuits).
def test_closed_form_of_the_example_with_nearest_parts():
    f0, q, gain = one_pole_figures(7.87e3, 80.6, 31.6e3, 100e-9, 100e-9)
    assert (f0, q, gain) == (
        pytest.approx(1002.355, abs=5.1e-4),
        pytest.approx(9.9508, abs=5.1e-5),
        pytest.approx(2.00762, abs=5.1e-6),
    )


# Source: nodal analysis made apart from this project and ngspice; the table is a fit's, good to 1e-4 in f0.
@pytest.mark.parametrize(("gbw", "f0"), [(1e6, 990.1470), (1e5, 912.8253)])
def test_closed_form_of_the_example_with_a_slow_op_amp(gbw, f0):
    assert one_pole_figures(*astuple(PARTS["a"]), gbw=gbw)[0] == pytest.approx(f0, rel=1e-4)


def test_many_stages_at_once_are_each_alone():
    columns = np.array([astuple(parts) for parts in PARTS.values()]).T
    together = one_pole_figures(*columns, gbw=1e6)
    alone = np.array([one_pole_figures(*astuple(parts), gbw=1e6) for parts in PARTS.values()]).T
    np.testing.assert_allclose(together, alone, rtol=1e-12)


@pytest.mark.parametrize("gbw", [float("inf"), 1e6, 1e5])
@pytest.mark.parametrize("wanted", [(1e3, 10.0, 2.0), (1e3, 3.0, 10.0), (6.3e3, 1.5, 3.16)])
def test_design_gives_the_wanted_figures_by_definition(wanted, gbw):
    node_in, node, feedback = one_pole_design(np.array(wanted)[:, None], gbw=gbw)[:, 0] * 10e-9
    parts = MfbParts(1 / node_in, 1 / (node - node_in), 1 / feedback, 10e-9, 10e-9)
    assert by_definition(parts, gbw) == pytest.approx(wanted, rel=1e-10)


# Source: printed examples a and b (see test_circuits), computed to eight digits.
@pytest.mark.parametrize(
    ("wanted", "capacitance", "resistors"),
    [
        ((1e3, 10.0, 2.0), 100e-9, (7957.7472, 80.381284, 31830.9886)),
        ((1e3, 3.0, 10.0), 10e-9, (4774.6483, 5968.3104, 95492.9659)),
    ],
)
def test_ideal_design_is_the_printed_one(wanted, capacitance, resistors):
    node_in, node, feedback = one_pole_design(np.array(wanted)[:, None])[:, 0] * capacitance
    assert (1 / node_in, 1 / (node - node_in), 1 / feedback) == pytest.approx(resistors, rel=1e-8)


@pytest.mark.parametrize("gbw", [1e3, 4e3])  # far off; near enough that the figures stay finite
def test_an_op_amp_that_is_too_slow_gives_no_design(gbw):
    found = one_pole_design(np.array([[1e3, 1e3], [5.0, 5.0], [2.0, 2.0]]), gbw=gbw)
    assert np.isnan(found).all()
    assert np.isfinite(one_pole_design(np.array([[1e3], [5.0], [2.0]]), gbw=20e3)).all()


def test_finite_gain_bandwidth_lowers_f0_and_raises_q():
    # Source: common practice, f0 / sqrt(1 + 2 Q f0 / gbw); measured right to 2e-6 of f0 at Q f0 / gbw = 0.01
    f0, q, _ = one_pole_figures(*astuple(PARTS["a"]), gbw=1e6)
    assert f0 == pytest.approx(1e3 / np.sqrt(1.02), rel=2e-6)
    assert q == pytest.approx(10.0 * 1.0098, rel=1e-4)
    assert one_pole_figures(*astuple(replace(PARTS["a"], C_1=110e-9)), gbw=1e6)[0] < f0
