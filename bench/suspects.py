"""Which part of a board is suspected, in the words of a bench; nothing of a board that can be healthy."""

from collections.abc import Mapping, Sequence
from functools import partial
from math import isfinite

import numpy as np

from bandproof.analysis.curve import figure_slopes, network_figures
from bandproof.analysis.suspects import judged
from bandproof.analysis.tolerances import Circuit, Seen
from bandproof.analysis.types import FloatArray
from bandproof.bench.circuit import stage_network, taps
from bandproof.bench.suspect_words import suspects_of
from bandproof.bench.types import QUANTITIES, Board, Stage, StageResult, Suspect

__all__ = ["circuit_of", "seen_of", "suspected"]

_SEARCHED = 1e4  # times and by the designed centre: where the peak of a wrong part is looked for

_PRECISION = 1e-7  # of ln |H|: far below any U


def suspected(
    board: Board, results: Sequence[StageResult], circuits: Mapping[str, Circuit] | None = None
) -> dict[str, tuple[Suspect, ...]]:
    """Return what is suspected, by stage; what is about the whole board is with the first stage.

    Stages that have no figures, figures in doubt or no parts stated take no part.
    """
    sound = [result for result in results if _is_sound(result) and board.stage(result.name).parts]
    known = circuits or {}
    found = [
        known.get(result.name) or circuit_of(board, board.stage(result.name), _predicted(result)) for result in sound
    ]
    judgements = judged(found, [seen_of(result) for result in sound])
    return suspects_of(judgements, found, [result.name for result in sound])


def _is_sound(result: StageResult) -> bool:
    """Whether a stage's figures are there and not in doubt (then no probability of conformance is given)."""
    return all(
        isfinite(figure.measured) and figure.measured > 0.0 and isfinite(figure.conformance_probability)
        for figure in result.figures.values()
    )


def _predicted(result: StageResult) -> FloatArray:
    return np.log([result.figures[quantity].predicted for quantity in QUANTITIES])


def seen_of(result: StageResult) -> Seen:
    """Return a stage's figures and their covariance: the fit's for noise, the budget's other rows as they move them."""
    measured = np.array([result.figures[quantity].measured for quantity in QUANTITIES])
    covariance = _of_fit(result)
    rows = zip(*(result.budgets[quantity].rows[1:] for quantity in QUANTITIES), strict=True)
    for row in rows:
        moved = np.array([one.sensitivity * one.standard_uncertainty for one in row]) / measured
        covariance = covariance + np.outer(moved, moved)
    return Seen(np.log(measured), covariance)


def _of_fit(result: StageResult) -> FloatArray:
    """Return the covariance (3, 3) of ln f0, ln Q and ln |gain| from that of the fit's variables."""
    theta = np.array(result.theta)
    along = np.zeros((3, len(result.theta_covariance)))
    along[0, 0] = along[1, 1] = 1.0
    along[2, 2:4] = theta[2:4] / (theta[2:4] @ theta[2:4])
    covariance: FloatArray = along @ np.array(result.theta_covariance) @ along.T
    return covariance


def circuit_of(board: Board, stage: Stage, predicted: FloatArray) -> Circuit:
    """Return a stage as the analysis of suspects takes it; ``predicted`` (3,) are ln f0, ln Q, ln gain as drawn."""
    values = np.array([part.value for part in stage.parts])
    sensitivities = partial(_sensitivities, board, stage)
    return Circuit(
        parts=tuple(part.name for part in stage.parts),
        kinds=tuple("capacitor" if part.name.startswith("C") else "resistor" for part in stage.parts),
        values=values,
        tolerances=np.array([part.tolerance for part in stage.parts]),
        nominal=predicted,
        slopes=sensitivities(values[None], predicted[None])[0],
        figures=partial(_figures, board, stage),
        sensitivities=sensitivities,
    )


def _table(stage: Stage, values: FloatArray) -> dict[str, FloatArray]:
    return {f"{stage.name}.{part.name}": column for part, column in zip(stage.parts, values.T, strict=True)}


def _sensitivities(board: Board, stage: Stage, values: FloatArray, figures: FloatArray) -> FloatArray:
    node_in, node_out = taps(board, stage)
    network = stage_network(board, stage)
    return figure_slopes(network, figures, node_in=node_in, node_out=node_out, values=_table(stage, values))


def _figures(board: Board, stage: Stage, values: FloatArray) -> FloatArray:
    """Return ln f0, ln Q, ln gain (K, 3) with other values (K, P), NaN where there is no band."""
    node_in, node_out = taps(board, stage)
    centre = stage.limits["centre"].designed
    try:
        found = network_figures(
            stage_network(board, stage),
            node_in=node_in,
            node_out=node_out,
            low=centre / _SEARCHED,
            high=centre * _SEARCHED,
            values=_table(stage, values),
            precision=_PRECISION,
        )
    except ValueError:  # one of them has no band: look at each half
        if len(values) == 1:
            return np.full((1, 3), np.nan)
        half = len(values) // 2
        return np.concatenate([_figures(board, stage, part) for part in (values[:half], values[half:])])
    return np.log(np.stack([found.f0, found.q, found.gain], axis=1))
