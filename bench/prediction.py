"""What a board's parts will make of its figures, before one is built: designed, textbook, nodal, and their spread.

Boards are drawn as a rehearsal draws them: parts uniform within tolerance, independent. Their figures are those of the
nodal curve by definition, in closed form (`analysis.one_pole`; tests hold both together).
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

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

    ``nodal`` by definition with the board's op-amp, ``textbook`` with an ideal one; ``spread`` over the drawn boards;
    ``first_order`` its standard deviation by sensitivities, relative; ``shares`` of its variance by part;
    ``conforming`` the boards within the limits. None where no parts are stated: nothing is drawn then.
    """

    limit: Limit
    nodal: float
    textbook: float | None = None
    spread: Spread | None = None
    first_order: float | None = None
    shares: Mapping[str, float] = field(default_factory=dict)
    conforming: Fraction | None = None


@dataclass(frozen=True, slots=True)
class PredictedStage:
    """One stage: its figures, the boards that have all of them within limits, what the drawing itself does not keep."""

    name: str
    figures: Mapping[Quantity, PredictedFigure]
    conforming: Fraction | None
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class PredictedBoards:
    """Drawn boards: ``true`` (K, F) are their figures, f0, Q, gain of each stage in turn, ``inside`` within limits.

    Figures of a stage without stated parts are NaN, and not part of what conforms.
    """

    stages: tuple[PredictedStage, ...]
    conforming: Fraction | None
    true: FloatArray
    inside: BoolArray
    seed: int

    @property
    def known(self) -> BoolArray:
        """Which figures (F,) are of stages with stated parts."""
        known: BoolArray = np.isfinite(self.true[0])
        return known


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
    known = [one for stage, one in zip(board.stages, inside, strict=True) if stage.parts]
    conforming = fraction(np.asarray(np.concatenate(known, axis=1).all(axis=1))) if known else None
    return PredictedBoards(stages, conforming, np.concatenate(true, axis=1), np.concatenate(inside, axis=1), seed)


def _figures(board: Board, stage: Stage, draws: int, rng: np.random.Generator) -> FloatArray:
    """Return f0, Q, gain (K, 3) of drawn stages, NaN where no parts are stated."""
    if not stage.parts:
        return np.full((draws, 3), np.nan)
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
    notes = tuple(f"{stage.name}: {note}" for note in outside_by_design(stage, nodal))
    if not stage.parts:
        bare = {quantity: PredictedFigure(stage.limits[quantity], nodal[quantity]) for quantity in QUANTITIES}
        return PredictedStage(stage.name, bare, None, notes)
    parts = MfbParts(**{part.name: part.value for part in stage.parts})
    ideal = mfb_figures(parts)
    slopes = part_sensitivities(parts, gbw=board.op_amp.gbw)
    tolerances = np.array([part.tolerance for part in stage.parts])
    first_order, shares = variance_shares(np.array([slopes[part.name] for part in stage.parts]).T, tolerances)
    figures = {
        quantity: PredictedFigure(
            limit=stage.limits[quantity],
            nodal=nodal[quantity],
            textbook=textbook,
            spread=spread_of(true[:, i]),
            first_order=float(first_order[i]),
            shares={part.name: float(share) for part, share in zip(stage.parts, shares[i], strict=True)},
            conforming=fraction(inside[:, i]),
        )
        for i, (quantity, textbook) in enumerate(zip(QUANTITIES, (ideal.f0, ideal.q, ideal.gain), strict=True))
    }
    return PredictedStage(stage.name, figures, fraction(np.asarray(inside.all(axis=1))), notes)
