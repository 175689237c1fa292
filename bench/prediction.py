"""What a board's parts will make of its figures, before one is built: designed, textbook, nodal, and their spread.

Boards are drawn as a rehearsal draws them: parts uniform within tolerance, independent. Their figures are those of the
nodal curve by definition, in closed form (`analysis.one_pole`; tests hold both together).
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from bandproof.analysis.circuits import MfbParts, mfb_figures
from bandproof.analysis.one_pole import one_pole_figures
from bandproof.analysis.spread import Fraction, Spread, drawn, fraction, spread_of, variance_shares
from bandproof.analysis.standard_parts import part_sensitivities
from bandproof.analysis.types import BoolArray, FloatArray
from bandproof.bench.circuit import predict
from bandproof.bench.comparison import outside_by_design
from bandproof.bench.errors import BadInput
from bandproof.bench.types import QUANTITIES, Board, Limit, Quantity, Stage

__all__ = ["DRAWS", "PredictedBoards", "PredictedFigure", "PredictedStage", "predicted_boards"]

DRAWS = 10_000  # arbitrary: a yield of 99 % to 0.1 %
_APART = 0x9B5D  # keeps these draws apart from those of a rehearsal with the same seed


@dataclass(frozen=True, slots=True)
class PredictedFigure:
    """One figure of one stage: SI, ratios.

    ``textbook`` with an ideal op-amp, None where no parts are stated; ``nodal`` by definition with the board's op-amp;
    ``spread`` over the drawn boards; ``first_order`` its standard deviation by sensitivities, relative; ``shares`` of
    its variance by part; ``conforming`` the boards within the limits.
    """

    limit: Limit
    textbook: float | None
    nodal: float
    spread: Spread
    first_order: float
    shares: Mapping[str, float]
    conforming: Fraction


@dataclass(frozen=True, slots=True)
class PredictedStage:
    """One stage: its figures, the boards that have all of them within limits, what the drawing itself does not keep."""

    name: str
    figures: Mapping[Quantity, PredictedFigure]
    conforming: Fraction
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class PredictedBoards:
    """Drawn boards: ``true`` (K, F) are their figures, f0, Q, gain of each stage in turn, ``inside`` within limits."""

    stages: tuple[PredictedStage, ...]
    conforming: Fraction
    true: FloatArray
    inside: BoolArray
    seed: int


def predicted_boards(board: Board, *, draws: int = DRAWS, seed: int = 1) -> PredictedBoards:
    """Return what many boards of a drawing will be.

    Raises
    ------
    BadInput
        A stage's parts as drawn make no band.
    """
    rng = np.random.default_rng([seed, _APART])
    true = [_figures(board, stage, draws, rng) for stage in board.stages]
    inside = [_within(stage, figures) for stage, figures in zip(board.stages, true, strict=True)]
    stages = tuple(_stage(board, *one) for one in zip(board.stages, true, inside, strict=True))
    whole = np.concatenate(inside, axis=1)
    return PredictedBoards(stages, fraction(np.asarray(whole.all(axis=1))), np.concatenate(true, axis=1), whole, seed)


def _figures(board: Board, stage: Stage, draws: int, rng: np.random.Generator) -> FloatArray:
    """Return f0, Q, gain (K, 3) of drawn stages; a stage without stated parts is as designed."""
    if not stage.parts:
        return np.tile([stage.limits[quantity].designed for quantity in QUANTITIES], (draws, 1))
    values, tolerances = np.array([(part.value, part.tolerance) for part in stage.parts]).T
    table = dict(zip((part.name for part in stage.parts), drawn(values, tolerances, draws, rng).T, strict=True))
    return one_pole_figures(**table, gbw=board.op_amp.gbw).T


def _within(stage: Stage, figures: FloatArray) -> BoolArray:
    low, high = np.array([(stage.limits[name].lower, stage.limits[name].upper) for name in QUANTITIES]).T
    within: BoolArray = (low <= figures) & (figures <= high)
    return within


def _stage(board: Board, stage: Stage, true: FloatArray, inside: BoolArray) -> PredictedStage:
    try:
        nodal = predict(board, stage)
    except ValueError as problem:
        raise BadInput(f"stage {stage.name!r}: its circuit makes no band ({problem}); check the parts") from problem
    textbook = dict[Quantity, float]()
    first_order, shares = np.zeros(3), np.zeros((3, 0))
    if stage.parts:
        parts = MfbParts(**{part.name: part.value for part in stage.parts})
        ideal = mfb_figures(parts)
        textbook = {"centre": ideal.f0, "q": ideal.q, "gain": ideal.gain}
        slopes = part_sensitivities(parts, gbw=board.op_amp.gbw)
        tolerances = np.array([part.tolerance for part in stage.parts])
        first_order, shares = variance_shares(np.array([slopes[part.name] for part in stage.parts]).T, tolerances)
    figures = {
        quantity: PredictedFigure(
            limit=stage.limits[quantity],
            textbook=textbook.get(quantity),
            nodal=nodal[quantity],
            spread=spread_of(true[:, i]),
            first_order=float(first_order[i]),
            shares={part.name: float(share) for part, share in zip(stage.parts, shares[i], strict=True)},
            conforming=fraction(inside[:, i]),
        )
        for i, quantity in enumerate(QUANTITIES)
    }
    notes = tuple(f"{stage.name}: {note}" for note in outside_by_design(stage, nodal))
    return PredictedStage(stage.name, figures, fraction(np.asarray(inside.all(axis=1))), notes)
