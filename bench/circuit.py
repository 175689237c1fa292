"""A board as a network: its stages' circuits joined, nominal or with drawn parts, and the figures predicted from it."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import log

import numpy as np

from bandproof.analysis.circuits import MfbParts, join, mfb_design, mfb_network
from bandproof.analysis.curve import CurveFigures, network_figures, stage_response
from bandproof.analysis.models import band_response
from bandproof.analysis.network import GROUND, Network, OpAmp, Resistor
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.types import PASSIVE, QUANTITIES, Board, Quantity, Stage

__all__ = ["Prediction", "board_network", "draw_parts", "predict", "stage_network", "taps"]

_FAST = 1e5  # gain-bandwidth product of the op-amps of an equivalent circuit, in centre frequencies times Q; arbitrary


@dataclass(frozen=True, slots=True)
class Prediction:
    """Figures by definition of a stage's nodal curve with the board's real op-amp: Hz, ratio, ratio."""

    centre: float
    q: float
    gain: float

    def __getitem__(self, quantity: Quantity) -> float:
        return float(getattr(self, quantity))


def stage_network(board: Board, stage: Stage, values: Mapping[str, float] | None = None) -> Network:
    """Return a stage's network between its taps' nodes; ``values`` replace parts by their name in the stage.

    A passive network, whose parts nobody stated, is stood for by one that responds and settles as designed.
    """
    if stage.circuit == PASSIVE:
        return _equivalent(board, stage)
    values = values or {}
    parts = MfbParts(**{part.name: values.get(part.name, part.value) for part in stage.parts})
    op_amp = OpAmp("U", "", "", "", gbw=board.op_amp.gbw, swing=board.op_amp.swing, slew=board.op_amp.slew)
    node_in, node_out = taps(board, stage)
    return mfb_network(f"{stage.name}.", parts, op_amp, node_in=node_in, node_out=node_out)


def _equivalent(board: Board, stage: Stage) -> Network:
    """Return a multiple-feedback band-pass and an inverter with a passive stage's designed figures.

    Two modes and one peak have one response, whatever makes them; this circuit has any Q at a gain of Q squared.
    """
    designed = Prediction(*(stage.limits[quantity].designed for quantity in QUANTITIES))
    fast = OpAmp("U", "", "", "", gbw=_FAST * designed.centre * max(1.0, designed.q))
    (node_in, node_out), prefix = taps(board, stage), f"{stage.name}."
    parts = mfb_design(designed.centre, designed.q, designed.q**2, 1e-5 / designed.centre)
    band = mfb_network(prefix, parts, fast, node_in=node_in, node_out=f"{prefix}band")
    inverter = Network(
        resistors=(
            Resistor(f"{prefix}R_1", f"{prefix}band", f"{prefix}y", 1e4),
            Resistor(f"{prefix}R_2", f"{prefix}y", node_out, 1e4 * designed.gain / designed.q**2),
        ),
        capacitors=(),
        opamps=(replace(fast, name=f"{prefix}V", plus=GROUND, minus=f"{prefix}y", out=node_out),),
        input=f"{prefix}band",
    )
    return join(band, inverter, input=node_in)


def board_network(board: Board, drawn: Mapping[str, Mapping[str, float]] | None = None) -> Network:
    """Return the whole board as one network driven at its first tap; ``drawn`` has part values by stage and name."""
    drawn = drawn or {}
    stages = [stage_network(board, stage, drawn.get(stage.name)) for stage in board.stages]
    return join(*stages, input=board.points[board.stages[0].tap_in].node)


def taps(board: Board, stage: Stage) -> tuple[str, str]:
    """Return the nodes a stage's response is taken between."""
    return board.points[stage.tap_in].node, board.points[stage.tap_out].node


def draw_parts(board: Board, seed: int) -> dict[str, dict[str, float]]:
    """Return part values by stage and name, uniform within tolerance, independent (common practice for a rehearsal).

    A passive stage has none: it is as designed.
    """
    rng = np.random.default_rng([seed, 0x9A27])  # the second word keeps parts apart from the bench's own draws
    return {
        stage.name: {part.name: part.value * (1.0 + part.tolerance * rng.uniform(-1.0, 1.0)) for part in stage.parts}
        for stage in board.stages
    }


def predict(board: Board, stage: Stage, values: Mapping[str, float] | None = None) -> Prediction:
    """Return a stage's figures from its nodal curve, nominal or with other part values; a passive stage's as designed.

    Raises
    ------
    ValueError
        The curve has no peak with two half-power edges within a factor 1000 of the designed centre.
    """
    if stage.circuit == PASSIVE:
        return Prediction(*(stage.limits[quantity].designed for quantity in QUANTITIES))
    figures = _figures(board, stage, values)
    return Prediction(float(figures.f0[0]), float(figures.q[0]), float(figures.gain[0]))


def _figures(board: Board, stage: Stage, values: Mapping[str, float] | None) -> CurveFigures:
    node_in, node_out = taps(board, stage)
    centre = stage.limits["centre"].designed
    network = stage_network(board, stage, values)
    return network_figures(network, node_in=node_in, node_out=node_out, low=centre / 1e3, high=centre * 1e3)


def predicted_response(
    board: Board, stage: Stage, frequency: FloatArray, values: Mapping[str, float] | None = None
) -> ComplexArray:
    """Return a stage's nodal H(tap out)/H(tap in), (N,) for (N,) Hz."""
    if stage.circuit == PASSIVE:
        designed = predict(board, stage)
        theta = [log(designed.centre), log(designed.q), designed.gain, 0.0, 0.0, 0.0, 0.0]
        band: ComplexArray = band_response(np.array([theta]), frequency[None])[0]
        return band
    node_in, node_out = taps(board, stage)
    return stage_response(stage_network(board, stage, values), frequency, node_in=node_in, node_out=node_out)
