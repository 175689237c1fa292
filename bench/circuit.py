"""A board as a network: its stages' circuits joined, nominal or with drawn parts, and the figures predicted from it."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from bandproof.analysis.circuits import MfbParts, join, mfb_network
from bandproof.analysis.curve import CurveFigures, network_figures, stage_response
from bandproof.analysis.network import Network, OpAmp
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.types import Board, Quantity, Stage

__all__ = ["Prediction", "board_network", "draw_parts", "predict", "stage_network", "taps"]


@dataclass(frozen=True, slots=True)
class Prediction:
    """Figures by definition of a stage's nodal curve with the board's real op-amp: Hz, ratio, ratio."""

    centre: float
    q: float
    gain: float

    def __getitem__(self, quantity: Quantity) -> float:
        return float(getattr(self, quantity))


def stage_network(board: Board, stage: Stage, values: Mapping[str, float] | None = None) -> Network:
    """Return a stage's network between its taps' nodes; ``values`` replace parts by their name in the stage."""
    values = values or {}
    parts = MfbParts(**{part.name: values.get(part.name, part.value) for part in stage.parts})
    op_amp = OpAmp("U", "", "", "", gbw=board.op_amp.gbw, swing=board.op_amp.swing, slew=board.op_amp.slew)
    node_in, node_out = taps(board, stage)
    return mfb_network(f"{stage.name}.", parts, op_amp, node_in=node_in, node_out=node_out)


def board_network(board: Board, drawn: Mapping[str, Mapping[str, float]] | None = None) -> Network:
    """Return the whole board as one network driven at its first tap; ``drawn`` has part values by stage and name."""
    drawn = drawn or {}
    stages = [stage_network(board, stage, drawn.get(stage.name)) for stage in board.stages]
    return join(*stages, input=board.points[board.stages[0].tap_in].node)


def taps(board: Board, stage: Stage) -> tuple[str, str]:
    """Return the nodes a stage's response is taken between."""
    return board.points[stage.tap_in].node, board.points[stage.tap_out].node


def draw_parts(board: Board, seed: int) -> dict[str, dict[str, float]]:
    """Return part values by stage and name, uniform within tolerance, independent (common practice for a rehearsal)."""
    rng = np.random.default_rng([seed, 0x9A27])  # the second word keeps parts apart from the bench's own draws
    return {
        stage.name: {part.name: part.value * (1.0 + part.tolerance * rng.uniform(-1.0, 1.0)) for part in stage.parts}
        for stage in board.stages
    }


def predict(board: Board, stage: Stage, values: Mapping[str, float] | None = None) -> Prediction:
    """Return a stage's figures from its nodal curve, nominal or with other part values.

    Raises
    ------
    ValueError
        The curve has no peak with two half-power edges within a factor 1000 of the designed centre.
    """
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
    node_in, node_out = taps(board, stage)
    return stage_response(stage_network(board, stage, values), frequency, node_in=node_in, node_out=node_out)
